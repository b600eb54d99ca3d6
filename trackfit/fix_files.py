"""Files of fixes as text cells: every row with its line, nothing yet judged.

Text files are told by their content: gzip and Parquet by signature, the delimiter by the header.
All cells become text here, so that CSV and Parquet are judged by the same rules (`trackfit.fixes`).
"""

import contextlib
import csv
import difflib
import gzip
import io
import itertools
import operator
import re
import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from trackfit.counted import counted
from trackfit.faults import FixesError

COLUMNS = (
    "tag",
    "time",
    "lon",
    "lat",
    "gps_sd_m",
    "error_class",
    "ellipse_major_m",
    "ellipse_minor_m",
    "ellipse_bearing_deg",
)
_REQUIRED = ("time", "lon", "lat")
_DELIMITERS = (",", ";", "\t", "|")
_CHUNK_ROWS = 50_000
_LINE_END = re.compile(r"\r\n|\r|\n")


@dataclass(frozen=True)
class RawFixes:
    """The cells of one file, as text.

    Attributes
    ----------
    file, stem
        The name in messages; the name without suffixes (the tag where there is no such column).
    decimal
        The decimal mark of its numbers.
    lines
        Line on which each row starts, (n,); the header of a plain file is line 1. The rows of
        Parquet count as if it had a header: the first is 2.
    cells
        Our name to text, (n,); only the columns that the file has. A missing cell is null.
    misfits
        Row to the reason, for rows whose number of cells is not the header's.
    notes
        Sentences on the file that a user should know.
    """

    file: str
    stem: str
    decimal: str
    lines: np.ndarray
    cells: dict[str, pa.ChunkedArray]
    misfits: dict[int, str]
    notes: tuple[str, ...] = ()


def read_raw(
    path: Path, file: str, columns: Mapping[str, str], delimiter: str | None, decimal: str
) -> RawFixes:
    """Read one file; `file` is its name in messages.

    Raises
    ------
    FixesError
        Where it cannot be read or decoded, is empty, or lacks a column.
    """
    data = _bytes(path, file)
    if data[:4] == b"PAR1":
        return _read_parquet(data, path, file, columns)
    return _read_text(_unpacked(data, file), path, file, columns, delimiter, decimal)


def nearest(word: str, words: list[str]) -> str:
    """Suggest the nearest of some words in a clause; nothing where none is near."""
    by_fold = {known.casefold(): known for known in words}
    close = difflib.get_close_matches(word.casefold(), by_fold, n=1, cutoff=0.5)
    return f" - did you mean {by_fold[close[0]]!r}?" if close else ""


def _bytes(path: Path, file: str) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise FixesError(f"{file}: cannot be read: {error.strerror}") from error


def _unpacked(data: bytes, file: str) -> bytes:
    if data[:4] == b"PK\x03\x04":
        raise FixesError(f"{file}: is a zip archive or a spreadsheet; save it as CSV")
    if data[:2] != b"\x1f\x8b":
        return data
    try:
        return gzip.decompress(data)
    except (OSError, EOFError, zlib.error) as error:
        raise FixesError(f"{file}: is a damaged gzip file ({error}); fetch it again") from error


def _check_utf8(data: bytes, file: str) -> None:
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        raise FixesError(f"{file}: is UTF-16 text; save it as UTF-8")
    try:
        data.decode("utf-8")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise FixesError(
            f"{file}:{line}: is not UTF-8 text (byte 0x{data[error.start]:02X}); save it as UTF-8"
        ) from error


def _lines(data: bytes) -> io.TextIOWrapper:
    """Split UTF-8 text into lines, ends kept; a byte order mark is skipped."""
    return io.TextIOWrapper(io.BytesIO(data), encoding="utf-8-sig", newline="")


def _read_text(
    data: bytes,
    path: Path,
    file: str,
    columns: Mapping[str, str],
    delimiter: str | None,
    decimal: str,
) -> RawFixes:
    _check_utf8(data, file)
    if delimiter is None:
        delimiter = _sniffed(data, columns)
    try:
        rows = _gathered(csv.reader(_lines(data), delimiter=delimiter), columns, file)
    except csv.Error as error:
        raise FixesError(
            f"{file}:{_failing_line(data, delimiter)}: cannot be parted into cells: {error}; "
            "look for a quotation mark that is never closed"
        ) from error
    if b'"' in data:
        _refuse_open_quote(data, delimiter, file, rows.last_line)
    return rows.finished(file, _stem(path), decimal)


def _gathered(reader: Any, columns: Mapping[str, str], file: str) -> "_Rows":
    header = next((cells for cells in reader if not _is_blank(cells)), None)
    if header is None:
        raise FixesError(f"{file}: is empty; a header and one row per fix are needed")
    rows = _Rows(len(header), _places([cell.strip() for cell in header], columns, file))
    before = reader.line_num
    while records := list(itertools.islice(reader, _CHUNK_ROWS)):
        rows.add(records, before + 1, reader.line_num)
        before = reader.line_num
    return rows


@dataclass
class _Rows:
    """Collects records column by column; a chunk at a time, to hold few Python strings."""

    width: int
    places: dict[str, int]
    last_line: int = 0
    _count: int = 0
    _misfits: dict[int, str] = field(default_factory=dict)
    _lines: list[np.ndarray] = field(default_factory=list)
    _chunks: dict[str, list[pa.Array]] = field(default_factory=dict)
    _long_lines: list[int] = field(default_factory=list)

    def add(self, records: list[list[str]], first_line: int, last_line: int) -> None:
        """Take the records that stand on these lines."""
        spans = np.ones(len(records), dtype=np.int64)
        if len(records) != last_line - first_line + 1:
            spans[:] = [_line_count(cells) for cells in records]
        lines = first_line + np.cumsum(spans) - spans
        self.last_line = int(lines[-1])
        self._long_lines.extend(lines[spans > 1].tolist())
        kept = self._fit(records, lines, spans)
        self._lines.append(lines[kept])
        rows = list(itertools.compress(records, kept))
        self._count += len(rows)
        for name, place in self.places.items():
            column = pa.array(list(map(operator.itemgetter(place), rows)), type=pa.string())
            self._chunks.setdefault(name, []).append(column)

    def _fit(self, records: list[list[str]], lines: np.ndarray, spans: np.ndarray) -> np.ndarray:
        """Give odd records as many cells as the header has; False where a line is blank."""
        widths = np.fromiter(map(len, records), dtype=np.int64, count=len(records))
        kept = np.ones(len(records), dtype=bool)
        blanks = 0
        for i in np.flatnonzero(widths != self.width):
            if _is_blank(records[i]):
                kept[i] = False
                blanks += 1
                continue
            reason = f"the row has not as many cells as the header: {widths[i]} for {self.width}"
            if spans[i] > 1:
                reason += f", quoted up to line {lines[i] + spans[i] - 1}"
            self._misfits[self._count + int(i) - blanks] = reason
            records[i] = (records[i] + [""] * self.width)[: self.width]
        return kept

    def finished(self, file: str, stem: str, decimal: str) -> RawFixes:
        cells = {
            name: pa.chunked_array(chunks, type=pa.string())
            for name, chunks in self._chunks.items()
        }
        lines = np.concatenate([np.empty(0, dtype=np.int64), *self._lines])
        return RawFixes(file, stem, decimal, lines, cells, self._misfits, self._notes(file))

    def _notes(self, file: str) -> tuple[str, ...]:
        if not self._long_lines:
            return ()
        count, first = len(self._long_lines), self._long_lines[0]
        runs = counted(count, "row runs", "rows run")
        where = "from line" if count == 1 else "the first from line"
        return (f"{file}: {runs} over several lines inside quotation marks, {where} {first}",)


def _is_blank(cells: list[str]) -> bool:
    return not cells or (len(cells) == 1 and not cells[0].strip())


def _line_count(cells: list[str]) -> int:
    """How many lines of the file a record takes: quoted cells may hold line ends."""
    return 1 + sum(len(_LINE_END.findall(cell)) for cell in cells)


def _failing_line(data: bytes, delimiter: str) -> int:
    """First line of the record at which the parser gives up."""
    reader = csv.reader(_lines(data), delimiter=delimiter)
    line = 1
    with contextlib.suppress(csv.Error):
        for _ in reader:
            line = reader.line_num + 1
    return line


def _refuse_open_quote(data: bytes, delimiter: str, file: str, line: int) -> None:
    """Refuse a quotation mark left open: it swallows the rest of the file."""
    lines = _lines(data)
    for _ in range(line - 1):
        next(lines)
    try:
        list(csv.reader(lines, delimiter=delimiter, strict=True))
    except csv.Error as error:
        if "unexpected end" in str(error):
            raise FixesError(
                f"{file}:{line}: a quotation mark opens in this row and is never closed; "
                "close it or delete it"
            ) from error


def _sniffed(data: bytes, columns: Mapping[str, str]) -> str:
    """Find the delimiter that parts most of our headers from each other, then most cells."""
    header = next((line for line in _lines(data) if line.strip()), "")
    wanted = {columns.get(name, name) for name in COLUMNS}

    def score(delimiter: str) -> tuple[int, int]:
        cells = [cell.strip() for cell in next(csv.reader([header], delimiter=delimiter), [])]
        return len(wanted.intersection(cells)), len(cells)

    return max(_DELIMITERS, key=score)


def _places(headers: list[str], columns: Mapping[str, str], file: str) -> dict[str, int]:
    """Our names to the places of their headers."""
    places = {}
    for name in COLUMNS:
        header = columns.get(name, name)
        if headers.count(header) > 1:
            raise FixesError(f"{file}: the header {header!r} stands more than once; rename one")
        if header in headers:
            places[name] = headers.index(header)
        elif name in columns or name in _REQUIRED:
            raise FixesError(_no_header(file, name, header, headers))
    return places


def _no_header(file: str, name: str, header: str, headers: list[str]) -> str:
    there = ", ".join(repr(known) for known in headers)
    advice = "" if header != name else f"; map {name} to one of them under columns"
    hint = nearest(header, headers)
    return f"{file}: has no column {header!r} for {name}{hint}; its headers are {there}{advice}"


def _read_parquet(data: bytes, path: Path, file: str, columns: Mapping[str, str]) -> RawFixes:
    try:
        source = pq.ParquetFile(pa.BufferReader(data))
        headers = list(source.schema_arrow.names)
        places = _places(headers, columns, file)
        table = source.read(columns=[headers[place] for place in places.values()])
    except (pa.ArrowException, OSError) as error:
        raise FixesError(f"{file}: is a damaged Parquet file: {error}") from error
    cells = {
        name: _as_text(table.column(headers[i]), headers[i], file) for name, i in places.items()
    }
    lines = np.arange(2, 2 + table.num_rows, dtype=np.int64)
    return RawFixes(file, _stem(path), ".", lines, cells, {})


def _as_text(column: pa.ChunkedArray, header: str, file: str) -> pa.ChunkedArray:
    """Write values as the shortest text that reads back the same; instants with a zone in UTC."""
    kind = column.type
    try:
        if pa.types.is_timestamp(kind) and kind.tz is not None:
            column = column.cast(pa.timestamp(kind.unit, "UTC"))
        return column.cast(pa.string())
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError) as error:
        raise FixesError(
            f"{file}: the column {header!r} holds {kind}, not text, numbers or times"
        ) from error


def _stem(path: Path) -> str:
    name = path.name
    if name.lower().endswith(".gz"):
        name = name[:-3]
    return Path(name).stem
