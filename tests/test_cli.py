"""The command line: what it says where, how it ends, and how soon it answers."""

import ast
import importlib.util
import inspect
import json
import os
import re
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd
import pytest
import trackfit_cli
from trackfit_cli import app as commands
from trackfit_cli import demo, guard, story, words
from trackfit_cli.exits import EXIT_CODES, ExitCode
from trackfit_cli.interrupts import no_interrupt_lost

import trackfit
from trackfit import faults
from trackfit.criticism.compare import Compared, Outcome
from trackfit.criticism.criticism import Scores
from trackfit.criticism.hidden_fixes import HeldOut, HoldOutTrial
from trackfit.criticism.judged import Judged
from trackfit.criticism.verdicts import Finding, Verdict
from trackfit.faults import LayerError, TrackfitError
from trackfit.frame import Plane
from trackfit.inference.fit import FitStatus
from trackfit.study import Study, read_study
from trackfit.study_faults import RULES
from trackfit.study_trials import Compare

ROOT = Path(__file__).parent.parent
DOCS = ROOT / "docs"

# A stand-in for the library -----------------------------------------------------------------------


@dataclass
class FakeFixes:
    """Two tags; the shapes the contract of `Fixes` fixes."""

    set_aside: pd.DataFrame
    table: pd.DataFrame = field(
        default_factory=lambda: pd.DataFrame(
            {
                "tag": ["A1", "A1", "B2"],
                "time": pd.to_datetime(
                    ["2024-05-01 00:00", "2024-05-03 06:30", "2024-05-02 12:00"], utc=True
                ),
                "lon": [-5.0, -5.5, -4.5],
                "lat": [58.0, 58.2, 58.1],
            }
        )
    )

    @property
    def tags(self) -> list[str]:
        return ["A1", "B2"]

    def of(self, tag: str) -> pd.DataFrame:
        return self.table[self.table["tag"] == tag]

    def reason_counts(self) -> dict[str, int]:
        return self.set_aside["reason"].value_counts().to_dict()


@dataclass
class FakeLibrary:
    """Records what the command line asks of the library; answers as told."""

    converged: bool = True
    fault: BaseException | None = None
    layers: dict[str, Any] = field(default_factory=dict)
    reasons: tuple[str, ...] = ("lat is missing", "lat is missing", "lon is missing")
    calls: list[str] = field(default_factory=list)
    written: dict[str, Any] = field(default_factory=dict)
    compared: Any = None
    comparison: tuple[Compared, ...] = ()
    trial: HoldOutTrial | None = None

    def prepare(self, study: Study) -> SimpleNamespace:
        self.calls.append("prepare")
        if self.fault:
            raise self.fault
        fixes = FakeFixes(pd.DataFrame({"reason": list(self.reasons)}))
        return SimpleNamespace(
            fixes=fixes,
            plane=Plane.centred_on(fixes.table["lon"], fixes.table["lat"]),
            layers=self.layers,
            coast=None,
            notes=("fixes.csv: 2 rows were out of time order and were sorted",),
            warnings=("the plane stretches distances by up to 3.1% at the fixes",),
            n_states=lambda tag: {"A1": 109, "B2": 1}[tag],
        )

    def fit_tags(
        self, prepared: SimpleNamespace, progress: Callable[[str, float, str], None]
    ) -> list[SimpleNamespace]:
        self.calls.append("fit_tags")
        for tag in prepared.fixes.tags:
            progress(tag, 0.5, "searching [coarse]")
            progress(tag, 1.0, "fitted")
        table = pd.DataFrame(
            {
                "parameter": ["diffusion", "error_scale"],
                "unit": ["km h^-1/2", "1"],
                "estimate": [1.23456, 2.0],
                "sd": [0.1, 0.0],
                "lower95": [1.05, 2.0],
                "upper95": [1.45, 2.0],
                "role": ["estimated", "fixed"],
            }
        )
        status = SimpleNamespace(
            ok=self.converged, name="STOPPED", sentence="The search stopped too early."
        )
        moved = pd.DataFrame({"parameter": ["diffusion"], "change_in_sd": [0.0712]})
        return [
            SimpleNamespace(tag=t, parameters=table, status=status, step_check=check)
            for t, check in (("A1", moved), ("B2", None))
        ]

    def judge_fits(
        self,
        prepared: SimpleNamespace,
        fits: list[SimpleNamespace],
        *,
        compare: Any,
        progress: Callable[[str, float, str], None],
    ) -> Judged:
        self.calls.append("judge_fits")
        self.compared = compare
        verdicts = (
            Verdict("A1", "errors", Finding.ERRORS_AS_STATED, 1.0, "The GPS sds fit the track."),
            Verdict("A1", "tails", Finding.TAILS_AS_EXPECTED, 3.0, "Nothing is far off."),
            Verdict("B2", "motion", Finding.MOTION_TOO_ROUGH, 0.4, "The motion is too rough."),
        )
        criticisms = tuple(SimpleNamespace(tag=tag) for tag in ("A1", "B2"))
        return Judged(criticisms, verdicts, self.comparison, self.trial)

    def fill_tracks(
        self, prepared: Any, fits: list[Any], progress: Callable[[str, float, str], None]
    ) -> list[SimpleNamespace]:
        self.calls.append("fill_tracks")
        progress("positions", 1.0, "2 tracks filled")
        return [SimpleNamespace(tag=fit.tag, warnings=()) for fit in fits]

    def write_results(
        self,
        folder: Path,
        prepared: Any,
        fits: Any,
        filled: Any,
        *,
        judged: Judged,
        overwrite: bool,
        progress: Callable[[str, float, str], None],
    ) -> Path:
        self.calls.append("write_results")
        progress("figures", 1.0, "3 figures drawn")
        self.written = {
            "folder": folder,
            "filled": [track.tag for track in filled],
            "overwrite": overwrite,
        }
        return folder


@pytest.fixture
def library(monkeypatch: pytest.MonkeyPatch) -> FakeLibrary:
    fake = FakeLibrary()
    monkeypatch.setattr(trackfit, "read_study", read_study, raising=False)
    for name in ("prepare", "fit_tags", "judge_fits", "fill_tracks", "write_results"):
        monkeypatch.setattr(trackfit, name, getattr(fake, name), raising=False)
    return fake


@pytest.fixture
def study(tmp_path: Path) -> str:
    (tmp_path / "fixes.csv").write_text("", encoding="utf-8")
    path = tmp_path / "study.toml"
    path.write_text('[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n', encoding="utf-8")
    return str(path)


def earlier_results(folder: Path) -> None:
    """Lay down a folder that the library knows as its own."""
    from trackfit.results import swap_in, write_record

    with swap_in(folder) as fresh:
        (fresh / "parameters.csv").write_text("parameter\n", encoding="utf-8")
        write_record(fresh, {"written_by": "trackfit"})


# How a command ends -------------------------------------------------------------------------------


def test_a_run_ends_with_0(library: FakeLibrary, study: str) -> None:
    assert trackfit_cli.main(["run", study]) == 0


def test_a_wrong_study_ends_with_1(
    library: FakeLibrary, capsys: pytest.CaptureFixture[str], study: str
) -> None:
    Path(study).write_text("[study]\nnam = 1\n", encoding="utf-8")
    assert trackfit_cli.main(["check", study]) == ExitCode.WRONG == 1
    out, err = capsys.readouterr()
    assert out == ""
    assert f'{study}:2: study.nam: unknown key; did you mean "name"?' in err.splitlines()


def test_a_study_that_is_not_there_ends_with_1(
    library: FakeLibrary, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    assert trackfit_cli.main(["check", str(tmp_path / "none.toml")]) == 1
    assert "no such study file" in capsys.readouterr().err


def test_wrong_data_end_with_1_and_the_message_alone(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    library.fault = LayerError("layers.depth: it holds nothing")
    assert trackfit_cli.main(["run", study]) == 1
    assert capsys.readouterr() == ("", "layers.depth: it holds nothing\n")


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["rn"], "No such command 'rn'. Did you mean 'run'?"),
        (["run"], "Missing argument 'STUDY'."),
        (["run", "x.toml", "--overwrit"], "No such option"),
        ([], "Usage: trackfit"),
    ],
)
def test_a_command_not_understood_ends_with_2(
    arguments: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main(arguments) == ExitCode.USAGE == 2
    out, err = capsys.readouterr()
    assert said in err
    assert out == ""


@pytest.mark.parametrize("flags", [[], ["--quiet"]])
def test_a_fit_that_failed_ends_with_3_and_says_so_even_when_quiet(
    library: FakeLibrary, study: str, flags: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    library.converged = False
    assert trackfit_cli.main(["fit", study, *flags]) == ExitCode.NOT_CONVERGED == 3
    out, err = capsys.readouterr()
    assert "A1: The search stopped too early." in err.splitlines()
    assert "0 of 2 fits converged; not A1 (STOPPED), B2 (STOPPED)." in out.splitlines()
    assert "write_results" in library.calls


def test_an_interruption_ends_with_130_and_a_sentence(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    library.fault = KeyboardInterrupt()
    assert trackfit_cli.main(["run", study]) == ExitCode.INTERRUPTED == 130
    out, err = capsys.readouterr()
    assert out == ""
    assert err.strip() == guard.INTERRUPTED


class Swallowing:
    """A finaliser that is interrupted: Python cannot pass the exception on."""

    def __del__(self) -> None:
        raise KeyboardInterrupt


def test_an_interrupt_that_a_callback_swallowed_comes_again(
    library: FakeLibrary, study: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    def swallowed(*arguments: object, **options: object) -> None:
        Swallowing()
        for _ in range(1000):
            time.sleep(0.01)

    monkeypatch.setattr(trackfit, "prepare", swallowed)
    began = time.monotonic()
    assert trackfit_cli.main(["run", study]) == ExitCode.INTERRUPTED
    assert time.monotonic() - began < 5


def test_other_unraisable_errors_go_where_they_went(monkeypatch: pytest.MonkeyPatch) -> None:
    told: list[object] = []

    def record(swallowed: "sys.UnraisableHookArgs") -> None:
        told.append(swallowed.exc_type)

    monkeypatch.setattr(sys, "unraisablehook", record)
    with no_interrupt_lost():
        assert sys.unraisablehook is not record
        sys.unraisablehook(SimpleNamespace(exc_type=ValueError))  # type: ignore[arg-type]
    assert told == [ValueError]
    assert sys.unraisablehook is record


def test_an_interrupt_inside_exec_ends_a_module_with_its_code(tmp_path: Path) -> None:
    """`python -m` would end by the signal, were it not forgotten."""
    program = tmp_path / "program.py"
    program.write_text(
        "import sys\nfrom trackfit_cli.interrupts import forget_interrupt\n"
        "try:\n    exec('raise KeyboardInterrupt')\nexcept KeyboardInterrupt:\n"
        "    forget_interrupt()\nsys.exit(130)\n"
    )
    path = os.pathsep.join([str(tmp_path), os.environ.get("PYTHONPATH", "")])
    ended = subprocess.run(
        [sys.executable, "-m", "program"], env={**os.environ, "PYTHONPATH": path}
    )
    assert ended.returncode == 130


def test_a_fault_of_our_own_is_one_sentence_and_a_file(
    library: FakeLibrary,
    study: str,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
    tmp_path: Path,
) -> None:
    monkeypatch.setattr(guard.tempfile, "tempdir", str(tmp_path))
    monkeypatch.delenv(guard.TRACEBACK_VARIABLE, raising=False)
    library.fault = ZeroDivisionError("inner words")
    assert trackfit_cli.main(["run", study]) == 1
    out, err = capsys.readouterr()
    assert out == ""
    assert len(err.splitlines()) == 1
    named = re.search(r"the file (\S+\.txt), which", err)
    assert named is not None
    kept = Path(named[1]).read_text(encoding="utf-8")
    assert kept.startswith("Traceback")
    assert "inner words" in kept


def test_the_traceback_shows_when_asked_for(
    library: FakeLibrary,
    study: str,
    capsys: pytest.CaptureFixture[str],
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv(guard.TRACEBACK_VARIABLE, "1")
    library.fault = ZeroDivisionError("inner words")
    assert trackfit_cli.main(["run", study]) == 1
    assert "ZeroDivisionError: inner words" in capsys.readouterr().err


@pytest.mark.parametrize("command", [[], ["check"], ["fit"], ["compare"], ["run"], ["demo"]])
@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_each_help_lists_the_exit_codes(
    command: list[str], flag: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main([*command, flag]) == 0
    out = capsys.readouterr().out
    for code in ExitCode:
        assert re.search(rf"^ *{code:d}  {code.meaning}$", out, re.MULTILINE)


def test_the_codes_are_those_promised() -> None:
    assert {code.name: int(code) for code in ExitCode} == {
        "DONE": 0,
        "WRONG": 1,
        "USAGE": 2,
        "NOT_CONVERGED": 3,
        "INTERRUPTED": 130,
    }
    assert EXIT_CODES.count("\n") == len(ExitCode) + 1


# What a command says, and where -------------------------------------------------------------------


def test_check_prints_what_is_there_and_fits_nothing(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main(["check", study]) == 0
    out, err = capsys.readouterr()
    assert library.calls == ["prepare"]
    assert re.search(r"^A1 +2 +2024-05-01 00:00 +2024-05-03 06:30 +109$", out, re.MULTILINE)
    assert "Set aside: 3" in out.splitlines()
    assert re.search(r"^lat is missing +2$", out, re.MULTILINE)
    assert re.search(
        r"^Plane: Lambert .*; distances at the fixes are true to 0\.01%\.$", out, re.MULTILINE
    )
    assert "No layers are named." in out
    assert err.splitlines() == [
        "Note: fixes.csv: 2 rows were out of time order and were sorted",
        "Warning: the plane stretches distances by up to 3.1% at the fixes",
    ]


def test_check_says_when_nothing_is_set_aside(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    library.reasons = ()
    assert trackfit_cli.main(["check", study]) == 0
    assert "No fix is set aside." in capsys.readouterr().out


def test_check_describes_layers(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    shared = {"x0_km": -50.0, "y0_km": -50.0, "spacing_km": 2.0, "unit": "m", "share_filled": 0.125}
    covered = np.ones((51, 101), dtype=bool)
    covered[:, 0] = False
    library.layers = {
        "depth": SimpleNamespace(
            name="depth", hours=np.zeros(1), covered=covered, fixed=True, **shared
        ),
        "sst": SimpleNamespace(
            name="sst",
            hours=np.array([475_000.0, 475_024.0]),
            covered=covered,
            fixed=False,
            **shared,
        ),
    }
    assert trackfit_cli.main(["check", study]) == 0
    out = capsys.readouterr().out
    assert re.search(
        r"^depth +m +57\.\d\dN 5\.\d\dW +58\.\d\dN 2\.\d\dW +2 km +101 x 51 ", out, re.M
    )
    assert re.search(r"fixed +12\.5% +1\.0%$", out, re.M)
    # 475 000 hours are 19 791 days and 16 hours after 1970-01-01.
    assert "2, 2024-03-09 to 2024-03-10" in out


def test_run_does_everything_and_prints_the_answer(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main(["run", study]) == 0
    out, err = capsys.readouterr()
    folder = Path(study).parent / "results"
    assert library.calls == ["prepare", "fit_tags", "judge_fits", "fill_tracks", "write_results"]
    assert library.written == {"folder": folder, "filled": ["A1", "B2"], "overwrite": False}
    assert re.search(r"^A1 diffusion +1\.235 +0\.1 +1\.05 +1\.45 +km h\^-1/2$", out, re.MULTILINE)
    assert re.search(r"^B2 error_scale +2 +fixed +1$", out, re.MULTILINE)
    assert re.search(r"^at half the step +change in sd\nA1 diffusion +\+0\.07$", out, re.MULTILINE)
    assert out.endswith(f"\n2 of 2 fits converged.\nResults: {folder}\n")
    assert err.splitlines()[2:] == [
        "A1: fitted",
        "B2: fitted",
        "positions: 2 tracks filled",
        "figures: 3 figures drawn",
    ]


def test_fit_fills_nothing(library: FakeLibrary, study: str) -> None:
    assert trackfit_cli.main(["fit", study]) == 0
    assert library.calls == ["prepare", "fit_tags", "judge_fits", "write_results"]
    assert library.written["filled"] == []


def test_fit_says_of_each_tag_what_to_think_of_it(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main(["fit", study]) == 0
    lines = capsys.readouterr().out.splitlines()
    at = lines.index("Tag A1:")
    assert lines[at + 1] == "  Nothing speaks against the model's errors and tails."
    assert lines[lines.index("Tag B2:") + 1] == "  The motion is too rough."
    assert library.compared is None


def test_compare_fits_both_motions_even_where_the_study_asks_for_no_comparison(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    scores = Scores(40, 2, -100.25, 204.5, 204.75, -90.5)
    library.comparison = (
        Compared("A1", "as in the study", "diffusive", FitStatus.CONVERGED, Outcome.OWN,
                 scores, 0.0, 0.0, 0.0, "The study's own model."),
        Compared("A1", "persistent motion", "persistent", FitStatus.NO_MODE, Outcome.NOT_FITTED,
                 None, np.nan, np.nan, np.nan, "With persistent motion: no comparison."),
    )  # fmt: skip
    assert trackfit_cli.main(["compare", study]) == 0
    assert library.compared == Compare(motions=True, terms=False)
    assert "fill_tracks" not in library.calls
    lines = capsys.readouterr().out.splitlines()
    assert any(
        re.fullmatch(r"A1 as in the study +-100\.2 +204\.5 +-90\.5 +\+0\.0 +\+0\.0", line)
        for line in lines
    )
    assert "A1 persistent motion" in lines
    assert "A1: With persistent motion: no comparison." in lines


def test_compare_takes_what_the_study_asks_to_compare(library: FakeLibrary, study: str) -> None:
    with Path(study).open("a", encoding="utf-8") as file:
        file.write("[compare]\nterms = true\nmotions = false\n")
    assert trackfit_cli.main(["compare", study]) == 0
    assert library.compared == Compare(motions=False, terms=True)


def test_hidden_fixes_are_told_by_tag_and_together(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    def held(tag: str, sentence: str) -> HeldOut:
        return HeldOut(tag, None, 9, 1, *[0.5] * 8, sentence)

    tags = (held("A1", "One."), held("B2", "Two."))
    library.trial = HoldOutTrial(tags, held("all tags", "Three."), pd.DataFrame())
    assert trackfit_cli.main(["run", study]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[-6:-3] == ["A1: One.", "B2: Two.", "all tags: Three."]


def test_quiet_says_nothing_on_stderr(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert trackfit_cli.main(["run", study, "--quiet"]) == 0
    assert capsys.readouterr().err == ""


def test_a_terminal_gets_one_bar_a_tag_on_stderr(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(story.sys.stderr, "isatty", lambda: True, raising=False)
    monkeypatch.setenv("FORCE_COLOR", "1")
    with story.Story(quiet=False).progress() as show:
        show("A1", 0.5, "searching [coarse]")
        show("A1", 1.0, "fitted [1]")
    out, err = capsys.readouterr()
    assert out == ""
    assert "A1" in err
    assert "fitted [1]" in err


def test_no_bar_where_there_is_no_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    with story.Story(quiet=False).progress() as show:
        show("A1", 0.5, "searching")
        show("A1", 1.0, "fitted")
    assert capsys.readouterr() == ("", "A1: fitted\n")


def test_columns_of_an_empty_table_are_its_header() -> None:
    assert words.columns(["a", "bb"], []) == ["a  bb"]


# No overwriting without being told ----------------------------------------------------------------


@pytest.mark.parametrize("command", ["fit", "compare", "run"])
def test_results_that_are_there_stay_unless_told(
    library: FakeLibrary, study: str, command: str, capsys: pytest.CaptureFixture[str]
) -> None:
    earlier_results(Path(study).parent / "results")
    assert trackfit_cli.main([command, study]) == 1
    assert "holds results already; add --overwrite to replace them" in capsys.readouterr().err
    assert library.calls == []
    assert trackfit_cli.main([command, study, "--overwrite"]) == 0
    assert library.written["overwrite"] is True


def test_what_is_not_ours_is_never_overwritten(
    library: FakeLibrary, study: str, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = Path(study).parent / "results"
    folder.mkdir()
    (folder / "thesis.txt").write_text("", encoding="utf-8")
    assert trackfit_cli.main(["run", study, "--overwrite"]) == 1
    assert "thesis.txt, not written by trackfit" in capsys.readouterr().err
    assert library.calls == []


def test_an_empty_folder_is_free(library: FakeLibrary, study: str) -> None:
    (Path(study).parent / "results").mkdir()
    assert trackfit_cli.main(["run", study]) == 0
    assert library.written["overwrite"] is True


# The demonstration --------------------------------------------------------------------------------


@pytest.fixture
def invented(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A package of a demonstration with a study, a table, a layer and a program."""
    source = tmp_path / "package"
    (source / "layers").mkdir(parents=True)
    (source / "__pycache__").mkdir()
    text = '[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n'
    (source / "study.toml").write_text(text, encoding="utf-8")
    for name in ("fixes.csv", "layers/depth.nc", "make.py", "__pycache__/make.pyc"):
        (source / name).write_text(name, encoding="utf-8")

    @contextmanager
    def as_file(where: Path) -> Iterator[Path]:
        yield where

    monkeypatch.setattr(demo, "files", lambda package: source)
    monkeypatch.setattr(demo, "as_file", as_file)
    return source


def test_the_demo_is_copied_without_the_programs_that_made_it(
    invented: Path, tmp_path: Path
) -> None:
    study_file = demo.copy_demo(tmp_path / "mine")
    assert study_file == tmp_path / "mine" / "study.toml"
    copied = {p.relative_to(tmp_path / "mine").as_posix() for p in (tmp_path / "mine").rglob("*.*")}
    assert copied == {"study.toml", "fixes.csv", "layers/depth.nc"}


def test_the_demo_replaces_files_only_when_told(invented: Path, tmp_path: Path) -> None:
    folder = tmp_path / "mine"
    demo.copy_demo(folder)
    (folder / "fixes.csv").write_text("changed", encoding="utf-8")
    with pytest.raises(TrackfitError, match=r"fixes\.csv is there already; add --overwrite"):
        demo.copy_demo(folder)
    assert (folder / "fixes.csv").read_text(encoding="utf-8") == "changed"
    demo.copy_demo(folder, overwrite=True)
    assert (folder / "fixes.csv").read_text(encoding="utf-8") == "fixes.csv"


def test_the_demo_needs_a_folder(invented: Path, tmp_path: Path) -> None:
    (tmp_path / "mine").write_text("", encoding="utf-8")
    with pytest.raises(TrackfitError, match="is a file; the demonstration needs a folder"):
        demo.copy_demo(tmp_path / "mine")


def test_a_package_without_a_demo_says_so(invented: Path, tmp_path: Path) -> None:
    (invented / "study.toml").unlink()
    with pytest.raises(TrackfitError, match="the demonstration's files are missing"):
        demo.copy_demo(tmp_path / "mine")


def test_demo_runs_the_copy_and_says_where_to_look(
    invented: Path,
    library: FakeLibrary,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert trackfit_cli.main(["demo"]) == 0
    out, _ = capsys.readouterr()
    study_file = Path("trackfit-demo") / "study.toml"
    assert f"Results: {tmp_path / 'trackfit-demo' / 'results'}" in out
    assert f"trackfit run {study_file} --overwrite" in out
    assert library.calls == ["prepare", "fit_tags", "judge_fits", "fill_tracks", "write_results"]
    assert trackfit_cli.main(["demo"]) == 1
    assert trackfit_cli.main(["demo", "--overwrite"]) == 0


# As a process of its own --------------------------------------------------------------------------


def process(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "trackfit_cli", *arguments],
        capture_output=True,
        text=True,
        check=False,
        cwd=ROOT,
        env=os.environ | {"PYTHONWARNINGS": "error"},
    )


def test_help_answers_soon() -> None:
    took = []
    for _ in range(3):
        start = time.perf_counter()
        answer = process("--help")
        took.append(time.perf_counter() - start)
        assert answer.returncode == 0
    print(f"trackfit --help: {min(took):.3f} s")
    # The aim is 0.5 s; the bound leaves room for a busy machine.
    assert min(took) < 1.0


def test_help_loads_nothing_heavy() -> None:
    code = (
        "import sys, trackfit_cli; trackfit_cli.main(['run', '--help']); "
        "print('LOADED', *sorted({m.split('.')[0] for m in sys.modules}))"
    )
    answer = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    loaded = set(answer.stdout.split("LOADED")[1].split())
    assert "click" in loaded
    assert loaded.isdisjoint(
        {
            "jax",
            "numpy",
            "pandas",
            "pyproj",
            "pydantic",
            "rich",
            "xarray",
            "geopandas",
            "matplotlib",
        }
    )


def test_the_version_is_the_one_installed() -> None:
    from importlib.metadata import version

    assert process("--version").stdout == f"trackfit {version('trackfit')}\n"


def test_the_exit_code_reaches_the_system(tmp_path: Path) -> None:
    assert process("rn").returncode == 2
    assert process("check", str(tmp_path / "none.toml")).returncode == 1


# The pages ----------------------------------------------------------------------------------------


def make_reference() -> Any:
    spec = importlib.util.spec_from_file_location("make_reference", DOCS / "make_reference.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_the_reference_pages_are_up_to_date() -> None:
    assert make_reference().stale() == [], "run: python docs/make_reference.py"


def test_a_stale_page_is_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    maker = make_reference()
    monkeypatch.setattr(maker, "HERE", tmp_path)
    assert maker.main([]) == 0
    assert maker.main(["--check"]) == 0
    (tmp_path / "commands.md").write_text("old", encoding="utf-8")
    assert maker.main(["--check"]) == 1
    assert capsys.readouterr().err == "docs/commands.md is stale: run docs/make_reference.py\n"


def test_the_study_page_names_every_key() -> None:
    page = (DOCS / "study-file.md").read_text(encoding="utf-8")
    from trackfit.study_faults import keys_of, tables

    for header, table in tables(Study):
        assert f"## `{header}`\n" in page
        for name in keys_of(table):
            assert f"\n| `{name}` | " in page


def messages_page() -> str:
    """The page with its lines joined, so that a break inside a sentence hides nothing."""
    return " ".join((DOCS / "messages.md").read_text(encoding="utf-8").split())


def fixed_words(node: ast.expr, constants: Mapping[str, ast.expr] | None = None) -> list[str]:
    """The unchanging pieces of a text in a program, worth looking for."""
    if isinstance(node, ast.JoinedStr):
        return [piece for value in node.values for piece in fixed_words(value)]  # noqa: PD011
    if isinstance(node, ast.Constant) and isinstance(node.value, str):
        text = node.value.strip(" \"'(),:;.")
        return [text] if len(text) > 3 else []
    if isinstance(node, ast.IfExp):
        return fixed_words(node.body) + fixed_words(node.orelse)
    if isinstance(node, ast.Name) and constants and node.id in constants:
        return fixed_words(constants[node.id])
    return []


def reasons_for_setting_aside() -> set[str]:
    """Every reason in the library's source: arguments of `refuse` and `setting_aside`."""
    found: set[str] = set()
    for path in (ROOT / "trackfit").rglob("*.py"):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        constants = {
            ast.unparse(node.targets[0]): node.value
            for node in tree.body
            if isinstance(node, ast.Assign)
        }
        for node in ast.walk(tree):
            if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
                if node.func.attr in ("refuse", "setting_aside") and len(node.args) > 1:
                    found.update(fixed_words(node.args[1], constants))
            elif isinstance(node, ast.Assign):
                target = ast.unparse(node.targets[0])
                if target == "reason" or target.endswith("'reason']"):
                    found.update(fixed_words(node.value))
    return found


def test_messages_has_every_reason_for_setting_a_fix_aside() -> None:
    reasons = reasons_for_setting_aside()
    assert "ellipse_minor_m exceeds ellipse_major_m" in reasons
    assert "a second fix of the tag at the same time" in reasons
    assert [reason for reason in sorted(reasons) if reason not in messages_page()] == []


def rules_of_the_study() -> set[str]:
    """Every rule a study can break: of the schema, of single values, and between tables."""
    found = {piece for rule in RULES.values() for piece in rule.split("{")[:1] if piece}
    for name in ("study", "study_schema", "study_screening", "study_trials", "study_values"):
        for node in ast.walk(ast.parse((ROOT / "trackfit" / f"{name}.py").read_text("utf-8"))):
            if isinstance(node, ast.Call) and ast.unparse(node.func) == "refuse":
                found.update(fixed_words(node.args[0]))
            elif isinstance(node, ast.Yield) and isinstance(node.value, ast.Tuple):
                found.update(fixed_words(node.value.elts[1]))
            elif isinstance(node, ast.Assign) and ast.unparse(node.targets[0]) == "rule":
                found.update(fixed_words(node.value))
    return {rule.strip() for rule in found}


def test_messages_has_every_rule_of_the_study() -> None:
    rules = rules_of_the_study()
    assert "the layer of a current needs east and north" in rules
    assert "unknown key" in rules
    assert [rule for rule in sorted(rules) if rule not in messages_page()] == []


def test_messages_has_every_class_of_error() -> None:
    page = messages_page()
    classes = [kind for _, kind in inspect.getmembers(faults, inspect.isclass)]
    assert TrackfitError in classes
    assert [kind.__name__ for kind in classes if f"`{kind.__name__}`" not in page] == []


def test_messages_has_every_status_of_a_fit() -> None:
    section = messages_page().partition("## The fit ")[2].partition(" ## ")[0]
    rows = dict(re.findall(r"\| `([A-Z_]+)` \| (.*?) \|", section))
    assert rows == {status.name: status.sentence for status in FitStatus}


def test_messages_has_every_sentence_of_the_command_line() -> None:
    page = messages_page()
    assert guard.INTERRUPTED in page
    assert guard.TRACEBACK_VARIABLE in page
    for module in (commands, demo, guard):
        for node in ast.walk(ast.parse(inspect.getsource(module))):
            if isinstance(node, ast.Raise) and isinstance(node.exc, ast.Call):
                for piece in fixed_words(node.exc.args[0]):
                    assert piece in page
    assert json.dumps(sorted(code.meaning for code in ExitCode if code.meaning not in page)) == "[]"
