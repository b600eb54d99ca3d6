"""For all tests: fixed seeds, one demonstration fitted once, and shapes checked where asked.

`CHECK_TYPES=1 python -m pytest` checks every annotation as it runs in the modules of `CHECKED`: not
in study, results and report, whose structural types cannot be asked at run time. It is no part of a
plain run since it makes the tests of the engine take 1.4 times as long; `.ci/run` checks a part.
"""

import os
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import hypothesis
import pytest
from jaxtyping import install_import_hook

CHECKED = (
    "analysis criticism errors fix_files fixes frame inference judgement layers paths responses "
    "screening sea usable"
)
UNCHECKED = ("inference.derivatives", "inference.parameters", "inference.process", "layers.splines")
"""Compiled functions that take blocks of scalars and vectors, as all of `motion` does."""


def checked_modules() -> list[str]:
    """Names of the modules whose annotations are checked."""
    root = Path(__file__).parent.parent / "trackfit"
    names = [".".join(p.relative_to(root).with_suffix("").parts) for p in root.rglob("*.py")]
    chosen = [n for n in names if n.split(".")[0] in CHECKED.split() and n not in UNCHECKED]
    return [f"trackfit.{n}" for n in sorted(chosen) if not n.endswith("__init__")]


if os.environ.get("CHECK_TYPES"):
    install_import_hook(checked_modules(), "type_checker.checked")

hypothesis.settings.register_profile("trackfit", deadline=None, derandomize=True)
hypothesis.settings.load_profile("trackfit")

DEMO_TAGS = ("TI-P01", "TI-S02")
"""One tag with GPS, one with ellipses and classes."""


@dataclass(frozen=True)
class Demo:
    """The demonstration, prepared with two of its tags, and what the library makes of it."""

    folder: Path

    @cached_property
    def prepared(self):
        import trackfit

        return trackfit.prepare(trackfit.read_study(self.folder / "study.toml"))

    @cached_property
    def fits(self):
        import trackfit

        return trackfit.fit_tags(self.prepared)

    @cached_property
    def tracks(self):
        import trackfit

        return trackfit.fill_tracks(self.prepared, self.fits)


def copied_demo(folder: Path, *, tags=DEMO_TAGS, **keys: str) -> Path:
    """Copy the demonstration, keep some tags, and set keys: `section__key="TOML value"`.

    Returns the study file.
    """
    from trackfit_cli.demo import copy_demo

    study = copy_demo(folder)
    text = study.read_text()
    keys = {"study__tags": "[" + ", ".join(f'"{tag}"' for tag in tags) + "]"} | keys
    for place, value in keys.items():
        section, key = place.split("__")
        lines = [
            line for line in text.splitlines() if not line.split("#")[0].startswith(f"{key} =")
        ]
        if f"[{section}]" not in lines:
            lines += ["", f"[{section}]"]
        at = lines.index(f"[{section}]")
        text = "\n".join([*lines[: at + 1], f"{key} = {value}", *lines[at + 1 :]]) + "\n"
    study.write_text(text)
    return study


@pytest.fixture(scope="session")
def demo(tmp_path_factory) -> Demo:
    """The demonstration with two tags; each stage is made when first asked for."""
    folder = tmp_path_factory.mktemp("demo") / "tarrow"
    copied_demo(folder)
    return Demo(folder)
