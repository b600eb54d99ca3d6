import csv
import gzip

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from results_standins import Status, make_fit, make_fixes, make_response, wandering_track

from trackfit.results import tables

FLAGS = ["in_gap", "at_fix", "coast_adjusted"]


def raw(path):
    with path.open(newline="") as stream:
        return list(csv.reader(stream))


def test_positions_have_fixed_decimals_and_times_in_utc(tmp_path):
    track = wandering_track()
    tables.write_positions(tmp_path / "p.csv", [track])
    header, first, *_ = raw(tmp_path / "p.csv")
    assert header == ["tag", "fit_status", *track.table.columns]
    row = dict(zip(header, first, strict=True))
    assert row["time"] == "2024-03-01T06:00:00Z"
    assert row["lon"] == "-5.000000"
    assert row["lat"] == "56.000000"
    assert row["ellipse95_major_m"] == f"{track.table['ellipse95_major_m'].iloc[0]:.1f}"
    assert row["in_gap"] == "false"
    assert row["at_fix"] == "true"
    assert row["coast_adjusted"] == "false"


def test_positions_come_back_as_they_were(tmp_path):
    tracks = [
        wandering_track(),
        wandering_track("007", start=(179.9, -40.0), hours=30),
        wandering_track("NA", hours=3, fit_status=Status.stuck),
    ]
    tables.write_positions(tmp_path / "p.csv", tracks)
    back = tables.read_table(tmp_path / "p.csv")
    expected = tables.positions_table(tracks)
    pd.testing.assert_frame_equal(
        back[["tag", "fit_status", "time", *FLAGS]],
        expected[["tag", "fit_status", "time", *FLAGS]],
        check_dtype=False,
    )
    assert back["time"].dtype == "datetime64[ns, UTC]"
    for name in back.columns.drop(["tag", "fit_status", "time", *FLAGS]):
        half_unit = {"lon": 5e-7, "lat": 5e-7}.get(name, 0.05 if name.endswith("_m") else 5e-4)
        np.testing.assert_allclose(back[name], expected[name], rtol=0, atol=half_unit * 1.0001)


@pytest.mark.parametrize(
    "name", ["=cmd()", "+1+1", "-2-1", "@SUM(A1)", "\tx", "'quoted", "＝1", " =1"]
)
def test_active_cells_are_made_harmless_and_come_back(tmp_path, name):
    tables.write_positions(tmp_path / "p.csv", [wandering_track(name, hours=2)])
    assert raw(tmp_path / "p.csv")[1][0] == "'" + name
    assert tables.read_table(tmp_path / "p.csv")["tag"].tolist() == [name, name]


@given(st.text(st.characters(codec="utf-8", exclude_characters="\0"), max_size=12))
def test_any_text_comes_back_and_none_is_active(text):
    cell = tables.cell_from_text(text)
    assert tables.text_from_cell(cell) == text
    is_number = tables._NUMBER.fullmatch(cell) is not None
    assert is_number or not cell.lstrip(" ").startswith(("=", "+", "-", "@"))


@pytest.mark.parametrize(
    ("stamp", "text"),
    [
        ("2012-10-21T19:00:00+01:00", "2012-10-21T18:00:00Z"),
        ("2012-10-21T18:00:00.25Z", "2012-10-21T18:00:00.250Z"),
        ("1969-12-31T23:59:59.000001Z", "1969-12-31T23:59:59.000001Z"),
        (None, ""),
    ],
)
def test_times_lose_nothing(stamp, text):
    assert tables.iso_times(pd.to_datetime(pd.Series([stamp]), utc=True)) == [text]


def test_parameters_and_missing_numbers(tmp_path):
    tables.write_parameters(tmp_path / "f.csv", [make_fit("a"), make_fit("b")])
    back = tables.read_table(tmp_path / "f.csv")
    assert back["tag"].tolist() == ["a", "a", "b", "b"]
    assert back["estimate"].tolist() == [1.8, 0.9, 1.8, 0.9]
    assert back["sd"].isna().tolist() == [False, True, False, True]
    assert back["role"].tolist() == ["estimated", "shared"] * 2
    assert "nan" not in (tmp_path / "f.csv").read_text().lower()


def test_set_aside_rows_come_back_as_the_text_they_were(tmp_path):
    fixes = make_fixes([wandering_track("=x")])
    tables.write_set_aside(tmp_path / "s.csv", fixes.set_aside)
    assert ",'=91," in (tmp_path / "s.csv").read_text()
    pd.testing.assert_frame_equal(
        tables.read_set_aside(tmp_path / "s.csv"), fixes.set_aside, check_dtype=False
    )


def test_drawn_paths_keep_order_and_are_compressed_when_large(tmp_path, monkeypatch):
    track = wandering_track(draws=3, hours=10)
    small = tables.write_drawn_paths(tmp_path / "d.csv", [track])
    back = tables.read_table(small)
    lonlat = back[["lon", "lat"]].to_numpy().reshape(3, 10, 2)
    np.testing.assert_allclose(lonlat, track.draws_lonlat, rtol=0, atol=5.001e-7)
    assert back["draw"].tolist() == np.repeat([1, 2, 3], 10).tolist()
    monkeypatch.setattr(tables, "DRAWS_COMPRESSED_FROM_ROWS", 30)
    large = tables.write_drawn_paths(tmp_path / "d.csv", [track])
    assert large.name == "d.csv.gz"
    assert gzip.decompress(large.read_bytes()) == small.read_bytes()
    again = tables.write_drawn_paths(tmp_path / "e.csv", [track])
    assert gzip.decompress(again.read_bytes()) == small.read_bytes()


def test_responses_come_back(tmp_path):
    response = make_response()
    tables.write_responses(tmp_path / "r.csv", [response])
    back = tables.read_table(tmp_path / "r.csv")
    np.testing.assert_allclose(back["h"], response.h, rtol=1e-8)
    assert set(back["unit"]) == {"m"}


def test_nothing_still_gives_a_header(tmp_path):
    tables.write_positions(tmp_path / "p.csv", [])
    assert raw(tmp_path / "p.csv") == [["tag", "fit_status", *tables.POSITION_COLUMNS]]
    assert tables.read_table(tmp_path / "p.csv").empty
