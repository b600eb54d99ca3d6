import re
import subprocess
import sys
from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr
from results_standins import wandering_track

from trackfit.results import to_pandas, to_xarray, write_trajectory


@pytest.fixture(scope="module")
def tracks():
    return [
        wandering_track(hours=30),
        wandering_track("Ωmega", start=(179.95, -40.0), hours=40, draws=0),
        wandering_track("one", hours=1),
    ]


@pytest.fixture(scope="module")
def path(tracks, tmp_path_factory):
    file = tmp_path_factory.mktemp("nc") / "positions.nc"
    write_trajectory(file, tracks)
    return file


def check_cf(file):
    """Run the outside checker; return its exit code and its report."""
    checker = Path(sys.executable).with_name("compliance-checker")
    done = subprocess.run(
        [checker, "--test=cf:1.8", "--criteria=strict", "--format=text", str(file)],
        capture_output=True,
        text=True,
        check=False,
    )
    return done.returncode, done.stdout


def test_outside_checker_finds_no_error_and_no_warning(path):
    code, report = check_cf(path)
    assert code == 0, report
    assert "All tests passed!" in report


def test_outside_checker_does_find_a_broken_file(path, tmp_path):
    broken = tmp_path / "broken.nc"
    broken.write_bytes(path.read_bytes())
    with netCDF4.Dataset(broken, "a") as data:
        data["lon"].units = "m"
    code, report = check_cf(broken)
    assert code == 1
    assert "All tests passed!" not in report


def test_ragged_array_is_whole(path, tracks):
    with netCDF4.Dataset(path) as data:
        assert data.Conventions == "CF-1.8"
        assert data.featureType == "trajectory"
        assert data["row_size"].sample_dimension == "obs"
        assert data["row_size"].dtype == np.int32
        assert data["row_size"].dimensions == ("trajectory",)
        assert data["row_size"][:].tolist() == [30, 40, 1]
        assert data["row_size"][:].sum() == data.dimensions["obs"].size == 71
        ids = [
            v.name for v in data.variables.values() if getattr(v, "cf_role", "") == "trajectory_id"
        ]
        assert ids == ["tag"]
        assert "tag" not in data.dimensions
        assert data["tag"][:].tolist() == [t.tag for t in tracks]
        for name in ("institution", "source", "history", "references", "comment", "title"):
            assert getattr(data, name)
        assert "Not for navigation" in data.comment


def test_positions_are_read_by_netcdf4(path, tracks):
    table = to_pandas(tracks)
    with netCDF4.Dataset(path) as data:
        assert not any("_FillValue" in v.ncattrs() for v in data.variables.values())
        for name in ("lon", "lat", "sd_m", "ellipse95_major_m", "ellipse50_minor_m"):
            np.testing.assert_array_equal(data[name][:].data, table[name])
        times = netCDF4.num2date(
            data["time"][:], data["time"].units, only_use_cftime_datetimes=False
        )
        assert times[0] == pd.Timestamp("2024-03-01T06:00:00")
        assert data["time"].units == "seconds since 1970-01-01T00:00:00Z"
        for flag in ("in_gap", "at_fix", "coast_adjusted"):
            assert data[flag][:].tolist() == table[flag].astype(int).tolist()
            assert 0 < data[flag][:].sum() < len(table)


def test_every_data_variable_says_what_it_is(path):
    with netCDF4.Dataset(path) as data:
        on_obs = [v for v in data.variables.values() if v.dimensions == ("obs",)]
        assert len(on_obs) == 13
        for variable in on_obs:
            assert variable.long_name
            assert hasattr(variable, "units") or hasattr(variable, "flag_meanings")
            if variable.name not in ("time", "lat", "lon"):
                assert variable.coordinates == "time lat lon"
                assert variable.grid_mapping == "crs"


def test_xarray_reads_what_to_xarray_makes(path, tracks):
    with xr.open_dataset(path, engine="netcdf4", decode_timedelta=False) as data:
        stamps = pd.to_datetime(data["time"].to_numpy()).tz_localize("UTC")
        assert stamps.tolist() == to_pandas(tracks)["time"].tolist()
        assert data["tag"].to_numpy().astype(str).tolist() == [t.tag for t in tracks]
    memory = to_xarray(tracks)
    assert dict(memory.sizes) == {"trajectory": 3, "obs": 71}
    assert re.fullmatch(r"2024-\d\d-\d\dT\d\d:\d\d:\d\dZ", memory.attrs["time_coverage_end"])


def test_known_instant():
    # 2012-10-21T18:00:00Z is 1350842400 s after 1970 (POSIX time, recomputed with the standard
    # library)
    track = wandering_track(hours=1)
    track.table.loc[0, "time"] = pd.Timestamp("2012-10-21T19:00:00+01:00").tz_convert("UTC")
    assert to_xarray([track])["time"].to_numpy().tolist() == [1350842400.0]
