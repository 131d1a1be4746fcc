"""From counts to words and advice; stops, folders, engines."""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from dataclasses import replace

import numpy as np
import pytest

from clingstone.advice.entries import Score, Scores
from clingstone.needs import InputError, NotSupported
from clingstone.rehearsal import cost
from clingstone.rehearsal import rehearsal as room
from clingstone.rehearsal.engine import Engine
from clingstone.rehearsal.path import Paths
from clingstone.rehearsal.rehearsal import Plan, rehearse, settled, stages
from clingstone.rehearsal.study import FIELDS, Counts, Job
from clingstone.rehearsal.tallies import binomial, pairs, scores, tallies
from rehearsal.worlds import study_of, trial, truth_of, wells

PLAIN = (("ordinary", ""), ("cluster-robust", "clinic"), ("mixed-intercept", "clinic"))


def plan(replicates: int = 1500, wanted=PLAIN, icc: float = 0.25) -> Plan:
    f = trial(icc=icc)
    found = study_of(
        f, [truth_of(f, ["group:clinic"]), truth_of(f, ["group:clinic"], "unequal spread")], *wanted
    )
    found = replace(found, truths=(found.truths[0], replace(found.truths[1], name="unequal spread")))
    return Plan(found, replicates, ())


def counts_of(rows, size=100):
    """Counts of contenders × one term from {field: value} per contender."""
    sums = np.array([[[row.get(name, 0.0) for name in FIELDS]] for row in rows])
    return Counts(size, sums, np.zeros((len(rows), len(rows), 1)))


# ---- numbers -----------------------------------------------------------------------------------


def test_a_tally_by_hand():
    found = replace(plan().study, terms=("arm",))
    found = replace(found, contenders=tuple(replace(c, pick=(1,)) for c in found.contenders[:2]))
    rows = [
        {
            "held": 100,
            "covered": 90,
            "rejected": 10,
            "width": 200,
            "width²": 404,
            "estimate": 5,
            "estimate²": 25,
        },
        {
            "held": 80,
            "covered": 76,
            "rejected": 4,
            "width": 320,
            "width²": 1280,
            "boundary": 8,
            "unsettled": 2,
        },
    ]
    ordinary, other = tallies(found, {0: counts_of(rows)})
    assert (ordinary.coverage, ordinary.rejection, ordinary.width, ordinary.relative) == (0.9, 0.1, 2.0, 1.0)
    assert ordinary.width_mcse == pytest.approx(np.sqrt(4.04 - 4) / 10)
    assert ordinary.bias == pytest.approx(0.05 / np.sqrt(0.25 - 0.0025))
    # Twenty replicates without an interval count against coverage, not against width.
    assert (other.failures, other.coverage, other.width, other.relative) == (20, 0.76, 4.0, 2.0)
    assert (other.boundary, other.unsettled) == (0.1, 0.025)
    assert binomial(0.5, 96) == pytest.approx(0.05)
    assert binomial(1.0, 96) > 0


def test_pairs_by_hand():
    found = replace(plan().study, terms=("arm",))
    found = replace(found, contenders=tuple(replace(c, pick=(1,)) for c in found.contenders[:2]))
    apart = np.array([[[0.0], [3.0]], [[11.0], [0.0]]])
    (pair,) = pairs(found, {0: replace_apart(counts_of([{}, {}]), apart)})
    assert (pair.only_first, pair.only_second, pair.difference) == (3, 11, -0.08)
    assert pair.mcse == pytest.approx(np.sqrt((0.14 - 0.0064) / 100))


def replace_apart(counts: Counts, apart) -> Counts:
    return Counts(counts.size, counts.sums, apart)


def test_scores_take_the_smallest_coverage_over_truths_and_terms():
    found = rehearse(plan(500))
    for score in found.scores.rows:
        own = found.of(score.remedy, score.at)
        assert len(own) == 4
        assert score.coverage == min(t.coverage for t in own)
        assert score.width == pytest.approx(np.mean([t.relative for t in own]))
    assert found.scores.get("ordinary", "").width == pytest.approx(1.0)
    assert found.to_frame().shape[0] == len(found.tallies)


def test_an_ordinary_interval_that_ignores_clinics_is_found_out():
    found = rehearse(plan(1000, icc=0.4))
    assert not found.scores.adequate("ordinary", "")
    assert found.scores.adequate("mixed-intercept", "clinic")


# ---- stopping ----------------------------------------------------------------------------------


def test_looks_are_at_fixed_numbers_of_whole_chunks():
    jobs = plan(10_000).study.jobs(10_000)
    found = stages(jobs, 500, True)
    assert [len(s) for s in found] == [4, 4, 8, 16, 8]  # two truths: 1,000, 2,000, 4,000, 8,000, 10,000
    assert [job for stage in found for job in stage] == list(jobs)
    assert stages(jobs, 500, False) == [jobs]


def test_a_settled_ranking_stops_and_says_so():
    found = rehearse(plan(30_000, icc=0.5, wanted=PLAIN[:1]), stop_early=True)
    assert found.replicates == 1000
    assert "settled" in found.stopped
    full = rehearse(plan(1000, icc=0.5, wanted=PLAIN[:1]))
    assert full.tallies == found.tallies


def test_what_is_clear_and_what_is_not():
    found = plan().study
    found = replace(
        found, terms=("arm",), contenders=tuple(replace(c, pick=(1,)) for c in found.contenders[:1])
    )

    def clear(covered: int, size: int) -> bool:
        return settled(found, {0: counts_of([{"held": size, "covered": covered}], size)})

    assert clear(80, 100)  # 0.80 is far below 0.94
    assert clear(980, 1000)
    assert not clear(94, 100)
    assert clear(94_000, 100_000)  # known well enough whatever it is


# ---- folders and engines -----------------------------------------------------------------------


def test_a_stopped_rehearsal_goes_on_where_it_was(tmp_path, monkeypatch):
    whole = rehearse(plan(1500))
    kind = type(plan().study)
    plain, runs = kind.run, []

    def stops(self, job):
        if len(runs) == 3:
            raise KeyboardInterrupt
        runs.append(job)
        return plain(self, job)

    monkeypatch.setattr(kind, "run", stops)
    with pytest.raises(KeyboardInterrupt):
        rehearse(plan(1500), folder=tmp_path)
    monkeypatch.setattr(kind, "run", lambda self, job: runs.append(job) or plain(self, job))
    assert rehearse(plan(1500), folder=tmp_path) == whole
    assert len(runs) == len(set(runs)) == 6
    # A damaged chunk is made again; more replicates only add chunks.
    next(tmp_path.glob("chunks-0-1-500.npz")).write_bytes(b"not a chunk")
    assert rehearse(plan(1500), folder=tmp_path) == whole
    assert len(runs) == 7


@pytest.mark.slow
def test_whole_paths_go_on_where_they_were_whoever_walks_them(tmp_path, monkeypatch):
    monkeypatch.setattr("clingstone.rehearsal.path.CHUNK", 3)
    small = plan(20, wanted=PLAIN[:1])
    whole = rehearse(small, whole_path=5)
    assert {walk.replicates for walk in whole.walks} == {10}
    plain, runs = Paths.run, []

    def stops(self, job):
        if len(runs) == 3:
            raise KeyboardInterrupt
        runs.append(job)
        return plain(self, job)

    monkeypatch.setattr(Paths, "run", stops)
    with pytest.raises(KeyboardInterrupt):
        rehearse(small, whole_path=5, folder=tmp_path)
    monkeypatch.setattr(Paths, "run", lambda self, job: runs.append(job) or plain(self, job))
    assert rehearse(small, whole_path=5, folder=tmp_path) == whole
    assert len(runs) == len(set(runs)) == 4
    (tmp_path / "paths-0-0-3.npz").write_bytes(b"not a chunk")
    assert rehearse(small, whole_path=5, folder=tmp_path) == whole
    assert len(runs) == 5
    monkeypatch.setattr(Paths, "run", plain)
    assert rehearse(small, whole_path=5, engine=Engine("cores", workers=2)) == whole


def test_a_folder_of_another_rehearsal_is_refused(tmp_path):
    rehearse(plan(100), folder=tmp_path)
    with pytest.raises(InputError, match="another rehearsal"):
        rehearse(plan(100, wanted=PLAIN[:2]), folder=tmp_path)


def test_two_processes_give_the_bytes_of_one():
    assert rehearse(plan(1200), engine=Engine("cores", workers=2)) == rehearse(plan(1200))


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("fast",), "not one of 'here', 'cores', 'dask'"),
        (("cores", 0), "not a number of processes"),
        (("here", None, "tcp://x:1"), "the engine is 'here'"),
        (("dask",), "no scheduler was named"),
    ],
)
def test_an_engine_that_cannot_be_is_refused(arguments, words):
    with pytest.raises(InputError, match=words):
        Engine(*arguments)


def test_a_scheduler_that_is_not_there_is_named(monkeypatch):
    pytest.importorskip("distributed")
    monkeypatch.setattr("clingstone.rehearsal.engine.PATIENCE", 1)
    with pytest.raises(InputError, match=r"no Dask scheduler answered at tcp://127\.0\.0\.1:9 "):
        rehearse(plan(10), engine=Engine("dask", scheduler="tcp://127.0.0.1:9"))


def test_without_the_package_the_engine_says_how_to_get_it(monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(NotSupported, match="distributed is not installed") as error:
        rehearse(plan(10), engine=Engine("dask", scheduler="tcp://127.0.0.1:9"))
    assert "clingstone[dask]" in error.value.hint


def test_a_cluster_that_loses_a_worker_gives_the_same_numbers():
    distributed = pytest.importorskip("distributed")
    made = plan(6000, wanted=(*PLAIN, ("heteroscedasticity-robust", "")))
    alone = rehearse(made)
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
    ) as cluster:
        with distributed.Client(cluster, set_as_default=False) as client:
            pids = list(client.run(os.getpid).values())
        killed = threading.Event()

        def lose(label, done, total):
            if label == "rehearsing" and done >= 3 and not killed.is_set():
                os.kill(pids[0], signal.SIGKILL)
                killed.set()

        watched = replace(made, study=replace(made.study, report=lose))
        shared = rehearse(watched, engine=Engine("dask", scheduler=cluster.scheduler_address))
    assert killed.is_set()
    assert shared == alone


# ---- cost --------------------------------------------------------------------------------------


def test_the_size_of_a_short_rehearsal_comes_from_a_formula_not_from_the_clock(monkeypatch):
    def no_clock():
        raise AssertionError("a clock was read")

    for name in ("time", "perf_counter", "monotonic", "process_time"):
        monkeypatch.setattr(time, name, no_clock)
    monkeypatch.setattr(cost, "SHORT", 3e5)
    found = plan(wanted=(*PLAIN, ("wild-cluster-bootstrap", "clinic"))).study
    kept, left, count = cost.affordable(found)
    assert cost.affordable(found) == (kept, left, count)
    assert kept == [0, 1, 2]
    assert left[0][0] == "wild-cluster-bootstrap"
    assert "no time" in left[0][2]
    assert count == cost.MOST


def test_what_costs_more_is_rehearsed_less(monkeypatch):
    found = plan().study
    price = [cost.of(c, found) for c in found.contenders]
    assert price[0] < price[1] < price[2]
    monkeypatch.setattr(cost, "SHORT", 1e5)
    _, _, fewer = cost.affordable(found)
    assert cost.FEWEST <= fewer < cost.MOST


def test_a_resampling_must_leave_the_others_enough_replicates(monkeypatch):
    found = plan(wanted=(*PLAIN, ("wild-cluster-bootstrap", "clinic"))).study
    each = cost.of_draw(found) + sum(cost.of(c, found) for c in found.contenders)
    for room_for, kept in ((cost.GOOD - 5, [0, 1, 2]), (cost.GOOD + 5, [0, 1, 2, 3])):
        monkeypatch.setattr(cost, "SHORT", each * len(found.truths) * room_for)
        chosen, _, count = cost.affordable(found)
        assert chosen == kept
        assert count >= cost.GOOD // 50 * 50


def test_the_correction_of_a_map_finds_room_in_a_short_rehearsal():
    f = wells(240)
    at = [("ordinary", ""), ("spatial-gls", ""), ("spatial-hac", "")]
    found = study_of(f, [truth_of(f, ["spatial"])] * 6, *at)
    kept, left, count = cost.affordable(found)
    assert kept == [0, 1, 2]
    assert not left
    assert count >= 200


# ---- advice ------------------------------------------------------------------------------------


def test_only_an_advice_that_was_rehearsed_can_be_given_up():
    found = rehearse(plan(200))

    class Advised:
        remedy, at = "joint", ""

    assert room.scores_for(found, Advised()) is None
    Advised.remedy, Advised.at = "cluster-robust", "clinic"
    table = room.scores_for(found, Advised())
    assert {r.remedy for r in table.rows} == {"ordinary", "cluster-robust", "mixed-intercept"}


def test_the_reason_says_how_well_it_held_and_only_when_it_did():
    found = rehearse(plan(400))
    rows = (
        Score("ordinary", "", 0.7, 0.02, 1.0),
        Score("cluster-robust", "clinic", 0.948, 0.011, 1.6),
    )
    found = replace(found, scores=Scores(rows))

    class Advised:
        remedy, at = "cluster-robust", "clinic"

    why = room.reason(found, Advised(), "cluster-robust, by clinic")
    assert "at least 94.8 % of replicates under each of 2 error models" in why.sentence
    assert "Monte-Carlo error 1.1 points" in why.sentence
    Advised.remedy, Advised.at = "ordinary", ""
    assert room.reason(found, Advised(), "ordinary") is None  # it did not hold what it promises
    Advised.remedy = "joint"
    assert room.reason(found, Advised(), "joint") is None  # it was not rehearsed


def test_scores_of_a_table_are_read_by_the_rule():
    rows = tallies(plan().study, {0: plan().study.run(Job(0, 0, 50))})
    assert scores(rows, 0.9).confidence == 0.9


@pytest.mark.parametrize("replicates", [0, -3, 10**8])
def test_a_number_that_cannot_be_rehearsed_is_refused(replicates):
    with pytest.raises(InputError, match="cannot be rehearsed"):
        room.checked(replicates)


def test_residuals_alone_cannot_be_rehearsed():
    f = trial()
    blind = replace(f.design, known=False)
    f.response.__dict__["design"] = blind
    with pytest.raises(NotSupported, match="only residuals"):
        room.planned(f, None, [])
