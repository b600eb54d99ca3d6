"""The pages: commands that are really run, links that lead somewhere, nothing of one machine."""

import re
import stat
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
PAGES = sorted([*ROOT.glob("*.md"), *(ROOT / "docs").glob("*.md"), *ROOT.glob("demo_tracks/*.md")])
LINK = re.compile(r"!?\[[^\]]*\]\(([^)\s]+)\)")


def read(page: Path) -> str:
    return page.read_text(encoding="utf-8")


def code_blocks(text: str, language: str) -> list[str]:
    return re.findall(rf"(?m)^```{language}\n(.*?)^```$", text, re.DOTALL)


def joined(script: str) -> str:
    """A script with its continued lines joined, blanks counted once."""
    return re.sub(r"[ \t]+", " ", script.replace("\\\n", " "))


def anchors(page: Path) -> set[str]:
    """The names that a code host gives to a page's headings."""
    without_code = re.sub(r"(?ms)^```.*?^```$", "", read(page))
    headings = re.findall(r"(?m)^#+ (.+)$", without_code)
    return {re.sub(r"[^\w\- ]", "", title.lower()).replace(" ", "-") for title in headings}


def test_the_pages_are_found() -> None:
    names = {page.name for page in PAGES}
    assert {"README.md", "DEVELOPERS.md", "CHANGELOG.md", "index.md", "library.md"} <= names


def test_the_readme_has_two_commands_and_the_check_runs_both() -> None:
    commands = [joined(block).strip() for block in code_blocks(read(ROOT / "README.md"), "bash")]
    assert len(commands) == 2
    run = joined(read(ROOT / ".ci" / "run"))
    for command in commands:
        assert "\n" not in command
        assert command.startswith("python3 -m venv .venv && .venv/bin/pip install ")
        # alone in parentheses: a bare list joined by && does not stop the script at each fault
        assert f"\n(\n {command}\n)" in run, command
    assert commands[0].endswith(" && .venv/bin/trackfit demo")
    assert " -m pytest" in commands[1]


def test_the_check_is_a_program_that_stops_at_the_first_fault() -> None:
    script = ROOT / ".ci" / "run"
    assert script.stat().st_mode & stat.S_IXUSR
    assert "set -euo pipefail" in read(script).splitlines()


def test_the_developers_page_names_the_check_and_every_part_of_the_house() -> None:
    page = read(ROOT / "DEVELOPERS.md")
    assert ".ci/run\n" in page
    modules = {path.stem for path in (ROOT / "trackfit").glob("*.py")} - {"__init__"}
    folders = {path.parent.name for path in (ROOT / "trackfit").glob("*/__init__.py")}
    house = code_blocks(page, "text")[0].replace(
        "study*", " ".join(m for m in modules if "study" in m)
    )
    named = set(re.findall(r"\w+", house))
    assert modules | folders <= named


@pytest.mark.parametrize("page", PAGES, ids=lambda page: page.name)
def test_every_relative_link_leads_somewhere(page: Path) -> None:
    for target in LINK.findall(read(page)):
        if target.startswith(("http:", "https:")):
            continue
        file, _, anchor = target.partition("#")
        there = (page.parent / file).resolve() if file else page
        assert there.exists(), target
        assert there.is_relative_to(ROOT), target
        if anchor:
            assert anchor in anchors(there), target


def test_every_page_is_reached_from_the_readme_and_the_index() -> None:
    docs = {page for page in PAGES if page.parent.name == "docs"}
    for start in (ROOT / "README.md", ROOT / "docs" / "index.md"):
        seen, left = {start}, [start]
        while left:
            page = left.pop()
            for target in LINK.findall(read(page)):
                there = (page.parent / target.partition("#")[0]).resolve()
                if there.suffix == ".md" and there.exists() and there not in seen:
                    seen.add(there)
                    left.append(there)
        assert docs <= seen, start.name


def test_pictures_are_small() -> None:
    pictures = list((ROOT / "docs" / "images").iterdir())
    assert {p.name for p in pictures} == {"track.png", "response.png"}
    assert all(0 < p.stat().st_size < 250_000 for p in pictures)


@pytest.mark.parametrize("page", [*PAGES, ROOT / ".ci" / "run"], ids=lambda page: page.name)
def test_no_page_knows_a_machine_or_a_registry(page: Path) -> None:
    text = read(page).removeprefix("#!/usr/bin/env bash\n")
    # folders of a user or of this machine, and hosts that serve packages
    assert re.findall(r"(?<![\w.])/(?:home|root|work|tmp|opt|Users|usr)/\S*", text) == []
    assert re.findall(r"(?i)\b(?:py|test\.py)pi\b|pythonhosted|index-url|anaconda\.org", text) == []


def test_the_changelog_knows_this_version() -> None:
    project = tomllib.loads(read(ROOT / "pyproject.toml"))["project"]
    assert f"\n## {project['version']}\n" in read(ROOT / "CHANGELOG.md")
