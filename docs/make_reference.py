"""Write the reference pages from their sources: the study file's schema and the commands' help.

Run ``python docs/make_reference.py`` after a change of either; with ``--check`` nothing is written
and the exit code tells whether a page is stale.
"""

import sys
from collections.abc import Callable, Iterator
from datetime import datetime
from pathlib import Path
from typing import Any, get_args, get_origin

import click
from pydantic import BaseModel
from pydantic.fields import FieldInfo
from trackfit_cli.app import app

from trackfit.study import Study
from trackfit.study_faults import keys_of, plain_type, tables

HERE = Path(__file__).parent
WIDTH = 88
BUILT = "<!-- Written by docs/make_reference.py; change the source, not this page. -->\n"

STUDY_OPENING = """\
# The study file

A study is one TOML file. It names the fixes, the layers and all that is asked of them; a key left
out takes the default shown here. Unknown keys are refused. Faults are reported at once, each with
its line. Files are named relative to the study file.

The shortest study:

```toml
[study]
name = "First look"

[fixes]
files = ["fixes.csv"]
```

In messages the entries of a list are counted from 1: `preference[2].layer` is the `layer` of the
second `[[preference]]`.
"""

COMMANDS_OPENING = """\
# The commands

The answer goes to stdout, the story (notes, progress, faults) to stderr. What a message means and
what to do about it stands in [messages.md](messages.md), the study file in
[study-file.md](study-file.md).
"""


def study_page() -> str:
    """Return the page on the study file."""
    parts = [STUDY_OPENING]
    for header, table in tables(Study):
        parts.append(f"## `{header}`\n\n{_summary(table)}\n")
        parts.append("\n".join(_rows(table)) + "\n")
    return "\n".join([BUILT, *parts])


def commands_page() -> str:
    """Return the page on the commands."""
    shape: dict[str, Any] = {**app.context_settings, "terminal_width": WIDTH}
    group = click.Context(app, info_name="trackfit", **shape)
    parts = [COMMANDS_OPENING, _help("trackfit", app, group)]
    for name, command in app.commands.items():
        inner = click.Context(command, parent=group, info_name=name, **shape)
        parts.append(_help(f"trackfit {name}", command, inner))
    return "\n".join([BUILT, *parts])


PAGES: dict[str, Callable[[], str]] = {
    "study-file.md": study_page,
    "commands.md": commands_page,
}


def _help(title: str, command: click.Command, context: click.Context) -> str:
    return f"## {title}\n\n```text\n{command.get_help(context).rstrip()}\n```\n"


def _summary(table: type[BaseModel]) -> str:
    doc = (table.__doc__ or "").strip()
    return "\n".join(line.strip() for line in doc.splitlines())


def _rows(table: type[BaseModel]) -> Iterator[str]:
    yield "| key | value | default | meaning |"
    yield "|---|---|---|---|"
    inner = {header.strip("[]") for header, _ in tables(table)}
    for name, field in keys_of(table).items():
        meaning = field.description or ""
        if name in inner:
            meaning += " See the table of its own below."
        cells = (f"`{name}`", _value(field), _default(field), meaning)
        yield "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _extra(field: FieldInfo) -> dict[str, Any]:
    return field.json_schema_extra if isinstance(field.json_schema_extra, dict) else {}


def _value(field: FieldInfo) -> str:
    """Say what may stand there: kind, unit and limits."""
    unit = str(_extra(field).get("unit", ""))
    return ", ".join(part for part in (_kind(field.annotation), unit, _limits(field)) if part)


_KINDS: dict[Any, str] = {
    str: "text",
    int: "whole number",
    float: "number",
    bool: "`true` or `false`",
    Path: "path",
    datetime: "date and time",
}


def _kind(annotation: Any) -> str:
    plain = plain_type(annotation)
    inner = get_args(plain)
    if get_origin(plain) is tuple:
        return f"list of {_kind(inner[0])}"
    if get_origin(plain) is dict:
        return f"table of {_kind(inner[1])}"
    if inner and all(isinstance(choice, str) for choice in inner):
        return " or ".join(f'`"{choice}"`' for choice in inner)
    if inner:
        return " or ".join(_kind(one) for one in inner)
    return _KINDS.get(plain, "table")


_SIGNS = {"gt": "above", "ge": "at least", "lt": "below", "le": "at most"}


def _limits(field: FieldInfo) -> str:
    found = [
        f"{words} {_number(getattr(rule, sign))}"
        for rule in field.metadata
        for sign, words in _SIGNS.items()
        if getattr(rule, sign, None) is not None
    ]
    return ", ".join(found)


def _number(value: float) -> str:
    return str(value) if isinstance(value, int) else f"{value:.4g}"


def _default(field: FieldInfo) -> str:
    extra = _extra(field)
    if field.is_required():
        return "required"
    if extra.get("shown"):
        return str(extra["shown"])
    if field.default is None or field.default_factory is not None:
        return "none"
    value = field.default
    text = str(value).lower() if isinstance(value, bool) else repr(value).replace("'", '"')
    return f"`{text}`"


def stale() -> list[str]:
    """Return the names of the pages that differ from what would be written."""
    return [
        name
        for name, page in PAGES.items()
        if not (HERE / name).exists() or (HERE / name).read_text(encoding="utf-8") != page()
    ]


def main(arguments: list[str]) -> int:
    """Write the pages, or with ``--check`` name the stale ones and return 1."""
    old = stale()
    if arguments == ["--check"]:
        sys.stderr.write(
            "".join(f"docs/{name} is stale: run docs/make_reference.py\n" for name in old)
        )
        return int(bool(old))
    for name in old:
        (HERE / name).write_text(PAGES[name](), encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
