"""GeoTIFF and other rasters that carry their projection."""

from __future__ import annotations

import numpy as np
import pyproj
import rasterio
from rasterio.windows import Window as Part

from trackfit.layers.border import choices, foreign
from trackfit.layers.grids import RectGrid, View
from trackfit.layers.layer import LayerRequest
from trackfit.layers.source import Source, check_size, pieces


def read_geotiff(request: LayerRequest, view: View) -> Source:
    """Read the cells of a GeoTIFF near the box; nodata becomes NaN.

    Raises
    ------
    LayerError
        If it cannot be read, lacks a projection or the band, is turned, or lies elsewhere.
    """
    if request.variable is not None:
        raise request.fault(
            f"variable '{request.variable}' is asked for, but a GeoTIFF has bands; set band"
        )
    if request.select:
        raise request.fault("select needs a NetCDF file; a GeoTIFF has bands only")
    with foreign(request.place, "open it as GeoTIFF"), rasterio.open(request.file) as data:
        bands = _bands(data, request)
        window = _grid(data, request).window(view, request)
        check_size(len(bands), window.rows.size, window.cols.size, request)
        with foreign(request.place, "read its cells"):
            values = np.stack(
                [_band(data, band, window.rows, window.cols, request) for band in bands]
            )
        unit = data.units[bands[0] - 1]
    return Source(window, values[:, None], np.zeros(1), unit or None)


def _bands(data: rasterio.DatasetReader, request: LayerRequest) -> list[int]:
    if request.is_current:
        return [_component(data, str(name), request) for name in (request.east, request.north)]
    if not 1 <= request.band <= data.count:
        raise request.fault(
            f"band {request.band} is asked for; the file has bands 1 to {data.count}"
        )
    return [request.band]


def _component(data: rasterio.DatasetReader, name: str, request: LayerRequest) -> int:
    """Find a current's band by number or by its description."""
    known = {str(number): number for number in data.indexes}
    known |= {text: n for n, text in zip(data.indexes, data.descriptions, strict=True) if text}
    if name not in known:
        raise request.fault(f"band '{name}' is not in the file; {choices(name, known)}")
    return known[name]


def _grid(data: rasterio.DatasetReader, request: LayerRequest) -> RectGrid:
    transform = data.transform
    if data.crs is None:
        raise request.fault(
            "the raster has no coordinate reference system; add one (gdal_edit -a_srs EPSG:4326)"
        )
    if transform.is_identity:
        raise request.fault("the raster is not georeferenced; give it corner coordinates")
    if transform.b or transform.d:
        raise request.fault("the raster is turned against its axes; make it straight with gdalwarp")
    crs = pyproj.CRS.from_wkt(data.crs.to_wkt())
    if not (crs.is_geographic or crs.is_projected):
        raise request.fault(
            f"its coordinate reference system is {crs.type_name}, not a place on earth"
        )
    x = transform.c + transform.a * (np.arange(data.width) + 0.5)
    y = transform.f + transform.e * (np.arange(data.height) + 0.5)
    return RectGrid(x, y, None if crs == pyproj.CRS(4326) else crs)


def _band(
    data: rasterio.DatasetReader,
    band: int,
    rows: np.ndarray,
    cols: np.ndarray,
    request: LayerRequest,
) -> np.ndarray:
    if np.dtype(data.dtypes[band - 1]).kind not in "iuf":
        raise request.fault(f"band {band} holds {data.dtypes[band - 1]} values, not plain numbers")
    strips = [
        np.concatenate([_part(data, band, r, c) for c in pieces(cols)], axis=1)
        for r in pieces(rows)
    ]
    return np.concatenate(strips) * data.scales[band - 1] + data.offsets[band - 1]


def _part(
    data: rasterio.DatasetReader,
    band: int,
    rows: tuple[slice, np.ndarray],
    cols: tuple[slice, np.ndarray],
) -> np.ndarray:
    area = Part.from_slices(rows[0], cols[0])
    cells = data.read(band, window=area, masked=True).astype(float).filled(np.nan)
    return cells[np.ix_(rows[1], cols[1])]
