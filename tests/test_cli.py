"""The command line: options from Settings, what goes to which stream, exit status.

Where only the shell is on trial, a stand-in takes the place of the verbs and records how it is called.
"""

from __future__ import annotations

import inspect
import shlex
import subprocess
import sys
from collections.abc import Callable
from dataclasses import fields
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

import clingstone
import plain
from clingstone import cli
from clingstone.cli import screen
from clingstone.demo import DEMOS
from clingstone.examination import settings_of
from clingstone.needs import InputError, NotSupported
from clingstone.options import field_help, in_shell, settings_options
from clingstone.results import from_json, to_json
from clingstone.run import Settings
from clingstone.summary import CaseSummary
from tests.intake.test_job import FULL


class Verbs:
    """Stand-in for clingstone.examination: records calls, saves one file, says one line."""

    def __init__(self) -> None:
        self.calls: list[tuple[Path, dict[str, Any]]] = []
        self.saved: list[tuple[Path, bool]] = []
        self.error: Exception | None = None
        self.agrees = True

    def examine(self, data: Path, **arguments: Any) -> SimpleNamespace:
        self.calls.append((data, arguments))
        if self.error is not None:
            raise self.error
        return _Said(self)

    def replay(self, folder: Path, data: Path | None = None) -> tuple[bool, tuple[str, ...]]:
        self.calls.append((folder, {"data": data}))
        if self.error is not None:
            raise self.error
        return self.agrees, (f"replayed {folder}",)


class _Said(SimpleNamespace):
    def __init__(self, verbs: Verbs) -> None:
        super().__init__(results=plain.results())
        self._verbs = verbs

    def save(self, folder: Path, overwrite: bool = False) -> None:
        self._verbs.saved.append((folder, overwrite))

    def __str__(self) -> str:
        return "Rows hang together: −3.1 (−4.5 to −1.7)"


@pytest.fixture
def verbs(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Verbs:
    stand_in = Verbs()
    monkeypatch.setitem(sys.modules, "clingstone.examination", stand_in)  # type: ignore[arg-type]
    monkeypatch.chdir(tmp_path)
    return stand_in


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Callable[[str], tuple[int, str, str]]:
    """Run the command line in this process: exit status, standard output, standard error."""

    def call(line: str) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as stopped:
            cli.main(shlex.split(line))
        out, err = capsys.readouterr()
        return int(stopped.value.code or 0), out, err

    return call


Run = Callable[[str], tuple[int, str, str]]


# ---- options -----------------------------------------------------------------------------------


def test_every_setting_has_its_option_and_its_help(run: Run) -> None:
    status, out, _ = run("examine --help")
    assert status == 0
    shown = " ".join(out.split())
    helps = field_help()
    for each in fields(Settings):
        assert f"--{each.name.replace('_', '-')} " in shown, each.name
        assert len(helps.get(each.name, "")) > 8, f"the docstring of Settings says nothing of {each.name}"
    assert all(len(line) <= 80 for line in out.splitlines())


def test_left_alone_the_options_are_the_defaults_of_settings(verbs: Verbs, run: Run) -> None:
    assert run("examine a.csv --model 'y ~ x'")[0] == 0
    data, arguments = verbs.calls[0]
    arguments.pop("progress")
    assert data == Path("a.csv")
    assert Settings(**arguments) == Settings(model="y ~ x")


def test_every_option_reaches_its_setting(verbs: Verbs, run: Run) -> None:
    status, _, err = run(
        "examine a.csv --model 'y ~ x + C(arm) + log(\"odd\")' --residual e --sheet readings --wide bp "
        "--wide hr --group judge --group wine --time t --series s "
        "--coords lon lat --lonlat --neighbours knn:6 --weights w --weights-kind frequency "
        "--focus x --focus 'arm: late' --contrasts 'late − early: visit[late]=1, visit[early]=-1' "
        "--contrasts 'half \"x\": x=0.5' --means visit --unadjusted "
        "--assigned arm=clinic --assigned 'dose=ward within clinic' --sampled school "
        "--missing own-group --ties replicate --confidence 0.9 --alternative greater --material 0.9 1.2 "
        "--rehearsal 400 --seed 7"
    )
    assert (status, err) == (0, "")
    arguments = verbs.calls[0][1]
    assert arguments.pop("progress") is None
    assert set(arguments) == {each.name for each in fields(Settings)}
    assert settings_of(arguments) == FULL


def test_examine_in_python_has_the_same_arguments() -> None:
    signature = inspect.signature(clingstone.examine).parameters
    assert list(signature) == ["data", *(each.name for each in fields(Settings)), "progress"]
    for each in fields(Settings):
        assert signature[each.name].default == each.default, each.name


def test_one_group_is_a_word_and_lonlat_can_be_denied(verbs: Verbs, run: Run) -> None:
    run("examine a.csv --group hospital/ward --no-lonlat --rehearsal none")
    arguments = verbs.calls[0][1]
    assert (arguments["group"], arguments["lonlat"], arguments["rehearsal"]) == (
        "hospital/ward",
        False,
        "none",
    )


def test_help_and_reading_come_from_the_docstring_of_settings() -> None:
    helps = field_help()
    assert helps["time"] == "Column of time."
    assert helps["series"] == "Column that says which rows form one ordered series."
    assert helps["neighbours"].startswith('"knn" or "band", with a number')
    assert {option.name: option.metavar for option in settings_options()}["ties"] == "stop|replicate|mean"


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("--contrasts 'late visit=1'", "--contrasts 'late visit=1' cannot be read"),
        ("--contrasts 'late: visit'", "cannot be read"),
        ("--contrasts 'late: visit=one'", "cannot be read"),
        ("--assigned arm", "--assigned 'arm' cannot be read"),
        ("--assigned 'arm=clinic within '", "cannot be read"),
    ],
)
def test_a_mapping_that_cannot_be_read_says_how_to_write_it(
    verbs: Verbs, run: Run, line: str, message: str
) -> None:
    status, out, err = run(f"examine a.csv {line}")
    assert (status, out) == (2, "")
    assert message in err
    assert "Write it as" in err
    assert verbs.calls == []


@pytest.mark.parametrize(
    "line", ["--coords x,y --focus a", "--coords x y --focus a", "--focus a --coords x,y"]
)
def test_two_coordinates_may_be_one_word(verbs: Verbs, run: Run, line: str) -> None:
    assert run(f"examine a.csv {line}")[0] == 0
    arguments = verbs.calls[0][1]
    assert (arguments["coords"], arguments["focus"]) == (("x", "y"), ("a",))


def test_a_comma_in_the_name_of_a_column_stays(verbs: Verbs, run: Run) -> None:
    assert run("examine a.csv --coords 'x,m' 'y,m'")[0] == 0
    assert verbs.calls[0][1]["coords"] == ("x,m", "y,m")


@pytest.mark.parametrize(
    "line",
    [
        "examine a.csv --modle y",
        "examine",
        "examine a.csv --confidence wide",
        "examine a.csv --coords x",
        "fit a",
    ],
)
def test_a_wrong_call_is_status_2_on_standard_error(verbs: Verbs, run: Run, line: str) -> None:
    status, out, err = run(line)
    assert (status, out) == (2, "")
    assert err
    assert "Traceback" not in err
    assert verbs.calls == []


# ---- a job file ----------------------------------------------------------------------------------


def test_a_job_file_gives_data_and_options_and_the_line_wins(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "jobs").mkdir()
    (tmp_path / "jobs" / "study.toml").write_text(
        'data = "../clinics.csv"\nmodel = "y ~ x"\ngroup = ["judge", "wine"]\nseed = 7\nlonlat = true\n'
        "[contrasts.late]\nx = 1\n"
    )
    status, out, err = run("examine jobs/study.toml --group clinic --no-lonlat --time t")
    assert (status, err) == (0, "")
    data, arguments = verbs.calls[0]
    arguments.pop("progress")
    assert data == tmp_path / "clinics.csv" or data == Path("clinics.csv")
    assert arguments == {
        "model": "y ~ x",
        "group": "clinic",
        "seed": 7,
        "lonlat": False,
        "time": "t",
        "contrasts": {"late": {"x": 1.0}},
    }
    assert "in  clinics-clingstone/" in out
    run("examine jobs/study.toml --seed 0")  # given on the line, be it as the default
    assert verbs.calls[1][1]["seed"] == 0


def test_a_job_file_may_name_the_folder(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "study.toml").write_text('data = "a.csv"\nout = "report"\n')
    run("examine study.toml")
    run("examine study.toml --out other")
    assert [folder.name for folder, _ in verbs.saved] == ["report", "other"]


def test_a_slip_in_a_job_file_stops_before_the_work(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "study.toml").write_text('data = "a.csv"\ngruop = "clinic"\n')
    status, _, err = run("examine study.toml")
    assert status == 2
    assert "has the key ‘gruop’, which is no option" in err
    assert "Did you mean ‘group’" in err
    assert verbs.calls == []


# ---- streams and folders -----------------------------------------------------------------------


def test_the_answer_goes_to_standard_output_and_names_the_folder(verbs: Verbs, run: Run) -> None:
    status, out, err = run("examine some/clinics.csv")
    assert (status, err) == (0, "")
    assert out.startswith("Rows hang together: −3.1")
    assert "in  clinics-clingstone/" in out
    assert verbs.saved == [(Path("clinics-clingstone"), False)]


def test_json_alone_prints_results_and_saves_nothing(verbs: Verbs, run: Run) -> None:
    status, out, err = run("examine a.csv --json")
    assert (status, err) == (0, "")
    assert from_json(out) == plain.results()
    assert verbs.saved == []
    assert from_json(run("demo --json --out here")[1]) == plain.results()
    assert verbs.saved == [(Path("here"), False)]


def test_quiet_says_nothing(verbs: Verbs, run: Run) -> None:
    assert run("demo --quiet") == (0, "", "")
    assert verbs.saved == [(Path("trial-clingstone"), False)]


def test_a_taken_folder_stops_before_the_work(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    assert run("examine a.csv --out out")[0] == 0  # empty: free to use
    (tmp_path / "out" / "thesis.tex").touch()
    status, out, err = run("examine a.csv --out out")
    assert (status, out) == (2, "")
    assert "holds files that were not written here: thesis.tex" in err
    assert run("examine a.csv --out out --overwrite")[0] == 2  # what is not ours is never replaced
    assert len(verbs.calls) == 1


def test_an_earlier_run_is_replaced_only_when_asked(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "results.json").touch()
    status, _, err = run("examine a.csv --out out")
    assert status == 2
    assert "already holds an earlier report" in err
    assert "--overwrite" in err
    assert verbs.calls == []
    assert run("examine a.csv --out out --overwrite")[0] == 0
    assert verbs.saved == [(Path("out"), True)]


def test_without_out_an_earlier_run_is_kept(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    for name in ("trial-clingstone", "trial-clingstone-2"):
        (tmp_path / name).mkdir()
    assert "in  trial-clingstone-3/" in run("demo")[1]
    run("demo --overwrite")
    assert verbs.saved == [(Path("trial-clingstone-3"), False), (Path("trial-clingstone"), True)]


def test_signs_that_an_old_console_lacks_are_replaced(verbs: Verbs, monkeypatch: pytest.MonkeyPatch) -> None:
    import io

    raw = io.BytesIO()
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(raw, encoding="latin-1"))
    with pytest.raises(SystemExit) as stopped:
        cli.main(["examine", "a.csv"])
    assert not stopped.value.code
    assert b"hang together: ?3.1" in raw.getvalue()


def test_progress_is_drawn_only_on_a_terminal(
    verbs: Verbs, monkeypatch: pytest.MonkeyPatch, run: Run
) -> None:
    run("examine a.csv --out one")
    assert verbs.calls[-1][1]["progress"] is None
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    run("examine a.csv --out two")
    listen = verbs.calls[-1][1]["progress"]
    assert callable(listen)
    run("examine a.csv --out three --quiet")
    assert verbs.calls[-1][1]["progress"] is None


def test_progress_counts_and_leaves_standard_output_alone(
    verbs: Verbs, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    with screen.progress(quiet=False) as listen:
        assert listen is not None
        for done in range(4):
            listen("heavy fits", done, 3)
    out, err = capsys.readouterr()
    assert out == ""
    assert "heavy fits" in err


# ---- exit status -------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", [InputError, NotSupported])
@pytest.mark.parametrize("line", ["examine a.csv", "demo lambs", "replay saved"])
def test_what_the_user_can_mend_is_one_message_and_a_hint(
    verbs: Verbs, run: Run, kind: type[Exception], line: str
) -> None:
    verbs.error = kind("column 'cline' is not in a.csv", "Did you mean 'clinic'?")  # type: ignore[call-arg]
    status, _, err = run(line)
    assert status == 2
    assert err == "clingstone: column 'cline' is not in a.csv\n  Did you mean 'clinic'?\n"
    assert verbs.saved == []


def test_messages_speak_options_and_keep_to_eighty_columns(verbs: Verbs, run: Run) -> None:
    verbs.error = InputError(
        "missing: clinic in 3 rows (rows 4, 9 and 12); a row without its group cannot be set beside others",
        "Fill them in, or leave these rows out with missing='drop'. Give coords=('x', 'y') or time=.",
    )
    _, _, err = run("examine trial.csv --model 'y ~ x'")
    assert max(map(len, err.splitlines())) <= 80
    said = " ".join(err.split())
    assert "--missing drop. Give --coords x y or --time." in said
    assert "missing=" not in said


@pytest.mark.parametrize(
    ("python", "shell"),
    [
        ("assigned={'arm': 'clinic'}", "--assigned arm=clinic"),
        ("weights_kind='frequency'", "--weights-kind frequency"),
        ("group='a/b', or group=['a', 'b c']", '--group a/b, or --group a --group "b c"'),
        ("lonlat=False", "--no-lonlat"),
        (
            "confidence=95.0 is no level: confidence=0.95.",
            "--confidence 95.0 is no level: --confidence 0.95.",
        ),
        ("seed=-1 is negative", "--seed -1 is negative"),
        ("material=(0.95, 1.1) must", "--material 0.95 1.1 must"),
        ("the column time and a mean of=3", "the column time and a mean of=3"),
    ],
)
def test_python_words_become_options(python: str, shell: str) -> None:
    assert in_shell(python) == shell


def test_a_folder_inside_a_file_is_refused_before_the_work(verbs: Verbs, run: Run, tmp_path: Path) -> None:
    (tmp_path / "afile").write_text("x")
    status, _, err = run("examine trial.csv --model 'y ~ x' --out afile/sub")
    assert status == 2
    assert "afile is a file, so sub cannot be a folder in it" in " ".join(err.split())
    assert not verbs.calls


def test_a_fault_of_ours_is_status_1_and_names_the_way_to_the_traceback(verbs: Verbs, run: Run) -> None:
    verbs.error = ZeroDivisionError("float division by zero")
    status, out, err = run("examine a.csv")
    assert (status, out) == (1, "")
    assert "a fault of ours" in err
    assert "ZeroDivisionError: float division by zero" in err
    assert "--debug" in err
    assert "Traceback" not in err


@pytest.mark.parametrize("line", ["examine a.csv --debug", "demo --debug", "replay saved --debug"])
def test_debug_lets_the_traceback_through(verbs: Verbs, line: str) -> None:
    verbs.error = ZeroDivisionError("float division by zero")
    with pytest.raises(ZeroDivisionError):
        cli.main(line.split())


def test_an_interrupt_is_status_130(verbs: Verbs, run: Run) -> None:
    verbs.error = KeyboardInterrupt()  # type: ignore[assignment]
    assert run("examine a.csv")[0] == 130


def test_replay_says_what_it_found_and_by_status_whether_it_agrees(verbs: Verbs, run: Run) -> None:
    assert run("replay saved") == (0, "replayed saved\n", "")
    verbs.agrees = False
    assert run("replay saved --data moved/trial.csv")[:2] == (1, "replayed saved\n")
    assert verbs.calls == [
        (Path("saved"), {"data": None}),
        (Path("saved"), {"data": Path("moved/trial.csv")}),
    ]


def test_replay_looks_here_beside_the_folder_and_among_the_demonstrations(
    verbs: Verbs, run: Run, tmp_path: Path
) -> None:
    def asked(name: str, given: str = "") -> Path | None:
        case = plain.example(CaseSummary, origin={"file": name, "path": given})
        (tmp_path / "kept" / "saved").mkdir(parents=True, exist_ok=True)
        (tmp_path / "kept" / "saved" / "results.json").write_text(to_json(plain.results(case=case)))
        run("replay kept/saved")
        found: Path | None = verbs.calls[-1][1]["data"]
        return found

    assert asked("mine.csv") is None
    (tmp_path / "kept" / "mine.csv").touch()
    assert asked("mine.csv") == tmp_path / "kept" / "mine.csv"
    (tmp_path / "mine.csv").touch()
    assert asked("mine.csv") == Path("mine.csv")
    assert asked("wells.csv") == DEMOS["wells"].path
    (tmp_path / "data").mkdir()
    (tmp_path / "data" / "mine.csv").touch()
    assert asked("mine.csv", "data/mine.csv") == Path("data/mine.csv")
    assert asked("mine.csv", "gone/mine.csv") == Path("mine.csv")


def test_version(run: Run) -> None:
    from clingstone import __version__

    assert run("--version") == (0, f"clingstone {__version__}\n", "")


# ---- demonstrations ----------------------------------------------------------------------------


@pytest.mark.parametrize("name", list(DEMOS))
def test_a_demo_shows_its_question_and_the_command_that_asks_it(verbs: Verbs, run: Run, name: str) -> None:
    """The words shown, given to the command line, ask exactly what the demonstration asked."""
    status, out, err = run(f"demo {name}")
    assert (status, err) == (0, "")
    demo = DEMOS[name]
    assert " ".join(out.split()).startswith(demo.question)
    assert f"\n{demo.command}\n" in out
    assert max(map(len, out.splitlines())) <= 80
    run(demo.command.replace("\\\n", "").removeprefix("clingstone ") + " --out typed")
    (file, asked), (typed_file, typed) = verbs.calls
    assert file == demo.path
    assert typed_file == Path(f"{name}.csv")
    asked.pop("progress"), typed.pop("progress")
    assert asked == dict(demo.arguments)
    assert Settings(**asked) == Settings(**typed)


def test_demo_without_a_name_is_the_trial(verbs: Verbs, run: Run) -> None:
    run("demo")
    assert verbs.calls[0][0] == DEMOS["trial"].path
    status, _, err = run("demo trail --out x")
    assert status == 2
    assert "did you mean 'trial'" in err


# ---- the real thing, from a shell --------------------------------------------------------------


def _shell(folder: Path, *words: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "clingstone", *words]
    return subprocess.run(command, cwd=folder, capture_output=True, text=True)


def test_a_missing_file_from_the_shell(tmp_path: Path) -> None:
    done = _shell(tmp_path, "examine", "nowhere.csv", "--model", "y ~ x")
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith("clingstone: ")
    assert "nowhere.csv" in done.stderr
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_the_demo_runs_whole_and_replays(tmp_path: Path) -> None:
    done = _shell(tmp_path, "demo")
    assert (done.returncode, done.stderr) == (0, "")
    lines = done.stdout.splitlines()
    assert max(map(len, lines)) <= 80
    assert "trial-clingstone/" in lines[-1]
    saved = {path.name for path in (tmp_path / "trial-clingstone").iterdir()}
    assert {"report.html", "methods.md", "references.bib", "results.json"} <= saved
    again = _shell(tmp_path, "replay", "trial-clingstone")
    assert (again.returncode, again.stderr) == (0, ""), again.stdout
    assert "every number agrees" in again.stdout
