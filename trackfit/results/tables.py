"""Plain tables (CSV, UTF-8, comma, dot, times ISO 8601 in UTC ending in Z).

A spreadsheet runs a cell that begins with = + - or @. In columns of text, such a cell gets an
apostrophe in front (as does one that begins with an apostrophe, so that the way back is exact);
a plain number such as -4.25 stays as it is. `text_from_cell` takes the apostrophe off again.
"""

import re
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np
import pandas as pd

from trackfit.results.inputs import (
    JUDGEMENT_COLUMNS,
    POSITION_COLUMNS,
    POSITION_FLAGS,
    FitLike,
    JudgementLike,
    ResponseLike,
    TrackLike,
)

DRAWS_COMPRESSED_FROM_ROWS = 200_000
"""From so many rows on, drawn paths are written as .csv.gz."""
SET_ASIDE_COLUMNS = ("file", "line", "tag", "time", "lon", "lat", "reason")
OF_THE_TAG = ("tag", "fit_status")
"""What stands before the columns of a filled track: whose it is, and how the fit ended."""
_PARAMETER_COLUMNS = ("parameter", "unit", "estimate", "sd", "lower95", "upper95", "role")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_ACTIVE = frozenset("=+-@\t\r＝＋－＠'")  # the wide forms are run by East Asian spreadsheets


def cell_from_text(text: str) -> str:
    """Return the text made harmless in a spreadsheet.

    Examples
    --------
    >>> cell_from_text("=1+1"), cell_from_text("seal 7"), cell_from_text("-4.25")
    ("'=1+1", 'seal 7', '-4.25')
    """
    lead = text.lstrip(" ")[:1] or text[:1]
    return "'" + text if lead in _ACTIVE and lead and not _NUMBER.fullmatch(text) else text


def text_from_cell(cell: str) -> str:
    """Undo `cell_from_text`.

    Examples
    --------
    >>> text_from_cell("'=1+1"), text_from_cell("seal 7")
    ('=1+1', 'seal 7')
    """
    return cell[1:] if cell.startswith("'") else cell


def iso_times(times: pd.Series) -> list[str]:
    """Format UTC times as ISO 8601 with Z, in seconds or as finely as needed to lose nothing.

    A missing time becomes an empty text.
    """
    stamps = times.dt.tz_convert("UTC").dt.tz_localize(None).to_numpy("datetime64[ns]")
    known = stamps[~np.isnat(stamps)]
    unit = next(u for u in ("s", "ms", "us", "ns") if (known.astype(f"M8[{u}]") == known).all())
    text = np.datetime_as_string(stamps.astype(f"M8[{unit}]"))
    return ["" if np.isnat(s) else f"{t}Z" for s, t in zip(stamps, text, strict=True)]


def write_positions(path: Path, tracks: Sequence[TrackLike]) -> None:
    """Write the positions of all tags: tag, fit_status, then the columns of a filled track."""
    _write(path, positions_table(tracks), _position_format)


def positions_table(tracks: Sequence[TrackLike]) -> pd.DataFrame:
    """Return the tables of all tracks, one under the other, tag and fit_status in front."""
    columns = [*OF_THE_TAG, *POSITION_COLUMNS]
    parts = [t.table.assign(tag=t.tag, fit_status=t.fit_status.name) for t in tracks]
    if not parts:
        return pd.DataFrame(columns=columns)
    return pd.concat(parts, ignore_index=True).loc[:, columns]


def write_parameters(path: Path, fits: Sequence[FitLike]) -> None:
    """Write the parameters of all fits: tag, status, estimates with 95 % limits, and their role."""
    parts = [f.parameters.assign(tag=f.tag, status=f.status.name) for f in fits]
    columns = ["tag", "status", *_PARAMETER_COLUMNS]
    table = pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)
    _write(path, table.loc[:, columns], lambda _: "{:.9g}")


def write_set_aside(path: Path, set_aside: pd.DataFrame) -> None:
    """Write the fixes that were set aside, each with its reason, its cells as they were read."""
    _write(path, set_aside.loc[:, list(SET_ASIDE_COLUMNS)], lambda _: "{:.9g}")


def write_responses(path: Path, responses: Sequence[ResponseLike]) -> None:
    """Write every response: whose and of what, at (in unit), h and its 95 % band in km^2/h."""
    parts = [
        pd.DataFrame({"at": r.at, "h": r.h, "lower95": r.lower95, "upper95": r.upper95}).assign(
            tag=r.tag, fit_status=r.fit_status.name, term=r.term, layer=r.layer, unit=r.unit
        )
        for r in responses
    ]
    columns = [*OF_THE_TAG, "term", "layer", "unit", "at", "h", "lower95", "upper95"]
    table = pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)
    _write(path, table.loc[:, columns], lambda _: "{:.9g}")


def write_judgements(path: Path, judgements: Sequence[JudgementLike]) -> None:
    """Write every used fix with its distance from where all other fixes of its tag place it."""
    _write(path, judgements_table(judgements), _judgement_format)


def judgements_table(judgements: Sequence[JudgementLike]) -> pd.DataFrame:
    """Return the tables of all tags, one under the other, with the column tag in front."""
    parts = [j.table.loc[:, list(JUDGEMENT_COLUMNS)].assign(tag=j.tag) for j in judgements]
    columns = ["tag", *JUDGEMENT_COLUMNS]
    if not parts:
        return pd.DataFrame(columns=columns)
    return pd.concat(parts, ignore_index=True).loc[:, columns]


def _judgement_format(column: str) -> str:
    # A p-value may be as small as 1e-300.
    return "{:.3g}" if column == "p_value" else _position_format(column)


def write_table(path: Path, table: pd.DataFrame) -> None:
    """Write any table: text made harmless, times in UTC, numbers to nine digits."""
    _write(path, table, lambda _: "{:.9g}")


def write_drawn_paths(path: Path, tracks: Sequence[TrackLike]) -> Path:
    """Write drawn paths (tag, draw, time, lon, lat); return the path written.

    A large table gets `.gz` added to its name. Draws count from 1 and run together in time within
    a tag; draw k of one tag has nothing to do with draw k of another.
    """
    table = drawn_table(tracks)
    if len(table) >= DRAWS_COMPRESSED_FROM_ROWS:
        path = path.with_name(path.name + ".gz")
    _write(path, table, _position_format)
    return path


def drawn_table(tracks: Sequence[TrackLike]) -> pd.DataFrame:
    """Return the drawn paths of all tracks: tag, draw (from 1), time, lon, lat."""
    parts = [_drawn_of(t) for t in tracks if len(t.draws_lonlat)]
    if not parts:
        return pd.DataFrame(columns=["tag", "draw", "time", "lon", "lat"])
    return pd.concat(parts, ignore_index=True)


def _drawn_of(track: TrackLike) -> pd.DataFrame:
    draws, times, _ = track.draws_lonlat.shape
    flat = track.draws_lonlat.reshape(-1, 2)
    rows = np.tile(np.arange(times), draws)
    number = np.repeat(np.arange(1, draws + 1), times)
    time = track.draw_times[rows]
    return pd.DataFrame(
        {"tag": track.tag, "draw": number, "time": time, "lon": flat[:, 0], "lat": flat[:, 1]}
    )


def _position_format(column: str) -> str:
    if column.endswith(("lon", "lat")):
        return "{:.6f}"
    return "{:.1f}" if column.endswith("_m") else "{:.3f}"


def _write(path: Path, table: pd.DataFrame, number_format: Callable[[str], str]) -> None:
    """Write a table; compressed, it carries no time stamp: equal tables give equal files."""
    cells = {name: _cells(table[name], number_format(name)) for name in table.columns}
    options: Mapping[str, object] = (
        {"method": "gzip", "compresslevel": 5, "mtime": 0} if path.suffix == ".gz" else {}
    )
    pd.DataFrame(cells, columns=table.columns).to_csv(
        path, index=False, lineterminator="\n", compression=dict(options) or None
    )


def _cells(column: pd.Series, number_format: str) -> list[str]:
    if isinstance(column.dtype, pd.DatetimeTZDtype):
        return iso_times(column)
    if pd.api.types.is_bool_dtype(column.dtype):
        return ["true" if value else "false" for value in column]
    if pd.api.types.is_float_dtype(column.dtype):
        return ["" if np.isnan(v) else number_format.format(v) for v in column.to_numpy(float)]
    if pd.api.types.is_integer_dtype(column.dtype):
        return [str(value) for value in column]
    return ["" if pd.isna(value) else cell_from_text(str(value)) for value in column]


def read_table(path: Path) -> pd.DataFrame:
    """Read back a table written here: text as it was, times in UTC, truth values, numbers."""
    raw = pd.read_csv(path, dtype=str, keep_default_na=False)
    return pd.DataFrame({name: _column(str(name), raw[name]) for name in raw.columns})


_TEXT = frozenset(
    {
        "tag",
        "fit_status",
        "status",
        "role",
        "parameter",
        "unit",
        "term",
        "layer",
        "file",
        "reason",
        "about",
        "finding",
        "sentence",
        "measure",
        "kind",
        "basis",
        "shape",
        "first",
        "second",
        "residuals",
        "model",
        "motion",
        "outcome",
    }
)


def _column(name: str, cells: pd.Series) -> pd.Series:
    if name in _TEXT:
        return cells.map(text_from_cell)
    if name == "time":
        return pd.to_datetime(cells, utc=True, format="ISO8601").dt.as_unit("ns")
    if name in (*POSITION_FLAGS, "flagged", "concern"):
        return cells == "true"
    return pd.to_numeric(cells.mask(cells == ""))


def read_set_aside(path: Path) -> pd.DataFrame:
    """Read back fixes set aside; time, lon and lat stay the text of the user's file."""
    raw = pd.read_csv(path, dtype=str, keep_default_na=False)
    text = raw.map(text_from_cell) if len(raw) else raw
    return text.assign(line=pd.to_numeric(text["line"]))
