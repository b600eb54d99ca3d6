"""Results read back from their folder."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import xarray as xr

from trackfit.faults import ResultsError
from trackfit.results import tables
from trackfit.results.folder import recover
from trackfit.results.inputs import POSITION_COLUMNS, POSITION_FLAGS
from trackfit.results.manifest import RECORD, read_record
from trackfit.results.record import FORMAT_VERSION

JUDGEMENT_FILE = "fix_judgement.csv"
"""Where the judgement of the used fixes stands in a folder of results."""


@dataclass(frozen=True)
class Results:
    """The results of a study.

    Attributes
    ----------
    folder
        Where they stand.
    positions
        Tag, fit_status, then the columns of a filled track; times in UTC, degrees, metres, hours.
    parameters
        Tag, status, parameter, unit, estimate, sd, lower95, upper95.
    set_aside
        Fixes not used, as they were read, each with its reason.
    fix_judgement
        Tag, then the columns of a judgement of the used fixes; empty if none was written.
    drawn_paths
        Tag, draw, time, lon, lat; empty if none were asked.
    record
        Everything in `results.json`.
    """

    folder: Path
    positions: pd.DataFrame
    parameters: pd.DataFrame
    set_aside: pd.DataFrame
    fix_judgement: pd.DataFrame
    drawn_paths: pd.DataFrame
    record: Mapping[str, object]


def read_results(folder: Path) -> Results:
    """Read a folder of results.

    Positions come from `positions.csv`, else from the NetCDF file or the GeoPackage.

    Raises
    ------
    ResultsError
        The folder holds no results of trackfit, a newer layout, or no file of positions.
    """
    if not folder.is_dir():
        recover(folder.resolve())
    record = read_record(folder)
    if record is None:
        raise ResultsError(
            f"{folder}: no {RECORD} written by trackfit; name a folder of results, or run the study"
        )
    if record.get("format_version") != FORMAT_VERSION:
        raise ResultsError(
            f"{folder / RECORD}: format_version is {record.get('format_version')}, this trackfit "
            f"reads {FORMAT_VERSION}: read it with the trackfit that wrote it"
        )
    return Results(
        folder=folder,
        positions=_positions(folder),
        parameters=_read(folder / "parameters.csv", tables.read_table),
        set_aside=_read(folder / "set_aside.csv", tables.read_set_aside),
        fix_judgement=_judgement(folder / JUDGEMENT_FILE),
        drawn_paths=_drawn(folder),
        record=record,
    )


def _positions(folder: Path) -> pd.DataFrame:
    for name, reader in _POSITION_READERS.items():
        if (folder / name).exists():
            return _read(folder / name, reader).loc[:, [*tables.OF_THE_TAG, *POSITION_COLUMNS]]
    raise ResultsError(
        f"{folder}: holds none of {', '.join(_POSITION_READERS)}; "
        "ask for the format csv in the study and run it again"
    )


def _read(path: Path, reader: Callable[[Path], pd.DataFrame]) -> pd.DataFrame:
    try:
        return reader(path)
    except (OSError, ValueError, KeyError) as fault:
        raise ResultsError(f"{path}: cannot be read back ({fault}); run the study again") from fault


def _judgement(path: Path) -> pd.DataFrame:
    return _read(path, tables.read_table) if path.exists() else tables.judgements_table([])


def _drawn(folder: Path) -> pd.DataFrame:
    found = [p for p in (folder / "drawn_paths.csv", folder / "drawn_paths.csv.gz") if p.exists()]
    return _read(found[0], tables.read_table) if found else tables.drawn_table([])


def _from_netcdf(path: Path) -> pd.DataFrame:
    with xr.open_dataset(path, engine="h5netcdf", decode_timedelta=False) as data:
        sizes = data["row_size"].to_numpy()
        table = pd.DataFrame({name: data[name].to_numpy() for name in POSITION_COLUMNS})
        whose = {
            name: np.repeat(data[name].to_numpy().astype(str), sizes) for name in tables.OF_THE_TAG
        }
    return _typed(table.assign(**whose, time=table["time"].dt.tz_localize("UTC")))


def _from_geopackage(path: Path) -> pd.DataFrame:
    return _typed(pd.DataFrame(gpd.read_file(path, layer="positions").drop(columns="geometry")))


def _typed(table: pd.DataFrame) -> pd.DataFrame:
    time = table["time"].dt.tz_convert("UTC").dt.as_unit("ns")
    flags = {name: table[name].astype(bool) for name in POSITION_FLAGS}
    return table.assign(time=time, **flags)


_POSITION_READERS: Mapping[str, Callable[[Path], pd.DataFrame]] = {
    "positions.csv": tables.read_table,
    "positions.nc": _from_netcdf,
    "positions.gpkg": _from_geopackage,
}
