"""What one key of a study file is: its description, and the rule its value keeps.

Each check says what is wrong in words; what it needs that is heavy, it imports when called.
"""

import difflib
import math
import os
from collections.abc import Iterable
from datetime import UTC, datetime
from pathlib import Path
from typing import Annotated, Any, Literal, NoReturn

from pydantic import (
    AfterValidator,
    Field,
    PlainSerializer,
    PlainValidator,
    SerializationInfo,
    ValidationInfo,
)
from pydantic_core import PydanticCustomError

ESTIMATED: Literal["estimated"] = "estimated"
"""What a study file writes in place of a number that the fit is to find."""


def setting(
    default: Any,
    meaning: str,
    *,
    unit: str = "",
    shown: str = "",
    **limits: Any,
) -> Any:
    """Describe one key: its default, its meaning in a researcher's words, and its unit.

    Parameters
    ----------
    default
        The value taken when the key is absent; ``...`` when the key must be given.
    meaning
        A sentence or two for the reference page.
    unit
        Unit of the value, in words.
    shown
        What the reference page prints as the default when the value itself would not tell.
    **limits
        Bounds, in pydantic's words (``gt``, ``ge``, ``lt``, ``le``, ``min_length``).
    """
    extra: dict[str, Any] = {"unit": unit, "shown": shown}
    how = {"default_factory": default} if callable(default) else {"default": default}
    return Field(**how, description=meaning, json_schema_extra=extra, **limits)


def refuse(rule: str, *, key: str = "", hint: str = "") -> NoReturn:
    """Refuse a value: the rule it breaks, the key below it meant, what was perhaps meant."""
    # The template is one placeholder so that braces in a rule stay as they are.
    raise PydanticCustomError("rule", "{rule}", {"rule": rule, "key": key, "hint": hint})


def nearest(word: str, known: Iterable[str]) -> str:
    """Return the known word most like the given one, or an empty text when none is like it."""
    by_lower = {name.lower(): name for name in known}
    close = difflib.get_close_matches(word.lower(), by_lower, n=1, cutoff=0.6)
    return by_lower[close[0]] if close else ""


def _study_folder(info: ValidationInfo) -> Path:
    assert info.context is not None, "a study is validated with the folder of its file"
    folder: Path = info.context["folder"]
    return folder


def _given_path(value: Any, info: ValidationInfo) -> Path:
    if not isinstance(value, str):
        refuse("must be text in quotes: a path, relative to the study file")
    if not value.strip():
        refuse("must not be empty")
    return _study_folder(info) / Path(value).expanduser()


def _existing_file(value: Any, info: ValidationInfo) -> Path:
    path = _given_path(value, info)
    if path.is_dir():
        refuse("must be a file, and this is a folder")
    if not path.exists():
        known = [p.name for p in path.parent.iterdir()] if path.parent.is_dir() else []
        near = nearest(path.name, known)
        refuse(
            "no such file (paths are relative to the study file)",
            hint=str(Path(value).with_name(near)) if near else "",
        )
    if not os.access(path, os.R_OK):
        refuse("this file may not be read (see its permissions)")
    return path


def _output_folder(value: Any, info: ValidationInfo) -> Path:
    path = _given_path(value, info)
    blocked = next((p for p in (path, *path.parents) if p.exists() and not p.is_dir()), None)
    if blocked is not None:
        refuse(f'must be a folder, and "{blocked.name}" is a file')
    if _study_folder(info).resolve().is_relative_to(path.resolve()):
        refuse("must be a folder of its own, and this one holds the study file")
    return path


def _as_written(path: Path, info: SerializationInfo) -> str:
    """Write a path as the study file has it: relative to that file, unless it was absolute."""
    folder = info.context["folder"] if info.context else path.anchor
    return (path.relative_to(folder) if path.is_relative_to(folder) else path).as_posix()


def _estimated_or_number(value: Any) -> float | str:
    if value == ESTIMATED and isinstance(value, str):
        return ESTIMATED
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        near = nearest(value, [ESTIMATED]) if isinstance(value, str) else ""
        refuse('must be "estimated" or a number', hint=near)
    return float(value)


def _positive_unless_estimated(value: float | str) -> float | str:
    if isinstance(value, float) and value <= 0:
        refuse("must be greater than 0")
    return value


def _current_share(value: float | str) -> float | str:
    if isinstance(value, float) and not 0 <= value <= 2:
        refuse("must lie between 0 (not carried) and 2")
    return value


def _tail_weight(value: float | str) -> float | str:
    if isinstance(value, float) and not value >= 0.5:
        refuse("must be 0.5 or more")
    return value


def _time_zone(value: str) -> str:
    from zoneinfo import ZoneInfo, available_timezones

    if value == "UTC":
        return value
    try:
        ZoneInfo(value)
    except (KeyError, ValueError, OSError):  # unknown, a path upwards, a folder of the data base
        refuse(
            'unknown time zone; write an IANA name such as "UTC" or "Atlantic/Azores"',
            hint=nearest(value, available_timezones()),
        )
    return value


def _moment(value: Any) -> datetime:
    rule = "must be a date and time with its zone, such as 2024-05-01T06:00:00Z"
    if isinstance(value, str):
        try:
            value = datetime.fromisoformat(value)
        except ValueError:
            refuse(rule)
    # A date is not a moment, and TOML's times without a zone are anyone's.
    if not isinstance(value, datetime) or value.tzinfo is None:
        refuse(rule)
    return value.astimezone(UTC)


def unit_dimensions(unit: str) -> Any:
    """Return what a unit measures; raises where the units library cannot tell."""
    from trackfit.layers.units import registry

    # CF allows a number in a unit ("0.01 m", "1e-3"), which is an expression to the library.
    try:
        return registry.parse_units(unit).dimensionality
    except ValueError:
        return registry.Quantity(registry.parse_expression(unit)).dimensionality


def _unit(value: str) -> str:
    try:
        unit_dimensions(value)
    except Exception:  # the library evaluates the text, so a wrong one raises nearly anything
        refuse('unknown unit; write one as CF files do, such as "m", "degC" or "m s-1"')
    return value


def _projected_crs(value: str) -> str:
    from trackfit.faults import StudyError
    from trackfit.frame import Plane

    try:
        Plane.from_crs(value)
    except StudyError as fault:
        refuse(str(fault).removeprefix("plane.crs: "))
    return value


def _at_least_one(values: tuple[Any, ...]) -> tuple[Any, ...]:
    # Not pydantic's min_length: that one also complains where the only entry is a faulty one.
    if not values:
        refuse("must have at least one entry")
    return values


def _all_different(values: tuple[str, ...]) -> tuple[str, ...]:
    twice = sorted({value for value in values if values.count(value) > 1})
    if twice:
        refuse(f'each entry may stand once, and "{twice[0]}" stands twice')
    return values


Text = Annotated[str, Field(min_length=1)]
Texts = Annotated[tuple[Text, ...], Field(strict=False), AfterValidator(_all_different)]
ExistingFile = Annotated[
    Path, PlainValidator(_existing_file), PlainSerializer(_as_written, when_used="json")
]
Folder = Annotated[
    Path, PlainValidator(_output_folder), PlainSerializer(_as_written, when_used="json")
]
Unit = Annotated[Text, AfterValidator(_unit)]
Moment = Annotated[
    datetime, PlainValidator(_moment), PlainSerializer(datetime.isoformat, when_used="json")
]
TimeZone = Annotated[Text, AfterValidator(_time_zone)]
ProjectedCrs = Annotated[Text, AfterValidator(_projected_crs)]
_Estimable = Annotated[float | Literal["estimated"], PlainValidator(_estimated_or_number)]
ErrorScale = Annotated[_Estimable, AfterValidator(_positive_unless_estimated)]
TailWeight = Annotated[_Estimable, AfterValidator(_tail_weight)]
CurrentShare = Annotated[_Estimable, AfterValidator(_current_share)]
PositiveMetres = Annotated[float, Field(gt=0)]
Format = Literal["csv", "geopackage", "geojson", "netcdf"]
Formats = Annotated[
    tuple[Format, ...],
    Field(strict=False),
    AfterValidator(_at_least_one),
    AfterValidator(_all_different),
]
Files = Annotated[tuple[ExistingFile, ...], Field(strict=False), AfterValidator(_at_least_one)]
