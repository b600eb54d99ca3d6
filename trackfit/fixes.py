"""Tables of fixes: read, check, and set aside with a reason.

Every row of a file ends in one of two tables: the fixes that can be used, and the rows set aside
with the file, the line, the cells as read and the reason. Nothing vanishes.
"""

from collections import Counter
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo, available_timezones

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from trackfit.counted import counted
from trackfit.faults import FixesError
from trackfit.fix_files import COLUMNS, RawFixes, nearest, read_raw

__all__ = ["COLUMNS", "Fixes", "read_fixes"]

_PLACE = ["tag", "time", "lon", "lat"]
_SET_ASIDE = ["file", "line", *_PLACE, "reason"]
_SIZES = ("gps_sd_m", "ellipse_major_m", "ellipse_minor_m")
_ELLIPSE = ["ellipse_major_m", "ellipse_minor_m", "ellipse_bearing_deg"]
_MISSING = pa.array(["", "na", "n/a", "nan", "nat", "null", "none"])
_NUMBER = r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$"
_CLOCK = r"^(19|20)\d\d-\d\d-\d\d[Tt ]\d\d:\d\d(:\d\d([.,]\d{1,9})?)?"
_ZONE = r" ?([Zz]|[+-]\d\d(:?\d\d)?)"


@dataclass(frozen=True)
class Fixes:
    """The fixes of some files, and the rows set aside.

    Attributes
    ----------
    table
        One row per usable fix, sorted by tag and time: the columns of `COLUMNS`, then `file` and
        `line`. `time` is datetime64[ns, UTC]; `lon` in [-180, 180) and `lat` are degrees, WGS 84;
        error sizes are metres; `ellipse_bearing_deg` is clockwise from true north. What a file does
        not state is NaN.
    set_aside
        `file, line, tag, time, lon, lat, reason`; the cells are the text as read. A reason is a
        rule; where `set_aside` has no column for the cell that breaks it, the cell follows a colon.
    notes
        Sentences on what was done to the files and loses no fix.
    """

    table: pd.DataFrame
    set_aside: pd.DataFrame
    notes: tuple[str, ...] = ()

    @property
    def tags(self) -> list[str]:
        """The tags that have a usable fix, sorted."""
        return [str(tag) for tag in pd.unique(self.table["tag"])]

    def of(self, tag: str) -> pd.DataFrame:
        """Rows of `table` of one tag, in time order, numbered from 0.

        Raises
        ------
        FixesError
            Where the tag has no usable fix.
        """
        if tag not in self.tags:
            raise FixesError(f"tag {tag!r} has no usable fix{nearest(tag, self.tags)}")
        return self.table[self.table["tag"] == tag].reset_index(drop=True)

    def setting_aside(
        self, mask: Collection[Any], reason: str, shown: Collection[Any] | None = None
    ) -> "Fixes":
        """Move rows of `table` to `set_aside`.

        The cells are written anew here (ISO 8601 in UTC, shortest decimals): the text as read is
        on the line named.

        Parameters
        ----------
        mask
            True where the row moves, (len(table),).
        reason
            The rule; no colon in it.
        shown
            Texts of what breaks the rule, to follow it after a colon, (len(table),); of rows that
            stay, anything.
        """
        moves = np.asarray(mask, dtype=bool)
        if moves.shape != (len(self.table),):
            raise ValueError(f"mask has shape {moves.shape}, not ({len(self.table)},)")
        moved = self.table[moves]
        figures = [""] * len(moved)
        if shown is not None:
            figures = [f": {text}" for text in np.asarray(shown, dtype=object)[moves]]
        cells = moved[["file", "line", "tag"]].assign(
            time=[time.isoformat().replace("+00:00", "Z") for time in moved["time"]],
            lon=[repr(float(value)) for value in moved["lon"]],
            lat=[repr(float(value)) for value in moved["lat"]],
            reason=[reason + figure for figure in figures],
        )
        aside = (
            pd.concat([self.set_aside, cells], ignore_index=True) if len(cells) else self.set_aside
        )
        return replace(self, table=self.table[~moves].reset_index(drop=True), set_aside=aside)

    def reason_counts(self) -> dict[str, int]:
        """How many rows each rule set aside, most first."""
        return dict(Counter(self.set_aside["reason"].str.partition(": ")[0]).most_common())


def read_fixes(
    files: Sequence[Path],
    columns: Mapping[str, str] | None = None,
    *,
    delimiter: str | None = None,
    decimal: str = ".",
    time_zone: str = "UTC",
) -> Fixes:
    r"""Read and check tables of fixes: CSV (plain or gzip) and Parquet, UTF-8.

    Times are ISO 8601, years 1900 to 2099. Longitudes run -180..180 or 0..360. Empty cells and NA,
    N/A, NaN, NaT, null, none are missing. Of fixes of a tag at the same instant the first is kept.

    Parameters
    ----------
    files
        Read in this order.
    columns
        Our name to the header in the files; a name that is not here is its own header. `tag` may
        be absent: then the tag is the file's name without its suffixes.
    delimiter
        One character; None takes comma, semicolon, tab or bar, whichever suits the header.
    decimal
        "." or ",": the decimal mark of text files.
    time_zone
        IANA name of the zone of times that state none.

    Raises
    ------
    FixesError
        Where a file cannot be read, a column is not there, a file has no row, no row of all is a
        usable fix, or an argument is none of the above.

    Examples
    --------
    >>> import tempfile
    >>> folder = Path(tempfile.mkdtemp())
    >>> _ = (folder / "seal.csv").write_text("when,x,y\n2012-10-21 19:00+01:00,355,50\n?,1,2\n")
    >>> fixes = read_fixes([folder / "seal.csv"], {"time": "when", "lon": "x", "lat": "y"})
    >>> fixes.table[["tag", "lon", "line"]].to_numpy().tolist()
    [['seal', -5.0, 2]]
    >>> fixes.set_aside[["line", "time"]].to_numpy().tolist()
    [[3, '?']]
    """
    columns = dict(columns or {})
    _check_arguments(files, columns, delimiter, decimal, time_zone)
    raws = [
        read_raw(Path(path), file, columns, delimiter, decimal)
        for path, file in zip(files, _file_names(files), strict=True)
    ]
    for raw in raws:
        if len(raw.lines) == 0:
            raise FixesError(f"{raw.file}: has a header and no row; take it out of the files")
    rows = pd.concat([_judged(raw, time_zone) for raw in raws], ignore_index=True)
    fixes = _parted(rows)
    if len(fixes.table) == 0:
        raise FixesError(_nothing_usable(fixes, raws))
    notes = [note for raw in raws for note in _notes(raw, fixes.table)]
    return replace(fixes, notes=(*notes, *_order_notes(fixes.table)))


def _check_arguments(
    files: Sequence[Path],
    columns: Mapping[str, str],
    delimiter: str | None,
    decimal: str,
    time_zone: str,
) -> None:
    if len(files) == 0:
        raise FixesError("files: no file of fixes is named")
    for name in columns:
        if name not in COLUMNS:
            known = ", ".join(COLUMNS)
            raise FixesError(
                f"columns: {name!r} is none of our columns{nearest(name, list(COLUMNS))}; "
                f"they are {known}"
            )
    for header, count in Counter(columns.values()).items():
        if count > 1:
            names = " and ".join(name for name in columns if columns[name] == header)
            raise FixesError(f"columns: {names} are mapped to the same header {header!r}")
    if decimal not in (".", ","):
        raise FixesError(f"decimal: {decimal!r} is neither '.' nor ','")
    if delimiter is not None and (len(delimiter) != 1 or delimiter in '"\r\n'):
        raise FixesError(f"delimiter: {delimiter!r} is not one character that can part cells")
    if time_zone != "UTC" and time_zone not in available_timezones():
        zones = sorted(available_timezones())
        raise FixesError(f"time_zone: {time_zone!r} is no IANA zone{nearest(time_zone, zones)}")


def _file_names(files: Sequence[Path]) -> list[str]:
    """Bare names where they differ, else the paths as given."""
    names = [Path(path).name for path in files]
    return names if len(set(names)) == len(names) else [str(path) for path in files]


class _Verdict:
    """One reason per row, "" while it passes; the first reason stays."""

    def __init__(self, rows: int, first: Mapping[int, str]) -> None:
        self.reasons = np.full(rows, "", dtype=object)
        self.reasons[list(first)] = list(first.values())
        self._passing = self.reasons == ""

    def refuse(self, mask: np.ndarray, reason: str, shown: pa.ChunkedArray | None = None) -> None:
        """Set a reason where the mask holds; `shown` are cells to follow it."""
        rows = np.flatnonzero(mask & self._passing)
        if shown is None:
            self.reasons[rows] = reason
        else:
            self.reasons[rows] = [f"{reason}: {cell}" for cell in shown.take(rows).to_pylist()]
        self._passing[rows] = False


def _judged(raw: RawFixes, time_zone: str) -> pd.DataFrame:
    """All rows of a file: values, raw cells (`as read`), and a reason, "" for usable rows."""
    rows = len(raw.lines)
    absent = pa.chunked_array([pa.nulls(rows, pa.string())])
    as_read = {name: raw.cells.get(name, absent) for name in COLUMNS}
    if "tag" not in raw.cells:
        as_read["tag"] = pa.chunked_array([pa.repeat(raw.stem, rows)])
    cells = {name: _present(column) for name, column in as_read.items()}
    verdict = _Verdict(rows, raw.misfits)
    for name in _PLACE:
        verdict.refuse(_mask(pc.is_null(cells[name])), f"{name} is missing")
    values = {"tag": cells["tag"].to_pandas(), "time": _times(cells["time"], time_zone, verdict)}
    values |= _places(cells, raw.decimal, verdict)
    values |= _errors(cells, raw.decimal, verdict)
    frame = pd.DataFrame(values)[list(COLUMNS)].assign(file=raw.file, line=raw.lines)
    for name in _PLACE:
        frame[f"{name} as read"] = pc.fill_null(as_read[name], "").to_pandas()
    return frame.assign(reason=verdict.reasons)


def _present(column: pa.ChunkedArray) -> pa.ChunkedArray:
    """Cells without the blanks around them; null where missing."""
    trimmed = pc.utf8_trim_whitespace(column)
    missing = pc.is_in(pc.utf8_lower(trimmed), value_set=_MISSING)
    return pc.if_else(missing, pa.scalar(None, pa.string()), trimmed)


def _mask(column: pa.ChunkedArray) -> np.ndarray:
    return pc.fill_null(column, False).to_numpy().astype(bool)


def _numbers(column: pa.ChunkedArray, decimal: str) -> tuple[np.ndarray, np.ndarray]:
    """Values (NaN where there is none) and where a cell is no number."""
    if decimal == ",":
        # A dot in such a file may part thousands: it is no number rather than a wrong one.
        dotted = pc.match_substring(column, ".")
        column = pc.if_else(dotted, "?", pc.replace_substring(column, ",", "."))
    fits = pc.match_substring_regex(column, _NUMBER)
    values = pc.if_else(fits, column, pa.scalar(None, pa.string())).cast(pa.float64())
    return values.to_numpy().astype(float), _mask(pc.invert(fits))


def _times(column: pa.ChunkedArray, time_zone: str, verdict: _Verdict) -> pd.Series:
    fits = pc.match_substring_regex(column, f"{_CLOCK}({_ZONE})?$")
    text = pc.replace_substring(pc.utf8_upper(column), ",", ".")
    text = pc.if_else(fits, text, pa.scalar(None, pa.string()))
    instants = pd.to_datetime(text.to_pandas(), format="ISO8601", errors="coerce", utc=True)
    times = pd.Series(instants).astype("datetime64[ns, UTC]")
    verdict.refuse(times.isna().to_numpy(), "time is not an ISO 8601 date and time of 1900 to 2099")
    local = times.notna().to_numpy() & ~_mask(pc.match_substring_regex(column, f"{_ZONE}$"))
    if time_zone != "UTC" and local.any():
        times[local] = _located(times[local], local, ZoneInfo(time_zone), verdict)
    return times


def _located(clock: pd.Series, rows: np.ndarray, zone: ZoneInfo, verdict: _Verdict) -> pd.Series:
    """Clock times of a zone as instants; refuses those that a clock change skips or repeats."""
    naive = clock.dt.tz_localize(None)
    first = np.ones(len(naive), dtype=bool)
    skipped = naive.dt.tz_localize(zone, ambiguous=first, nonexistent="NaT").isna().to_numpy()
    found = naive.dt.tz_localize(zone, ambiguous="NaT", nonexistent="NaT")
    for mask, fault in (
        (skipped, "does not exist"),
        (found.isna().to_numpy() & ~skipped, "happens twice"),
    ):
        whole = rows.copy()
        whole[rows] = mask
        verdict.refuse(whole, f"time {fault} in {zone.key}, where the clocks change")
    return found.dt.tz_convert("UTC")


def _places(
    cells: Mapping[str, pa.ChunkedArray], decimal: str, verdict: _Verdict
) -> dict[str, np.ndarray]:
    lon, not_lon = _numbers(cells["lon"], decimal)
    lat, not_lat = _numbers(cells["lat"], decimal)
    verdict.refuse(not_lon, f"lon is not a number with the decimal mark '{decimal}'")
    verdict.refuse(not_lat, f"lat is not a number with the decimal mark '{decimal}'")
    verdict.refuse((lon < -180.0) | (lon > 360.0), "lon lies outside -180 to 360 degrees")
    verdict.refuse(np.abs(lat) > 90.0, "lat lies outside -90 to 90 degrees")
    return {"lon": np.where(lon >= 180.0, lon - 360.0, lon), "lat": lat}


def _errors(
    cells: Mapping[str, pa.ChunkedArray], decimal: str, verdict: _Verdict
) -> dict[str, np.ndarray | pd.Series]:
    values: dict[str, np.ndarray | pd.Series] = {}
    for name in _SIZES:
        values[name], wrong = _numbers(cells[name], decimal)
        wrong |= (values[name] <= 0.0) | np.isinf(values[name])
        verdict.refuse(wrong, f"{name} is not a positive number", cells[name])
    bearing, wrong = _numbers(cells["ellipse_bearing_deg"], decimal)
    wrong |= np.isinf(bearing)
    verdict.refuse(wrong, "ellipse_bearing_deg is not a number", cells["ellipse_bearing_deg"])
    swapped = values["ellipse_minor_m"] > values["ellipse_major_m"]
    verdict.refuse(
        np.asarray(swapped), "ellipse_minor_m exceeds ellipse_major_m", cells["ellipse_minor_m"]
    )
    # Spreadsheets and data frames write class 3 as 3.0 once a cell of the column is empty.
    classes = pc.replace_substring_regex(cells["error_class"], r"^(\d+)\.0+$", r"\1")
    return values | {"ellipse_bearing_deg": bearing, "error_class": classes.to_pandas()}


def _parted(rows: pd.DataFrame) -> Fixes:
    """Usable rows, sorted, and the others; of rows at one instant of a tag the first is usable."""
    usable = rows[rows["reason"] == ""]
    codes, _ = pd.factorize(usable["tag"], sort=True)
    keys = usable[["time", "lon", "lat"]].assign(code=codes)
    again = keys.duplicated(["code", "time"])
    copies = keys.duplicated(["code", "time", "lon", "lat"])
    rows.loc[usable.index[again], "reason"] = "a second fix of the tag at the same time"
    rows.loc[usable.index[copies], "reason"] = "the same tag, time and place as an earlier row"
    order = np.lexsort((usable["time"].astype("int64"), codes))
    order = order[~again.to_numpy()[order]]
    table = usable[[*COLUMNS, "file", "line"]].iloc[order].reset_index(drop=True)
    aside = rows[rows["reason"] != ""]
    as_read = aside[["file", "line", *(f"{name} as read" for name in _PLACE), "reason"]]
    return Fixes(table, as_read.set_axis(_SET_ASIDE, axis=1).reset_index(drop=True))


def _nothing_usable(fixes: Fixes, raws: Sequence[RawFixes]) -> str:
    files = ", ".join(raw.file for raw in raws)
    reasons = "; ".join(f"{count} x {reason}" for reason, count in fixes.reason_counts().items())
    first = fixes.set_aside.iloc[0]
    cells = ", ".join(f"{name} {first[name]!r}" for name in _PLACE)
    return (
        f"{files}: {_no_row(len(fixes.set_aside))} ({reasons}); "
        f"line {first['line']} reads {cells}: check the columns, the decimal mark and the delimiter"
    )


def _notes(raw: RawFixes, table: pd.DataFrame) -> list[str]:
    """Tell what a user should know of a file beyond the rows set aside."""
    notes = list(raw.notes)
    if "tag" not in raw.cells:
        notes.append(f"{raw.file}: has no column of tags; its rows are tag {raw.stem!r}")
    usable = table[table["file"] == raw.file]
    if len(usable) == 0:
        notes.append(f"{raw.file}: {_no_row(len(raw.lines))}")
    stated = usable[_ELLIPSE].notna().sum(axis=1)
    partial = int(((stated > 0) & (stated < len(_ELLIPSE))).sum())
    if partial:
        state = counted(partial, "row states", "rows state")
        notes.append(f"{raw.file}: {state} a part of an ellipse; it is not used")
    return notes


def _no_row(count: int) -> str:
    return (
        "its only row is no usable fix" if count == 1 else f"none of {count} rows is a usable fix"
    )


def _order_notes(table: pd.DataFrame) -> list[str]:
    """How many rows of each file came after a later fix of their tag."""
    by_line = table.sort_values(["file", "line"], kind="stable")
    stamps = by_line["time"].astype("int64")
    latest = stamps.groupby([by_line["file"], by_line["tag"]]).cummax()
    late = by_line["file"][stamps < latest].value_counts(sort=False)
    return [
        f"{file}: {counted(count, 'row was', 'rows were')} out of time order and were sorted"
        for file, count in late.items()
    ]
