import datetime
import hashlib
import json
import math

import numpy as np
import pandas as pd
import pytest
from results_standins import Status, make_fit, make_fixes, make_response, wandering_track

from trackfit.faults import ResultsError
from trackfit.results import FORMATS, RecordInfo, read_results, write_folder
from trackfit.results.manifest import list_files
from trackfit.results.record import as_json, versions


@pytest.fixture
def study(tmp_path):
    file = tmp_path / "fixes.csv"
    file.write_text("tag,time,lon,lat\n")
    return {
        "tracks": [
            wandering_track(hours=30),
            wandering_track("=7", start=(179.9, -40.0), hours=20, draws=0, fit_status=Status.stuck),
        ],
        "fits": [make_fit(), make_fit("=7"), make_fit("lost", Status.stuck)],
        "responses": [make_response()],
        "fixes": make_fixes([wandering_track(hours=30), wandering_track("unfitted", hours=4)]),
        "record": RecordInfo(
            study={"study": {"name": "bay", "seed": 1}, "fit": {"limit": math.nan}},
            inputs={"fixes.csv": file},
            seed=1,
            notes=["One tag has few fixes."],
            warnings=["2 fixes set aside."],
            created=datetime.datetime(2024, 5, 1, 12, tzinfo=datetime.UTC),
        ),
    }


EXPECTED = {
    "csv": {"positions.csv", "drawn_paths.csv"},
    "geopackage": {"positions.gpkg"},
    "geojson": {"positions.geojson"},
    "netcdf": {"positions.nc"},
}
ALWAYS = {"parameters.csv", "set_aside.csv", "responses.csv"}


def test_everything_is_written_and_listed(tmp_path, study):
    extra = {"figures/map.png": lambda path: path.write_bytes(b"png")}
    folder = write_folder(tmp_path / "out", **study, extra_files=extra)
    files = set(list_files(folder))
    assert files == ALWAYS.union(*EXPECTED.values()) | {"figures/map.png"}
    record = json.loads((folder / "results.json").read_text(), parse_constant=pytest.fail)
    assert set(record["files"]) == files
    for name, entry in record["files"].items():
        content = (folder / name).read_bytes()
        assert entry == {"bytes": len(content), "sha256": hashlib.sha256(content).hexdigest()}


@pytest.mark.parametrize("name", FORMATS)
def test_one_format_alone(tmp_path, study, name):
    folder = write_folder(tmp_path / "out", **study, formats=[name])
    assert set(list_files(folder)) == ALWAYS | EXPECTED[name]


@pytest.mark.parametrize("name", ["csv", "netcdf", "geopackage"])
def test_results_are_read_back(tmp_path, study, name):
    back = read_results(write_folder(tmp_path / "out", **study, formats=[name]))
    expected = pd.concat([t.table.assign(tag=t.tag) for t in study["tracks"]], ignore_index=True)
    assert back.positions["tag"].tolist() == expected["tag"].tolist()
    assert back.positions["fit_status"].tolist() == ["converged"] * 30 + ["stuck"] * 20
    assert back.positions["time"].tolist() == expected["time"].tolist()
    assert back.positions["time"].dtype == "datetime64[ns, UTC]"
    for flag in ("in_gap", "at_fix", "coast_adjusted"):
        assert back.positions[flag].tolist() == expected[flag].tolist()
        assert back.positions[flag].dtype == bool
    # six decimals of a degree in the CSV
    np.testing.assert_allclose(back.positions["lon"], expected["lon"], rtol=0, atol=5.001e-7)
    assert back.parameters["tag"].tolist() == ["seal 7"] * 2 + ["=7"] * 2 + ["lost"] * 2
    assert back.set_aside["lat"].tolist()[1] == "=91"
    assert len(back.drawn_paths) == (150 if name == "csv" else 0)
    assert back.record["seed"] == 1


def test_geojson_alone_holds_no_table_to_read_back(tmp_path, study):
    folder = write_folder(tmp_path / "out", **study, formats=["geojson"])
    with pytest.raises(ResultsError, match=r"holds none of positions\.csv, positions\.nc"):
        read_results(folder)


def test_record_tells_the_whole_story(tmp_path, study):
    record = read_results(write_folder(tmp_path / "out", **study)).record
    assert record["written_by"] == "trackfit"
    assert record["created"] == "2024-05-01T12:00:00Z"
    assert record["study"] == {"study": {"name": "bay", "seed": 1}, "fit": {"limit": None}}
    content = (tmp_path / "fixes.csv").read_bytes()
    assert record["inputs"] == {
        "fixes.csv": {"bytes": len(content), "sha256": hashlib.sha256(content).hexdigest()}
    }
    assert any("Not for navigation" in text for text in record["cautions"])
    assert any("share with care" in text for text in record["cautions"])
    assert record["notes"] == ["One tag has few fixes."]
    assert record["warnings"] == ["2 fixes set aside."]
    assert set(record["versions"]) == {"trackfit", "python", "numpy", "scipy", "jax"}
    assert record["versions"]["numpy"] == np.__version__


def test_every_tag_has_a_status(tmp_path, study):
    tags = read_results(write_folder(tmp_path / "out", **study)).record["tags"]
    assert set(tags) == {"seal 7", "=7", "lost", "unfitted"}
    assert tags["seal 7"]["ok"] is True
    assert tags["seal 7"]["positions"] == 30
    assert tags["seal 7"]["fixes_set_aside"] == 2
    assert tags["seal 7"]["parameters"][1]["sd"] is None
    assert tags["lost"]["sentence"] == Status.stuck.sentence
    assert tags["lost"]["positions"] == 0
    assert tags["unfitted"]["sentence"] == "This tag was not fitted."


def test_written_twice_is_the_same_but_for_geopackage_times(tmp_path, study):
    first = list_files(write_folder(tmp_path / "a", **study))
    second = list_files(write_folder(tmp_path / "b", **study))
    changed = {name for name in first if first[name] != second[name]}
    assert changed <= {"positions.gpkg"}


def test_a_failing_figure_leaves_the_old_results(tmp_path, study):
    write_folder(tmp_path / "out", **study, formats=["csv"])

    def fails(path):
        raise RuntimeError("no ink")

    with pytest.raises(RuntimeError, match="no ink"):
        write_folder(tmp_path / "out", **study, extra_files={"a.png": fails}, overwrite=True)
    assert read_results(tmp_path / "out").record["formats"] == ["csv"]


def test_unknown_format_and_lost_input_are_told_before_anything_is_written(tmp_path, study):
    with pytest.raises(ResultsError, match="format 'shape' is not known: choose from csv"):
        write_folder(tmp_path / "out", **study, formats=["shape"])
    (tmp_path / "fixes.csv").unlink()
    with pytest.raises(ResultsError, match=r"fixes.csv: cannot be read again .*No such file"):
        write_folder(tmp_path / "out", **study)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["positions.csv", "../x", "/x", "results.json"])
def test_further_files_may_not_hide_others(tmp_path, study, name):
    with pytest.raises(ResultsError, match="cannot be the name of a further file"):
        write_folder(tmp_path / "out", **study, extra_files={name: lambda path: None})


def test_no_tracks_at_all_still_gives_a_record(tmp_path, study):
    empty = {**study, "tracks": [], "responses": []}
    back = read_results(write_folder(tmp_path / "out", **empty))
    assert len(back.positions) == 0
    assert back.record["tags"]["seal 7"]["positions"] == 0


def test_a_folder_without_a_record_is_no_result(tmp_path):
    with pytest.raises(ResultsError, match=r"no results.json written by trackfit"):
        read_results(tmp_path / "nowhere")
    (tmp_path / "results.json").write_text("{}")
    with pytest.raises(ResultsError, match=r"no results.json written by trackfit"):
        read_results(tmp_path)


def test_plain_values():
    value = {1: np.float64("inf"), "t": pd.Timestamp("2024-01-01T01:00:00+01:00"), "n": np.int8(3)}
    assert as_json(value) == {"1": None, "t": "2024-01-01T00:00:00Z", "n": 3}
    assert as_json([Status.stuck, pd.NaT, np.array([1.5, np.nan])]) == [
        Status.stuck.value,
        None,
        [1.5, None],
    ]
    assert versions()["python"].startswith("3.")
