import numpy as np
import pytest
import shapely
from pyproj import Geod

from trackfit.results.geometry import (
    POLYGON_VERTICES,
    VERTICES,
    cut_line,
    ellipse_polygons,
    ellipse_rings,
)

GEOD = Geod(ellps="WGS84")
CHI2_95 = 5.991464547  # chi-squared quantile, 2 degrees of freedom: printed tables give 5.99146


def one(lon, lat, major_m, minor_m, bearing_deg=0.0):
    axes = [np.array([float(v)]) for v in (lon, lat, major_m, minor_m, bearing_deg)]
    return ellipse_polygons(*axes)[0]


def area_m2(shape):
    return GEOD.geometry_area_perimeter(shape)[0]


@pytest.mark.parametrize("lat", [-77.0, -20.0, 0.0, 56.0, 85.0])
@pytest.mark.parametrize("bearing_deg", [0.0, 37.0, 90.0, 179.0])
def test_area_of_the_95_percent_ellipse_is_pi_chi2_s1_s2(lat, bearing_deg):
    s1, s2 = 2000.0, 700.0
    scale = np.sqrt(CHI2_95)
    shape = one(12.0, lat, scale * s1, scale * s2, bearing_deg)
    # curvature: a geodesic disc of radius r holds pi r^2 (1 - r^2 / 12 R^2), here 5e-8 of it
    assert area_m2(shape) == pytest.approx(np.pi * CHI2_95 * s1 * s2, rel=2e-7)


def test_a_polygon_strays_little_from_its_ellipse():
    """Widened to the right area, no vertex lies more than a quarter of a percent outside."""
    shape = one(10.0, 60.0, 5000.0, 5000.0)
    ring = shapely.get_coordinates(shape)
    assert len(ring) == POLYGON_VERTICES + 1
    centre = np.full((2, len(ring)), [[10.0], [60.0]])
    _, _, radius = GEOD.inv(*centre, *ring.T)
    assert (radius > 5000.0).all()
    assert radius.max() < 5000.0 * 1.0026


def test_long_axis_points_along_the_bearing():
    ring = ellipse_rings(*(np.array([v]) for v in (10.0, 60.0, 5000.0, 1000.0, 30.0)))[0]
    azimuth, _, length = GEOD.inv(10.0, 60.0, *ring[0])
    assert azimuth == pytest.approx(30.0, abs=1e-8)
    assert length == pytest.approx(5000.0, abs=1e-6)
    _, _, across = GEOD.inv(10.0, 60.0, *ring[VERTICES // 4])
    assert across == pytest.approx(1000.0, abs=1e-6)


@pytest.mark.parametrize("lon", [179.99, -179.99, -180.0, 180.0])
def test_ellipse_across_the_antimeridian_is_cut_into_two_and_keeps_its_area(lon):
    shape = one(lon, -17.0, 9000.0, 4000.0, 70.0)
    assert len(shape.geoms) == 2
    west, east = sorted(part.bounds for part in shape.geoms)
    assert west[0] == -180
    assert east[2] == 180
    assert west[2] < -179.8
    assert east[0] > 179.8
    # the cut runs straight in degrees between two vertices, the ellipse along a geodesic
    assert area_m2(shape) == pytest.approx(np.pi * 9000 * 4000, rel=1e-6)


@pytest.mark.parametrize("lat", [89.95, -89.95, 90.0, -90.0])
def test_ellipse_around_a_pole_holds_the_pole_and_its_area(lat):
    shape = one(25.0, lat, 40_000.0, 15_000.0, 20.0)
    assert shape.is_valid
    assert shape.covers(shapely.Point(25.0, np.sign(lat) * 90))
    assert shape.bounds[0] == -180
    assert shape.bounds[2] == 180
    # near the pole straight sides in degrees are far from geodesics: compare in the plane of
    # distances from the pole (720 vertices), good to a thousandth
    ring = shapely.get_coordinates(shapely.segmentize(shape, 0.05))
    colatitude_m = GEOD.inv(
        ring[:, 0], ring[:, 1], ring[:, 0], np.full(len(ring), np.sign(lat) * 90)
    )[2]
    angle = np.radians(ring[:, 0])
    flat = shapely.Polygon(
        np.column_stack([colatitude_m * np.cos(angle), colatitude_m * np.sin(angle)])
    )
    assert shapely.make_valid(flat).area == pytest.approx(np.pi * 40_000 * 15_000, rel=1e-3)


def test_ellipse_beside_the_pole_does_not_hold_it():
    shape = one(25.0, 89.5, 30_000.0, 15_000.0, 90.0)
    assert shape.is_valid
    assert not shape.intersects(shapely.Point(25.0, 90.0))
    assert shape.covers(shapely.Point(25.0, 89.5))


def test_every_ring_is_counter_clockwise_and_in_the_world():
    rng = np.random.default_rng(1)
    n = 300
    lon, lat = rng.uniform(-180, 180, n), np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    major = 10 ** rng.uniform(1, 5.5, n)
    shapes = ellipse_polygons(
        lon, lat, major, major * rng.uniform(0.2, 1, n), rng.uniform(0, 180, n)
    )
    for shape, x, y in zip(shapes, lon, lat, strict=True):
        assert shape.geom_type == "MultiPolygon"
        assert shape.is_valid
        assert all(part.exterior.is_ccw for part in shape.geoms)
        assert shape.bounds[0] >= -180
        assert shape.bounds[2] <= 180
        assert abs(shape.bounds[3]) <= 90
        assert shape.distance(shapely.Point(x, y)) < 1e-9


def test_no_ellipses_give_no_polygons():
    assert len(ellipse_polygons(*[np.empty(0)] * 5)) == 0


def test_line_is_cut_where_it_crosses_and_both_ends_meet():
    lines = cut_line(np.array([179.0, -179.0, -178.0, 179.0]), np.array([10.0, 12.0, 12.0, 15.0]))
    first, second, third = (shapely.get_coordinates(p) for p in lines.geoms)
    np.testing.assert_allclose(first, [[179, 10], [180, 11]], rtol=1e-12)
    np.testing.assert_allclose(second, [[-180, 11], [-179, 12], [-178, 12], [-180, 14]], rtol=1e-12)
    np.testing.assert_allclose(third, [[180, 14], [179, 15]], rtol=1e-12)


@pytest.mark.parametrize(
    ("lon", "pieces"),
    [([], 0), ([5.0], 0), ([5.0, 6.0], 1), ([179.5, -180.0], 1), ([179.5, -180.0, 179.5], 2)],
)
def test_lines_with_few_points_or_points_on_the_antimeridian(lon, pieces):
    line = cut_line(np.array(lon), np.linspace(0, 1, len(lon)))
    assert len(line.geoms) == pieces
    assert line.is_valid
