"""CF NetCDF: the variables of a layer, their coordinates, and the part a study needs."""

from __future__ import annotations

from pathlib import Path
from typing import Any, NamedTuple

import cf_xarray  # noqa: F401  (registers the .cf accessor)
import numpy as np
import pyproj
import xarray as xr

from trackfit.layers.border import choices, foreign
from trackfit.layers.curved import CurvedGrid
from trackfit.layers.grids import Grid, RectGrid, View, Window
from trackfit.layers.layer import LayerRequest
from trackfit.layers.source import Source, check_size, pieces
from trackfit.layers.times import bracket, hours_since_1970
from trackfit.layers.units import convert

# Names that mean longitude and latitude where no attribute says so.
PLAIN_NAMES = {
    "longitude": ("lon", "longitude", "nav_lon", "long"),
    "latitude": ("lat", "latitude", "nav_lat"),
}


class Place(NamedTuple):
    """The grid of a variable and the dimensions that are its rows and columns."""

    grid: Grid
    rows: str
    cols: str


def read_netcdf(
    request: LayerRequest, view: View, hours_span: tuple[float, float], engine: str
) -> Source:
    """Read the slices and cells of a NetCDF file that the box and the span need.

    Raises
    ------
    LayerError
        If it cannot be read, or a variable, coordinate, unit or time is missing or wrong.
    """
    with foreign(request.place, "read it as NetCDF"), _opened(request.file, engine) as data:
        data = data.set_coords(
            [str(name) for name in data.data_vars if name not in _asked(request)]
        )
        parts = [_selected(data, name, request) for name in _names(data, request)]
        return _read(data, parts, request, view, hours_span)


def _opened(file: Path, engine: str) -> xr.Dataset:
    return xr.open_dataset(
        file, engine=engine, decode_times=False, decode_timedelta=False, decode_coords="all"
    )


def _read(
    data: xr.Dataset,
    parts: list[xr.DataArray],
    request: LayerRequest,
    view: View,
    hours_span: tuple[float, float],
) -> Source:
    places = [_place(data, part, request) for part in parts]
    time = _time(parts[0], request)
    _check_alike(parts, places, time, request)
    _check_directions(parts, places[0].grid, request)
    for part, place in zip(parts, places, strict=True):
        _check_dimensions(part, {time, place.rows, place.cols}, request)
    hours, slices, own_span = _hours(parts[0], time, hours_span, request)
    window = places[0].grid.window(view, request)
    check_size(hours.size * len(parts), window.rows.size, window.cols.size, request)
    with foreign(request.place, "read its values"):
        loaded = [
            _loaded(part, time, place, slices, window)
            for part, place in zip(parts, places, strict=True)
        ]
    values = np.stack([_in_first_unit(part, parts, cells, request)
                       for part, cells in zip(parts, loaded, strict=True)])  # fmt: skip
    values[..., window.absent] = np.nan
    return Source(window, values, hours, _unit(parts[0]), own_span)


# --- variables ---


def _asked(request: LayerRequest) -> list[str]:
    return [name for name in (request.variable, request.east, request.north) if name]


def _names(data: xr.Dataset, request: LayerRequest) -> list[str]:
    """Return the variables to read: those asked for, or the only one there is."""
    asked = _asked(request)
    there = [str(name) for name in data.variables]
    for name in asked:
        if name not in there:
            raise request.fault(
                f"variable '{name}' is not in the file; {choices(name, _fields(data))}"
            )
    if asked:
        return asked
    fields = _fields(data)
    if len(fields) != 1:
        raise request.fault(
            f"the file has {len(fields)} gridded variables ({', '.join(fields)}); "
            f"set layers.{request.name}.variable"
        )
    return fields


def _fields(data: xr.Dataset) -> list[str]:
    """Variables that are neither axes nor coordinates of others."""
    marked = {name for names in data.cf.coordinates.values() for name in names}
    marked |= {name for names in data.cf.axes.values() for name in names}
    marked |= {name for names in data.cf.bounds.values() for name in names}
    marked |= {name for names in PLAIN_NAMES.values() for name in names}
    return [
        str(name)
        for name, values in data.variables.items()
        if values.ndim >= 2 and values.dtype.kind in "iuf" and name not in marked
    ]


def _selected(data: xr.Dataset, name: str, request: LayerRequest) -> xr.DataArray:
    """Take the wanted level of every dimension in `select`, and drop dimensions of length one."""
    part = data[name]
    if part.dtype.kind not in "iuf":
        raise request.fault(f"variable '{name}' holds {part.dtype} values, not numbers")
    for dimension, wanted in request.select.items():
        if dimension not in part.dims:
            raise request.fault(
                f"select.{dimension}: variable '{name}' has no such dimension; "
                f"{choices(dimension, map(str, part.dims))}"
            )
        part = part.isel({dimension: _level(part, dimension, wanted, request)})
    # Rows and columns stay, so that a grid of one row is told apart from a lacking axis.
    alone = [dim for dim in part.dims if part.sizes[dim] == 1 and not _is_horizontal(part, dim)]
    return part.isel(dict.fromkeys(alone, 0))


def _is_horizontal(part: xr.DataArray, dimension: object) -> bool:
    names = [name for kind in PLAIN_NAMES for name in _candidates(part, kind)]
    names += [name for axis in "XY" for name in part.cf.axes.get(axis, [])]
    return any(dimension in part[name].dims for name in names)


def _level(part: xr.DataArray, dimension: str, wanted: float, request: LayerRequest) -> int:
    if dimension not in part.coords:
        raise request.fault(f"select.{dimension}: the dimension has no coordinate to select by")
    levels = np.asarray(part[dimension].values, float)
    nearest = int(np.nanargmin(np.abs(levels - wanted)))
    reach = np.abs(np.diff(levels)).max() if levels.size > 1 else np.inf
    if not abs(levels[nearest] - wanted) <= reach:
        raise request.fault(
            f"select.{dimension} = {wanted:g} is far from all of its values, "
            f"{levels.min():g} to {levels.max():g}"
        )
    return nearest


def _check_dimensions(part: xr.DataArray, used: set[str | None], request: LayerRequest) -> None:
    for dim in part.dims:
        if dim in used:
            continue
        known = ""
        if dim in part.coords and part[dim].dtype.kind in "iuf":
            levels = part[dim].values
            known = f" (values {levels.min():g} to {levels.max():g})"
        raise request.fault(
            f"variable '{part.name}' has a further dimension '{dim}' of {part.sizes[dim]}{known}; "
            f"set layers.{request.name}.select.{dim} to the value wanted"
        )


# --- horizontal coordinates ---


def _place(data: xr.Dataset, part: xr.DataArray, request: LayerRequest) -> Place:
    """Find the grid of a variable: a projection's axes, degrees on axes, degrees of each cell."""
    projected = _projected(data, part, request)
    if projected is not None:
        return projected
    lon, lat = (_coordinate(part, kind, request) for kind in PLAIN_NAMES)
    if lon.ndim == lat.ndim == 1 and lon.dims != lat.dims:
        return Place(RectGrid(_numbers(lon), _numbers(lat)), str(lat.dims[0]), str(lon.dims[0]))
    if lon.ndim == 2 and set(lon.dims) == set(lat.dims):
        rows, cols = (dim for dim in part.dims if dim in lon.dims)
        both = (_numbers(values.transpose(rows, cols)) for values in (lon, lat))
        return Place(CurvedGrid(*both), str(rows), str(cols))
    raise request.fault(
        f"its longitude {lon.dims} and latitude {lat.dims} make no grid of rows and columns; "
        "layers need a grid (regrid an unstructured mesh or a list of points first)"
    )


def _numbers(values: xr.DataArray) -> np.ndarray:
    return np.asarray(values.values, float)


def _coordinate(part: xr.DataArray, kind: str, request: LayerRequest) -> xr.DataArray:
    names = _candidates(part, kind)
    if not names:
        standard = "degrees_east" if kind == "longitude" else "degrees_north"
        raise request.fault(
            f"variable '{part.name}' has no {kind}: no coordinate on "
            f"({', '.join(map(str, part.dims))}) has units '{standard}', standard_name '{kind}' "
            f"or a name such as '{PLAIN_NAMES[kind][0]}'"
        )
    axes = [name for name in names if part[name].ndim == 1]
    return part[(axes or names)[0]]


def _candidates(part: xr.DataArray, kind: str) -> list[str]:
    """Coordinates of one or two dimensions that CF attributes or, failing these, names tell."""
    named = [name for name in PLAIN_NAMES[kind] if name in part.coords]
    listed = [*part.cf.coordinates.get(kind, []), *part.cf.standard_names.get(kind, [])] or named
    # A file that lists the coordinates of a variable knows best which of several belong to it.
    listed = sorted(
        set(listed), key=lambda name: (name not in part.encoding.get("coordinates", ""), name)
    )
    return [name for name in listed if part[name].ndim in (1, 2) and part[name].dtype.kind in "iuf"]


def _projected(data: xr.Dataset, part: xr.DataArray, request: LayerRequest) -> Place | None:
    """Use the axes of a map projection or a turned pole, if a grid_mapping explains them."""
    name = part.encoding.get("grid_mapping", part.attrs.get("grid_mapping"))
    x, y = _projection_axis(part, "x"), _projection_axis(part, "y")
    if name is None or name not in data.variables or x is None or y is None:
        return None
    try:
        crs = pyproj.CRS.from_cf(data[name].attrs)
    except (pyproj.exceptions.CRSError, KeyError, ValueError, TypeError) as fault:
        raise request.fault(f"grid_mapping '{name}' is not understood: {fault}") from fault
    across, up = (_numbers(a) if crs.is_geographic else _metres(a, request) for a in (x, y))
    return Place(RectGrid(across, up, crs), str(y.dims[0]), str(x.dims[0]))


def _metres(axis: xr.DataArray, request: LayerRequest) -> np.ndarray:
    return convert(_numbers(axis), str(axis.attrs.get("units", "m")), "m", request)[0]


def _projection_axis(part: xr.DataArray, axis: str) -> xr.DataArray | None:
    known = (f"projection_{axis}_coordinate", {"x": "grid_longitude", "y": "grid_latitude"}[axis])
    names = [name for standard in known for name in part.cf.standard_names.get(standard, [])]
    lines = [part[name] for name in names if part[name].ndim == 1]
    return lines[0] if lines else None


def _check_alike(
    parts: list[xr.DataArray], places: list[Place], time: str | None, request: LayerRequest
) -> None:
    """Refuse a current whose components stand on different grids or times."""
    if len(parts) == 1:
        return
    (east, north), (first, second) = parts, places
    if _time(north, request) != time or (
        time is not None and not np.array_equal(east[time].values, north[time].values)
    ):
        raise request.fault(f"'{east.name}' and '{north.name}' have different times")
    if not _same_grid(first.grid, second.grid):
        raise request.fault(
            f"'{east.name}' and '{north.name}' stand on different grids (a staggered model grid?); "
            "bring both to the cell centres first"
        )


def _same_grid(first: Any, second: Any) -> bool:
    if type(first) is not type(second):
        return False
    names = ("x", "y") if isinstance(first, RectGrid) else ("lon", "lat")
    return all(np.array_equal(getattr(first, n), getattr(second, n), equal_nan=True) for n in names)


def _check_directions(parts: list[xr.DataArray], grid: Grid, request: LayerRequest) -> None:
    """Refuse velocities along a grid's own rows and columns: they are not east and north."""
    true_axes = isinstance(grid, RectGrid) and grid.crs is None
    for part in parts if request.is_current and not true_axes else ():
        name = str(part.attrs.get("standard_name", ""))
        if {"x", "y"} & set(name.split("_")):
            raise request.fault(
                f"'{part.name}' is {name}, a velocity along the grid's own axes, and the grid is "
                "not one of longitude and latitude; a layer needs eastward and northward components"
            )


# --- time and values ---


def _time(part: xr.DataArray, request: LayerRequest) -> str | None:
    """Return the dimension that is time, if the variable has one."""
    names = [*part.cf.coordinates.get("time", []), *part.cf.axes.get("T", [])]
    names += [
        str(name) for name in part.coords if " since " in str(part[name].attrs.get("units", ""))
    ]
    dims = sorted({str(part[name].dims[0]) for name in names if part[name].ndim == 1})
    if len(dims) > 1:
        raise request.fault(
            f"'{part.name}' has several dimensions of time ({', '.join(dims)}); set "
            f"layers.{request.name}.select for all but one"
        )
    plain = "time" if "time" in part.dims else None
    return dims[0] if dims else plain


def _time_coordinate(part: xr.DataArray, time: str, request: LayerRequest) -> xr.DataArray:
    names = [time, *part.cf.coordinates.get("time", []), *part.cf.axes.get("T", []), *part.coords]
    for name in names:
        if name in part.coords and part[name].dims == (time,) and "units" in part[name].attrs:
            return part[name]
    raise request.fault(
        f"dimension '{time}' has no times: no coordinate on it has units such as "
        "'hours since 1970-01-01'"
    )


def _hours(
    part: xr.DataArray, time: str | None, span: tuple[float, float], request: LayerRequest
) -> tuple[np.ndarray, slice, tuple[float, float] | None]:
    """Times of the slices to read, the slices, and the first and last time of the file."""
    if time is None:
        return np.zeros(1), slice(None), None
    values = _time_coordinate(part, time, request)
    calendar = str(values.attrs.get("calendar", "standard"))
    hours = hours_since_1970(values.values, str(values.attrs["units"]), calendar, request)
    slices = bracket(hours, span, request)
    return hours[slices], slices, (float(hours[0]), float(hours[-1]))


def _loaded(
    part: xr.DataArray, time: str | None, place: Place, slices: slice, window: Window
) -> np.ndarray:
    """Read (times, rows, cols) in the window's order; missing and invalid cells become NaN."""
    order = [dim for dim in (time, place.rows, place.cols) if dim is not None]
    part = part.transpose(*order)
    if time is not None:
        part = part.isel({time: slices})
    strips = []
    for rows, take_rows in pieces(window.rows):
        row = []
        for cols, take_cols in pieces(window.cols):
            block = part.isel({place.rows: rows, place.cols: cols}).values
            row.append(np.asarray(block, float)[..., take_rows, :][..., take_cols])
        strips.append(np.concatenate(row, axis=-1))
    values = _valid(np.concatenate(strips, axis=-2), part)
    return values if time is not None else values[None]


def _valid(values: np.ndarray, part: xr.DataArray) -> np.ndarray:
    """Make values outside valid_min, valid_max or valid_range missing, as CF asks."""
    low, high = part.attrs.get("valid_range", (-np.inf, np.inf))
    ends = [part.attrs.get("valid_min", low), part.attrs.get("valid_max", high)]
    low, high = sorted(_unpacked(end, part) for end in ends)
    # Values and bounds are rounded to single precision where they are unpacked.
    above = (values >= low) | np.isclose(values, low, rtol=1e-6)
    below = (values <= high) | np.isclose(values, high, rtol=1e-6)
    return np.where(above & below, values, np.nan)


def _unpacked(bound: Any, part: xr.DataArray) -> float:
    """Bring a bound to the unit of the values.

    Bounds are packed numbers, unless they are fractions and the packed values whole numbers
    (NetCDF User's Guide, appendix A).
    """
    packed = np.dtype(part.encoding.get("dtype", float))
    if packed.kind != "f" and np.asarray(bound).dtype.kind == "f":
        return float(bound)
    return float(bound) * part.encoding.get("scale_factor", 1.0) + part.encoding.get(
        "add_offset", 0.0
    )


def _unit(part: xr.DataArray) -> str | None:
    unit = part.attrs.get("units")
    return None if unit is None else str(unit)


def _in_first_unit(
    part: xr.DataArray, parts: list[xr.DataArray], values: np.ndarray, request: LayerRequest
) -> np.ndarray:
    """Bring a current's components to one unit, unless the study overrides it."""
    if request.unit is not None or _unit(part) == _unit(parts[0]):
        return values
    return convert(values, _unit(part), _unit(parts[0]), request)[0]
