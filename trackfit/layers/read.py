"""A file becomes a layer: read near the box, convert, fill, resample once."""

from __future__ import annotations

import numpy as np
from jaxtyping import Bool, Float

from trackfit.frame import Plane
from trackfit.layers.border import check_file, foreign
from trackfit.layers.fill import fill
from trackfit.layers.geotiff import read_geotiff
from trackfit.layers.grids import View, Window
from trackfit.layers.layer import Box, Layer, LayerRequest
from trackfit.layers.netcdf import read_netcdf
from trackfit.layers.resample import Nodes, nearest, plane_nodes, resampled
from trackfit.layers.source import MAX_VALUES, Source
from trackfit.layers.units import CURRENT_UNIT, convert

HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
TIFF_SIGNATURES = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")


def read_layer(
    request: LayerRequest, plane: Plane, box_km: Box, hours_span: tuple[float, float]
) -> Layer:
    """Read a NetCDF or GeoTIFF file onto a square grid of the plane.

    The cells near the box and the time slices that bracket the span (hours since 1970) are read,
    converted (currents to km/h, turned from true east and north into the plane), filled where
    missing by Laplace's equation and sampled by cubic splines. Slices are not interpolated in time.

    Raises
    ------
    LayerError
        If the file cannot be read or does not fit the request; the message says what to do.
    """
    _check_request(request)
    view = View(plane, box_km)
    source = _read_source(request, view, hours_span)
    missing = np.isnan(source.values).any(axis=0)
    _check_values(source, missing, request)
    values, unit = _converted(source, request)
    nodes = plane_nodes(source.window, view, request)
    _check_memory(values, nodes, request)
    slices = fill(values.reshape(-1, *values.shape[2:]))
    on_nodes = resampled(slices, nodes).reshape(*values.shape[:2], *nodes.shape)
    return Layer(
        name=request.name,
        unit=unit,
        x0_km=nodes.x0_km,
        y0_km=nodes.y0_km,
        spacing_km=float(nodes.spacing_km),
        hours=source.hours,
        values=_turned(on_nodes, nodes, plane) if request.is_current else on_nodes[0, ..., None],
        covered=nodes.inside,
        filled=nearest(missing.any(axis=0), nodes),
        share_filled=_share(missing, source.window, box_km),
        source=str(request.file),
        source_hours=source.span_hours,
    )


def _check_request(request: LayerRequest) -> None:
    if request.is_current and (request.east is None or request.north is None):
        raise request.fault("a current needs both east and north")
    if request.is_current and request.variable is not None:
        raise request.fault("give either variable, or east and north, not all three")
    if request.is_current and request.to_unit not in (None, CURRENT_UNIT):
        raise request.fault(f"currents always become {CURRENT_UNIT}; leave out to_unit")
    if not (np.isfinite(request.factor) and request.factor != 0):
        raise request.fault(f"factor is {request.factor}; it must be a number other than 0")
    resolution = request.resolution_km
    if resolution is not None and not (np.isfinite(resolution) and resolution > 0):
        raise request.fault(f"resolution_km is {resolution}; it must be above 0")


def _read_source(request: LayerRequest, view: View, hours_span: tuple[float, float]) -> Source:
    """Choose the reader by the first bytes of the file, not by its name."""
    check_file(request.place, request.file)
    with foreign(request.place, "open it"), request.file.open("rb") as stream:
        start = stream.read(8)
    if start[:4] in TIFF_SIGNATURES:
        return read_geotiff(request, view)
    if start == HDF5_SIGNATURE:
        return read_netcdf(request, view, hours_span, "h5netcdf")
    if start[:4] in (b"CDF\x01", b"CDF\x02"):
        return read_netcdf(request, view, hours_span, "scipy")
    if start[:4] == b"CDF\x05":
        raise request.fault("is a NetCDF file of the CDF-5 kind; convert it (nccopy -k nc4 IN OUT)")
    raise request.fault("is neither NetCDF nor GeoTIFF (its first bytes say so); convert it first")


def _check_values(
    source: Source, missing: Bool[np.ndarray, "times rows cols"], request: LayerRequest
) -> None:
    if np.isinf(source.values).any():
        raise request.fault(
            f"{np.isinf(source.values).sum()} of its values are infinite; mark them as missing"
        )
    empty = missing.all(axis=(1, 2))
    if empty.all():
        raise request.fault("all of its values in the study area are missing")
    if empty.any():
        raise request.fault(
            f"all values in the study area are missing at {empty.sum()} of {empty.size} times, the "
            f"first at hour {source.hours[np.argmax(empty)]:g} since 1970; leave these slices out"
        )


def _check_memory(values: np.ndarray, nodes: Nodes, request: LayerRequest) -> None:
    count = len(nodes.xy_km) * values.shape[0] * values.shape[1]
    if count > MAX_VALUES:
        raise request.fault(
            f"{len(nodes.xy_km)} nodes at {values.shape[1]} times are {count / 1e6:.0f} million "
            f"values, more than {MAX_VALUES / 1e6:.0f} million; set "
            f"layers.{request.name}.resolution_km above {nodes.spacing_km:.3g}"
        )


def _converted(source: Source, request: LayerRequest) -> tuple[np.ndarray, str]:
    wanted = CURRENT_UNIT if request.is_current else request.to_unit
    unit = source.unit if request.unit is None else request.unit
    values, unit = convert(source.values, unit, wanted, request)
    return values * request.factor, unit


def _turned(
    components: Float[np.ndarray, "2 times ny nx"], nodes: Nodes, plane: Plane
) -> Float[np.ndarray, "times ny nx 2"]:
    """Turn and stretch east and north on the ground into the plane, node by node."""
    matrix = plane.ground_to_plane(*plane.to_lonlat(nodes.xy_km)).reshape(*nodes.shape, 2, 2)
    return np.einsum("yxij,jtyx->tyxi", matrix, components)


def _share(missing: Bool[np.ndarray, "times rows cols"], window: Window, box: Box) -> float:
    """Return the share of missing cells whose centre lies in the box (of all, where none does)."""
    row, col = np.divmod(np.arange(missing[0].size), missing.shape[2])
    inside = box.holds(window.centres_km(row, col)).reshape(missing.shape[1:])
    return float(missing[:, inside].mean() if inside.any() else missing.mean())
