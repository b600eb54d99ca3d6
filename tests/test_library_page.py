"""docs/library.md: its code runs, and its list of names is whole."""

import os
import re
import subprocess
import sys
from collections import Counter
from pathlib import Path

import pandas as pd
import pytest
from trackfit_cli.demo import copy_demo

import trackfit

PAGE = (Path(__file__).parent.parent / "docs" / "library.md").read_text(encoding="utf-8")
TAGS = ["TI-P02", "TI-S02"]


@pytest.fixture(scope="module")
def ran(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str]:
    """The page's code, run as a program of its own beside a smaller copy of the demonstration."""
    folder = tmp_path_factory.mktemp("demo")
    study = copy_demo(folder)
    text = study.read_text(encoding="utf-8")
    smaller = re.sub(r"(?m)^seed = 1\b", f"tags = {TAGS}\nseed = 1", text)
    smaller = re.sub(r"(?m)^draws = 20\b", "draws = 3", smaller)
    smaller = smaller.replace("[output]\n", '[output]\nfigures = false\nformats = ["csv"]\n')
    assert all(key in smaller for key in ("tags = ", "draws = 3", "figures = false"))
    study.write_text(smaller, encoding="utf-8")
    (code,) = re.findall(r"```python\n(.*?)```", PAGE, re.DOTALL)
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        cwd=folder,
        env=os.environ | {"PYTHONIOENCODING": "utf-8"},
        capture_output=True,
        encoding="utf-8",
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return folder, done.stdout


def test_the_code_says_what_the_page_promises(ran: tuple[Path, str]) -> None:
    _, said = ran
    for tag in TAGS:
        assert f"{tag} The fit converged." in said
        assert re.search(
            rf"^{tag}: liked best of temperature: 1[01]\.\d+ degC$", said, re.MULTILINE
        )
        assert re.search(rf"^{tag} \d+ positions, \d+ in gaps, 3 draws$", said, re.MULTILINE)


def test_the_code_writes_results_that_read_back(ran: tuple[Path, str]) -> None:
    results = trackfit.read_results(ran[0] / "results-of-python")
    assert sorted(results.positions["tag"].unique()) == TAGS
    assert results.drawn_paths.groupby("tag")["draw"].nunique().to_dict() == dict.fromkeys(TAGS, 3)
    truth = pd.read_csv(ran[0] / "truth" / "true_parameters.csv")
    met = results.parameters.merge(truth, on=["tag", "parameter"])
    assert len(met) == 12
    # Four standard deviations: all twelve lie inside unless the calls are mixed up.
    assert ((met["estimate"] - met["value"]).abs() < 4 * met["sd"]).all()


def test_the_list_of_names_is_the_door() -> None:
    listed = re.findall(r"(?m)^\| `(\w+)` \|", PAGE)
    assert Counter(listed) == Counter(trackfit.__all__)


def test_every_name_opens_and_is_described() -> None:
    for name in trackfit.__all__:
        thing = getattr(trackfit, name)
        assert name == "CLASS_SD_M" or thing.__doc__, name
