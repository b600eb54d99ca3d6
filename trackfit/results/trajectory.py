"""CF-1.8 trajectories as a contiguous ragged array (CF conventions, appendix H.4.3)."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from trackfit.results.inputs import TrackLike
from trackfit.results.tables import iso_times, positions_table

_EPOCH = "seconds since 1970-01-01T00:00:00Z"
_DATA: Mapping[str, tuple[str, str]] = {
    "sd_m": ("m", "standard deviation of the position along one axis"),
    "ellipse_bearing_deg": (
        "degree",
        "direction of the longer semi-axis of the credible ellipses, clockwise from true north",
    ),
    "ellipse50_major_m": ("m", "longer semi-axis of the 50 percent credible ellipse"),
    "ellipse50_minor_m": ("m", "shorter semi-axis of the 50 percent credible ellipse"),
    "ellipse95_major_m": ("m", "longer semi-axis of the 95 percent credible ellipse"),
    "ellipse95_minor_m": ("m", "shorter semi-axis of the 95 percent credible ellipse"),
    "hours_to_fix": ("hour", "time to the nearest fix in use"),
}
_FLAGS = {
    "in_gap": ("position lies in a gap between fixes", "outside_gap inside_gap"),
    "at_fix": ("a fix in use stands at this time", "no_fix fix"),
    "coast_adjusted": (
        "the coast moved the position or its ellipses",
        "not_adjusted adjusted",
    ),
}


@dataclass(frozen=True)
class Discovery:
    """What the file says about itself; a text that is not known says so."""

    title: str = "Positions of tagged animals at regular times"
    institution: str = "not stated"
    source: str = "fixes of animal tags, filled in by a movement model"
    history: str = "written by trackfit"
    references: str = "not stated"
    comment: str = (
        "Not for navigation. Exact positions of protected species are sensitive: share with care."
    )


def write_trajectory(
    path: Path, tracks: Sequence[TrackLike], about: Discovery | None = None
) -> None:
    """Write positions and ellipses of all tracks to a CF-1.8 NetCDF file."""
    data = to_xarray(tracks, about)
    for name, variable in data.variables.items():
        if variable.dims == ("obs",):
            data[name].encoding |= {"compression": "gzip", "compression_opts": 6, "shuffle": True}
    data.to_netcdf(path, engine="h5netcdf")


def to_xarray(tracks: Sequence[TrackLike], about: Discovery | None = None) -> xr.Dataset:
    """Return all tracks as a CF trajectory data set.

    Dimensions: trajectory (one a tag) and obs (all positions, tag after tag); `row_size` counts
    the positions of each tag. Time is in seconds since 1970, positions are WGS 84 degrees.
    """
    table = positions_table(tracks)
    variables = _instances(tracks) | _coordinates(table) | _data(table) | _flags(table)
    data = xr.Dataset({"crs": _crs(), **variables}, attrs=_attributes(table, about or Discovery()))
    for name in data.variables:
        data[name].encoding.setdefault("_FillValue", None)
    return data.set_coords(["time", "lat", "lon", "tag"])


def _instances(tracks: Sequence[TrackLike]) -> dict[str, xr.Variable]:
    sizes = np.array([len(t.table) for t in tracks], dtype=np.int32)
    tags = np.array([t.tag for t in tracks], dtype=str)
    words = np.array([t.fit_status.name for t in tracks], dtype=str)
    name = {"long_name": "name of the tag", "cf_role": "trajectory_id"}
    ended = {"long_name": "how the fit ended; rely on the positions where it is CONVERGED"}
    count = {"long_name": "number of positions of the tag", "sample_dimension": "obs"}
    return {
        "tag": xr.Variable("trajectory", tags, name, encoding=_text("tag_length")),
        "fit_status": xr.Variable("trajectory", words, ended, encoding=_text("status_length")),
        "row_size": xr.Variable("trajectory", sizes, count),
    }


def _text(length: str) -> dict[str, str]:
    return {"dtype": "S1", "char_dim_name": length}


def _coordinates(table: pd.DataFrame) -> dict[str, xr.Variable]:
    utc = pd.to_datetime(table["time"], utc=True).dt.tz_localize(None)
    stamps = utc.to_numpy("datetime64[ns]")
    seconds = (stamps - np.datetime64(0, "ns")) / np.timedelta64(1, "s")
    known = {
        "time": (seconds, {"units": _EPOCH, "calendar": "standard", "axis": "T"}),
        "lat": (table["lat"], {"units": "degrees_north", "axis": "Y"}),
        "lon": (table["lon"], {"units": "degrees_east", "axis": "X"}),
    }
    words = {"time": "time", "lat": "latitude", "lon": "longitude"}
    return {
        name: xr.Variable(
            "obs",
            np.asarray(values, dtype=np.float64),
            {"standard_name": words[name], "long_name": f"{words[name]} of the position", **more},
        )
        for name, (values, more) in known.items()
    }


def _data(table: pd.DataFrame) -> dict[str, xr.Variable]:
    return {
        name: xr.Variable(
            "obs",
            table[name].to_numpy(np.float64),
            {"units": unit, "long_name": words, "grid_mapping": "crs"},
            encoding={"coordinates": "time lat lon"},
        )
        for name, (unit, words) in _DATA.items()
    }


def _flags(table: pd.DataFrame) -> dict[str, xr.Variable]:
    return {
        name: xr.Variable(
            "obs",
            table[name].to_numpy(bool).astype(np.int8),
            {
                "long_name": words,
                "flag_values": np.array([0, 1], dtype=np.int8),
                "flag_meanings": meanings,
                "grid_mapping": "crs",
            },
            encoding={"coordinates": "time lat lon"},
        )
        for name, (words, meanings) in _FLAGS.items()
    }


def _crs() -> xr.Variable:
    wgs84 = {
        "grid_mapping_name": "latitude_longitude",
        "long_name": "WGS 84",
        "semi_major_axis": 6378137.0,
        "inverse_flattening": 298.257223563,
        "longitude_of_prime_meridian": 0.0,
    }
    return xr.Variable((), np.int32(0), wgs84)


def _attributes(table: pd.DataFrame, about: Discovery) -> dict[str, object]:
    words = {name: getattr(about, name) for name in Discovery.__dataclass_fields__}
    span = iso_times(table["time"].sort_values()) if len(table) else []
    ends = {"time_coverage_start": span[0], "time_coverage_end": span[-1]} if span else {}
    return {"Conventions": "CF-1.8", "featureType": "trajectory", **words, **ends}
