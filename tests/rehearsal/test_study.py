"""Contenders read on chunks: as column by column, the same whoever runs them, and honest coverage."""

from __future__ import annotations

import pickle
from dataclasses import replace

import numpy as np
import pytest

from clingstone.covariance.fits import Fits

# `pickle` as processes use it needs what the engine registers.
from clingstone.rehearsal import engine as _engine  # noqa: F401
from clingstone.rehearsal import study as room
from clingstone.rehearsal.drawn import Drawn
from clingstone.rehearsal.study import FIELDS, Contender, Counts, Job, read, study, without
from clingstone.rehearsal.tallies import tallies
from clingstone.rehearsal.truths import draw
from clingstone.remedies.gls import Gls
from clingstone.remedies.sandwich import ClusterRobust
from rehearsal.worlds import stream, study_of, trial, truth_of, wells

PLAIN = (("ordinary", ""), ("cluster-robust", "clinic"), ("mixed-intercept", "clinic"))


def coverage(found, B=4000):
    """(contender, focus row) coverage under the first truth."""
    counts = found.empty()
    for job in found.jobs(B):
        if job.truth == 0:
            counts = counts.plus(found.run(job))
    return counts.sums[:, :, FIELDS.index("covered")] / counts.size


@pytest.mark.parametrize(
    ("world", "wanted"),
    [
        (trial, (*PLAIN, ("heteroscedasticity-robust", ""))),
        (stream, (("ordinary", ""), ("ar1", ""), ("hac", ""))),
        (wells, (("ordinary", ""),)),
    ],
)
def test_a_batch_is_read_as_its_columns_one_by_one(world, wanted):
    f = world()
    node = f.full_node
    found = study_of(f, [truth_of(f, node)], *wanted)
    many = Fits(draw(found.truths[0], f, np.random.default_rng(0), 6), f.run)
    for contender in found.contenders:
        batch = read(contender, many)
        for b in range(6):
            one = read(contender, Fits(many.response.column(b), f.run))
            width = float((one.high - one.low).min())
            for name in ("estimate", "low", "high"):
                got, want = getattr(batch, name)[:, b], getattr(one, name)[:, 0]
                # A search of one column ends about 3e-7 from θ̂ (the root of what rounding leaves).
                assert got == pytest.approx(want, rel=1e-6, abs=2e-6 * width)
            assert np.array_equal(batch.rejected[:, b], one.rejected[:, 0])


def test_places_are_read_from_a_shared_grid_and_agree_where_the_likelihood_is_not_flat():
    f = wells()
    found = study_of(f, [truth_of(f, f.full_node)], ("spatial-gls", ""))
    many = Fits(draw(found.truths[0], f, np.random.default_rng(0), 8), f.run)
    batch, off = read(found.contenders[0], many), 0
    for b in range(8):
        one = read(found.contenders[0], Fits(many.response.column(b), f.run))
        width = float((one.high - one.low)[0, 0])
        off += abs(batch.low[0, b] - one.low[0, 0]) + abs(batch.high[0, b] - one.high[0, 0]) > 0.01 * width
    # A field that has all but gone is put at zero by the grid, and its df with it (see Fits).
    assert off <= 2


def test_an_exact_procedure_covers_what_it_says():
    """Least squares under independent normal rows: t is exact, so coverage is 0.95 within its error."""
    f = trial()
    found = study_of(f, [truth_of(f, [])], ("ordinary", ""))
    assert coverage(found, 8000) == pytest.approx(np.full((1, 2), 0.95), abs=4 * np.sqrt(0.95 * 0.05 / 8000))


def test_few_clusters_with_a_normal_quantile_fail_as_is_known():
    """Six clusters, an arm by cluster: CR0 with 1.96 covers far too little, CR2 with its df nearly what it
    says (Cameron & Miller 2015, section VI, show rejection far above 5 % with so few clusters)."""
    f = trial(G=6, m=12, icc=0.3)
    found = study_of(f, [truth_of(f, ["group:clinic"], theta=[-0.8])], ("cluster-robust", "clinic"))
    naive = replace(ClusterRobust(kind="CR0", df="normal"), at="clinic")
    found = replace(found, contenders=(*found.contenders, Contender(naive, naive.prepare(f.design), (1, 2))))
    own, normal = coverage(found)[:, 0]
    assert normal < 0.85
    assert 0.92 < own < 0.985


def test_a_short_series_fails_without_a_correction_and_by_a_normal_quantile():
    """A trend in 20 rows with ρ = 0.7: rejection at 5 % is about .39 by least squares, .15 by a normal
    quantile after REML, .07 with Satterthwaite's df (our own dense simulation of 1,500 series)."""
    f = stream(n=20, rho=0.6)
    truth = truth_of(f, ["serial"], theta=[np.arctanh(0.7)])
    found = study_of(f, [truth], ("ordinary", ""), ("ar1", ""))
    plain = replace(Gls("ar1", df="normal"), limits=f.run.limits)
    found = replace(
        found, contenders=(*found.contenders, Contender(plain, plain.prepare(f.design, None), (1, 2)))
    )
    ordinary, own, normal = 1 - coverage(found, 1500)[:, 0]
    assert ordinary == pytest.approx(0.39, abs=0.06)
    assert normal == pytest.approx(0.15, abs=0.05)
    assert own == pytest.approx(0.067, abs=0.035)


def test_sums_are_drawn_when_nobody_asks_for_rows_and_rows_otherwise():
    f = trial()
    as_fitted = truth_of(f, ["group:clinic"])
    other = truth_of(f, ["group:clinic"], "unequal spread")
    lean = study_of(f, [as_fitted, other], *PLAIN)
    assert [lean.summed_by(t) for t in lean.truths] == ["clinic", None]
    rows = study_of(f, [as_fitted], *PLAIN, ("heteroscedasticity-robust", ""))
    assert rows.summed_by(as_fitted) is None
    # Both ways the coverage is the same up to Monte-Carlo error.
    a = coverage(lean, 3000)
    b = coverage(without(rows, [0, 1, 2]), 3000)
    both = study_of(f, [other], *PLAIN)
    assert a == pytest.approx(b, abs=0.03)
    assert isinstance(room.draw_summed(as_fitted, f, "clinic", np.random.default_rng(0), 2), Drawn)
    assert both.summed_by(other) is None


def test_counts_do_not_depend_on_who_runs_them_or_in_which_order():
    f = trial()
    found = study_of(f, [truth_of(f, ["group:clinic"])], *PLAIN)
    jobs = found.jobs(1200)
    assert [job.size for job in jobs] == [500, 500, 200]
    sent = pickle.loads(pickle.dumps(found))  # as a worker gets it
    forwards = [found.run(job) for job in jobs]
    backwards = [sent.run(job) for job in reversed(jobs)][::-1]
    for a, b in zip(forwards, backwards, strict=True):
        assert a.sums.tobytes() == b.sums.tobytes()
        assert a.apart.tobytes() == b.apart.tobytes()


def test_chunks_follow_the_design_alone():
    f = trial()
    found = study_of(f, [truth_of(f, []), truth_of(f, ["group:clinic"])], ("ordinary", ""))
    assert found.chunk == 500
    assert [(j.truth, j.chunk) for j in found.jobs(700)] == [(0, 0), (1, 0), (0, 1), (1, 1)]


def test_paired_counts_are_of_the_same_replicates():
    f = trial(icc=0.5)
    found = study_of(f, [truth_of(f, ["group:clinic"])], *PLAIN)
    counts = found.run(Job(0, 0, 400))
    covered = counts.sums[:, :, FIELDS.index("covered")]
    for a in range(3):
        assert counts.apart[a, a] == pytest.approx(np.zeros(2))
        for b in range(3):
            assert counts.apart[a, b] - counts.apart[b, a] == pytest.approx(covered[a] - covered[b])


def test_a_contender_that_fails_on_one_column_loses_that_column_only(monkeypatch):
    f = trial()
    found = study_of(f, [truth_of(f, ["group:clinic"])], ("mixed-intercept", "clinic"))
    kind = type(found.contenders[0].ready)
    plain, seen = kind.fit, []

    def sometimes(self, fits):
        seen.append(fits.response.B)
        if fits.response.B > 1 or len(seen) == 3:
            raise np.linalg.LinAlgError("no factor")
        return plain(self, fits)

    monkeypatch.setattr(kind, "fit", sometimes)
    counts = found.run(Job(0, 0, 5))
    assert seen == [5, 1, 1, 1, 1, 1]
    assert counts.sums[0, 0, FIELDS.index("held")] == 4
    row = tallies(found, {0: counts})[0]
    assert row.failures == 1
    assert row.coverage <= 0.8  # an interval that was not had did not cover


def test_remedies_that_cannot_be_carried_are_left_out_with_their_reason():
    f = trial()
    found, left = study(f, [truth_of(f, [])], [("ordinary", ""), ("ar1", "")])
    assert [c.remedy.id for c in found.contenders] == ["ordinary"]
    assert left[0][:2] == ("ar1", "")
    assert left[0][2]


def test_counts_add():
    one = Counts(2, np.ones((1, 1, 9)), np.zeros((1, 1, 1)))
    both = one.plus(one)
    assert (both.size, both.sums[0, 0, 0]) == (4, 2.0)
