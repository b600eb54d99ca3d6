"""The plane, ellipses and geodesics against published figures and finite differences."""

import pickle

import numpy as np
import pyproj
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from trackfit.faults import StudyError
from trackfit.frame import (
    Plane,
    covariance_from_ellipse,
    ellipse_from_covariance,
    ellipse_scale,
    geodesic_bearing_deg,
    geodesic_km,
)

GEOD = pyproj.Geod(ellps="WGS84")


def dms(degrees: float, minutes: float, seconds: float) -> float:
    return degrees + minutes / 60 + seconds / 3600


def geodesic_differences(plane: Plane, lon: float, lat: float, step_m: float = 400.0) -> np.ndarray:
    """d(plane) / d(east, north) by central differences along geodesics."""

    def at(azimuth: float) -> np.ndarray:
        there = GEOD.fwd(lon, lat, azimuth, step_m)
        return plane.to_plane(there[0], there[1])[0]

    span_km = 2 * step_m / 1000
    return np.stack([(at(90) - at(270)) / span_km, (at(0) - at(180)) / span_km], axis=1)


# --- projections -----------------------------------------------------------------------------

CLARKE = "+a=6378206.4 +es=0.00676866"
INTERNATIONAL = "+a=6378388 +rf=297"
MICRONESIA = f"+lat_0={dms(15, 11, 5.6830)} +lon_0={dms(145, 44, 29.9720)}"
GUAM = f"+guam +lat_0={dms(13, 28, 20.87887)} +lon_0={dms(144, 44, 55.50254)}"

# Snyder (1987) Map projections: a working manual, USGS PP 1395, Appendix A, pp. 268-270, 332-337.
SNYDER = {
    "1.1 equal-area, sphere": (
        "+proj=laea +R=3 +lat_0=40 +lon_0=-100", (100, -20), (-4.2339303, 4.0257775), 5.1e-8,
    ),
    "1.2 equal-area, oblique ellipsoid": (
        f"+proj=laea {CLARKE} +lat_0=40 +lon_0=-100", (-110, 30), (-965932.1, -1056814.9), 0.1,
    ),
    "1.3 equal-area, polar ellipsoid": (
        f"+proj=laea {INTERNATIONAL} +lat_0=90 +lon_0=-100", (5, 80), (1077459.7, 288704.5), 0.1,
    ),
    "1.4 equidistant, sphere": (
        "+proj=aeqd +R=3 +lat_0=40 +lon_0=-100", (100, -20), (-5.8311398, 5.5444634), 5.1e-8,
    ),
    "1.5 equidistant, polar ellipsoid": (
        f"+proj=aeqd {INTERNATIONAL} +lat_0=90 +lon_0=-100", (5, 80), (1078828.3, 289071.2), 0.1,
    ),
    "1.6 equidistant, oblique": (
        f"+proj=aeqd {CLARKE} {MICRONESIA} +x_0=28657.52 +y_0=67199.99",
        (dms(145, 47, 34.9080), dms(15, 14, 47.4930)), (34176.20, 74017.88), 0.01,
    ),
    "1.7 equidistant, Guam's form": (
        f"+proj=aeqd {CLARKE} {GUAM} +x_0=50000 +y_0=50000",
        (dms(144, 38, 7.19265), dms(13, 20, 20.53846)), (37712.48, 35242.00), 0.01,
    ),
    "1.8 transverse Mercator, sphere": (
        "+proj=tmerc +R=1 +lat_0=0 +lon_0=-75", (-73.5, 40.5), (0.0199077, 0.7070276), 5.1e-8,
    ),
    "1.9 transverse Mercator, ellipsoid": (
        f"+proj=tmerc {CLARKE} +lat_0=0 +lon_0=-75 +k=0.9996",
        (-73.5, 40.5), (127106.5, 4484124.4), 0.1,
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", SNYDER.values(), ids=SNYDER.keys())
def test_the_projection_library_agrees_with_published_examples(case):
    definition, place, expected, tolerance = case
    # The tolerance is the last printed digit.
    assert pyproj.Proj(definition)(*place) == pytest.approx(expected, abs=tolerance)


def test_a_users_plane_agrees_with_the_published_example_of_its_method():
    # IOGP Guidance Note 7-2, method 9820, example for EPSG:3035; printed to a centimetre.
    plane = Plane.from_crs("EPSG:3035")
    xy_km = plane.to_plane(5.0, 50.0)
    np.testing.assert_allclose(xy_km, [[3962.79945, 2999.71885]], rtol=0, atol=1e-5)


@pytest.mark.parametrize(
    ("text", "description"),
    [
        ("EPSG:3035", "ETRS89-extended / LAEA Europe (EPSG:3035)"),
        (
            "+proj=tmerc +lat_0=0 +lon_0=-75 +k=0.9996 +datum=WGS84 +type=crs",
            "Transverse Mercator, World Geodetic System 1984 (TEXT)",
        ),
        (
            "+proj=utm +zone=30 +ellps=intl +type=crs",
            "Transverse Mercator, ellipsoid International 1924 (Hayford 1909, 1910) (TEXT)",
        ),
        (
            "+proj=laea +lat_0=50 +R=6371000 +type=crs",
            "Lambert Azimuthal Equal Area (Spherical), sphere of 6371.000 km (TEXT)",
        ),
    ],
)
def test_a_plane_of_the_user_s_is_described(text, description):
    assert Plane.from_crs(text).description == description.replace("TEXT", text)


def test_published_scale_factors_of_the_polar_equal_area_projection():
    # Snyder (1987) pp. 336-337 as recomputed with PROJ: h = 0.9961950, k = 1.0038196, h k = 1.
    # Our matrix is taken on WGS 84; the two ellipsoids differ by less than 3e-7 in these ratios.
    plane = Plane.from_crs("+proj=laea +lat_0=90 +lon_0=-100 +datum=WGS84 +type=crs")
    values = np.linalg.svd(plane.ground_to_plane(5.0, 80.0)[0], compute_uv=False)
    np.testing.assert_allclose(values, [1.0038196, 0.9961950], rtol=0, atol=3e-7)
    assert plane.distortion([5.0, -100.0], [80.0, 90.0]) == pytest.approx(0.0038196, abs=3e-7)


def test_published_scale_factor_of_transverse_mercator():
    # Snyder (1987) p. 270: k = 0.9997989 (value from memory, recomputed); Clarke 1866 there. The
    # same zone on WGS 84 differs in the seventh digit.
    plane = Plane.from_crs("+proj=tmerc +lat_0=0 +lon_0=-75 +k=0.9996 +datum=WGS84 +type=crs")
    values = np.linalg.svd(plane.ground_to_plane(-73.5, 40.5)[0], compute_uv=False)
    np.testing.assert_allclose(values, [0.9997989] * 2, rtol=0, atol=2e-7)


PLANES = {
    "centred at middle latitudes": (Plane.centred_on(-6.0, 56.0), (-16.0, 60.0)),
    "centred on the antimeridian": (Plane.centred_on(180.0, -20.0), (-171.0, -12.0)),
    "west of the antimeridian": (Plane.centred_on(180.0, -20.0), (171.0, -12.0)),
    "near the north pole": (Plane.centred_on(0.0, 88.0), (120.0, 89.9)),
    "near the south pole": (Plane.centred_on(0.0, -88.0), (-150.0, -89.95)),
    "far from its middle": (Plane.centred_on(0.0, 0.0), (60.0, 40.0)),
    "EPSG:3035": (Plane.from_crs("EPSG:3035"), (-20.0, 60.0)),
    "northing first": (Plane.from_crs("EPSG:2193"), (178.5, -40.0)),
    "polar stereographic": (Plane.from_crs("EPSG:3031"), (120.0, -75.0)),
    "axes both south": (Plane.from_crs("EPSG:3575"), (-160.0, 75.0)),
    "sphere of Web maps": (Plane.from_crs("EPSG:3857"), (5.0, 50.0)),
    "another sphere": (Plane.from_crs("+proj=laea +lat_0=50 +R=6371000 +type=crs"), (7.0, 51.0)),
    "across the Pacific": (Plane.from_crs("EPSG:3832"), (-179.0, 10.0)),
}


@pytest.mark.parametrize("case", PLANES.values(), ids=PLANES.keys())
def test_ground_to_plane_agrees_with_differences_along_geodesics(case):
    plane, (lon, lat) = case
    expected = geodesic_differences(plane, lon, lat)
    # Central differences over 800 m err by (step / radius)^2, about 1e-8, and more near a pole
    # (about 1e-5 at 11 km), where the ground's own axes turn quickly.
    np.testing.assert_allclose(plane.ground_to_plane(lon, lat)[0], expected, rtol=0, atol=3e-7)


@pytest.mark.parametrize(("code", "place"), [("EPSG:27572", (3, 46)), ("EPSG:23031", (3, 50))])
def test_ground_to_plane_knows_other_meridians_and_datums(code, place):
    plane = Plane.from_crs(code)
    expected = geodesic_differences(plane, *place)
    # The factors are taken at the WGS 84 position: a datum shift of 100 m matters at 1e-4.
    np.testing.assert_allclose(plane.ground_to_plane(*place)[0], expected, rtol=0, atol=3e-4)


def test_at_the_pole_itself_east_and_north_keep_their_meridian():
    plane = Plane.centred_on(0.0, 90.0)
    matrix = plane.ground_to_plane([0.0, 90.0], [90.0, 90.0])
    # On the meridian 0 north points up; on 90 E it points left. Two metres per 100 km of stretch
    # stay from the place 111 m away where the matrix is taken.
    np.testing.assert_allclose(matrix[0], np.eye(2), rtol=0, atol=1e-5)
    np.testing.assert_allclose(matrix[1], [[0, -1], [1, 0]], rtol=0, atol=1e-5)


@given(
    lon0=st.floats(-180, 180), lat0=st.floats(-90, 90),
    azimuth=st.floats(0, 360), range_km=st.floats(0, 4000),
)  # fmt: skip
@example(lon0=180.0, lat0=0.0, azimuth=90.0, range_km=100.0)
@example(lon0=0.0, lat0=90.0, azimuth=10.0, range_km=0.0)
def test_the_centred_plane_keeps_areas_and_round_trips(lon0, lat0, azimuth, range_km):
    plane = Plane.centred_on(lon0, lat0)
    lon, lat, _ = GEOD.fwd(lon0, lat0, azimuth, 1000 * range_km)
    # The library's derivatives are numerical: 5e-7 near the poles.
    assert np.linalg.det(plane.ground_to_plane(lon, lat))[0] == pytest.approx(1, abs=2e-6)
    lon_back, lat_back = plane.to_lonlat(plane.to_plane(lon, lat))
    assert -180.0 <= lon_back[0] < 180.0
    # PROJ's inverse uses a truncated series: 2e-8 degrees, about 2 mm.
    assert geodesic_km(lon, lat, lon_back, lat_back)[0] < 5e-6


def test_equal_area_on_a_ring_about_the_middle():
    ring = np.arange(0, 360, 10.0)
    lon, lat, _ = GEOD.fwd(np.full(36, -6.0), np.full(36, 56.0), ring, np.full(36, 1.5e6))
    determinants = np.linalg.det(Plane.centred_on(-6.0, 56.0).ground_to_plane(lon, lat))
    # PROJ's derivatives are numerical, good to about 1e-9.
    np.testing.assert_allclose(determinants, 1.0, rtol=0, atol=1e-8)


def test_the_antimeridian_is_nothing_special():
    near = Plane.centred_on([179.9, -179.9], [0.0, 0.0])
    away = Plane.centred_on([19.9, 20.1], [0.0, 0.0])
    here = near.to_plane([179.9, -179.9, 180.0, -180.0], [0.0, 0.0, 1.0, 1.0])
    there = away.to_plane([19.9, 20.1, 20.0, 20.0], [0.0, 0.0, 1.0, 1.0])
    np.testing.assert_allclose(here, there, rtol=0, atol=1e-8)
    # 0.2 degrees of equator, recomputed with PROJ. On a chord 11 km each way the plane loses 1e-7.
    assert here[1, 0] - here[0, 0] == pytest.approx(22.263898, abs=1e-5)


def test_longitudes_beyond_half_a_turn_are_the_same_places():
    plane = Plane.centred_on(200.0, 10.0)
    np.testing.assert_allclose(plane.to_plane(200.0, 10.0), [[0.0, 0.0]], atol=1e-8)
    assert plane.to_lonlat(np.zeros((1, 2)))[0][0] == pytest.approx(-160.0)


def test_the_centre_is_the_spherical_mean():
    plane = Plane.centred_on([170.0, -170.0], [60.0, 60.0])
    # By hand: the mean vector lies on the meridian 180, tan(lat) = tan(60) / cos(10).
    lat = np.degrees(np.arctan(np.tan(np.radians(60)) / np.cos(np.radians(10))))
    assert plane.description.endswith(f"centred on {lat:.4f} N, 180.0000 E")
    # The centre is rounded to 0.0001 degrees, 5.6 m at most.
    assert np.abs(plane.to_plane(180.0, lat)).max() < 0.0057


def test_a_plane_survives_the_way_to_a_worker():
    plane = Plane.centred_on(3.0, 50.0)
    before = plane.to_plane(4.0, 51.0), plane.ground_to_plane(4.0, 51.0)
    again = pickle.loads(pickle.dumps(plane))
    assert again == plane
    np.testing.assert_array_equal(again.to_plane(4.0, 51.0), before[0])
    np.testing.assert_array_equal(again.ground_to_plane(4.0, 51.0), before[1])


def test_no_position_has_no_rows_and_no_distortion():
    plane = Plane.from_crs("EPSG:3035")
    assert plane.to_plane([], []).shape == (0, 2)
    assert plane.ground_to_plane([], []).shape == (0, 2, 2)
    assert [len(v) for v in plane.to_lonlat(np.empty((0, 2)))] == [0, 0]
    assert plane.distortion([], []) == 0.0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("EPSG:4326", "'EPSG:4326' is Geographic 2D CRS, not a projected plane"),
        ("EPSG:4978", "is Geocentric CRS, not a projected plane"),
        ("EPSG:5714", "is Vertical CRS, not a projected plane"),
        ("EPSG:2227", "counts in US survey foot, not in metres"),
        ("+proj=laea +lat_0=1 +lon_0=2 +units=km +type=crs", "counts in kilometre, not in metres"),
        ("EPSG:2053", "counts westwards"),
        ("EPSG:99999999", "'EPSG:99999999' is not a coordinate reference system PROJ knows"),
        ("", "'' is not a coordinate reference system PROJ knows"),
    ],
)
def test_a_crs_that_is_no_plane_in_metres_is_refused(text, message):
    with pytest.raises(StudyError, match=message) as caught:
        Plane.from_crs(text)
    assert str(caught.value).startswith("plane.crs: ")
    assert "EPSG:3035" in str(caught.value)


def test_no_middle_is_refused():
    with pytest.raises(StudyError, match="surround the globe and have no middle"):
        Plane.centred_on([0.0, 90.0, 180.0, -90.0], [0.0, 0.0, 0.0, 0.0])
    with pytest.raises(StudyError, match="no fix to centre the plane on"):
        Plane.centred_on([], [])


def test_a_position_that_the_plane_cannot_show_is_named():
    plane = Plane.centred_on(0.0, 50.0)
    with pytest.raises(
        StudyError, match="cannot show 1 of 2 positions, the first at lon 180, lat -50"
    ):
        plane.to_plane([0.0, 180.0], [50.0, -50.0])
    with pytest.raises(
        StudyError, match="cannot show 1 of 1 positions, the first at lon nan, lat 1"
    ):
        plane.ground_to_plane(np.nan, 1.0)
    with pytest.raises(
        StudyError, match="cannot show 1 of 1 positions, the first at x 1e\\+09, y 0 km"
    ):
        plane.to_lonlat(np.array([[1e9, 0.0]]))


# --- ellipses --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("probability", "chi_square"),
    # Quantiles of chi-square with two degrees of freedom, from printed tables and scipy.
    [(0.5, 1.386294361), (0.9, 4.605170186), (0.95, 5.991464547), (0.99, 9.210340372),
     (0.999, 13.815510558)],
)  # fmt: skip
def test_ellipse_scale_is_the_root_of_chi_square(probability, chi_square):
    # Printed to nine decimals.
    assert ellipse_scale(probability) ** 2 == pytest.approx(chi_square, abs=6e-10)


@pytest.mark.parametrize(
    ("coverage", "scale"),
    # Coverage of k standard deviations, recomputed with scipy, to the last printed digit.
    [(0.39347, 1.0), (0.63212, np.sqrt(2)), (0.6827, 1.51517), (0.86466, 2.0), (0.98889, 3.0)],
)
def test_ellipse_scale_knows_the_usual_readings(coverage, scale):
    assert ellipse_scale(coverage) == pytest.approx(scale, abs=1.5e-4)


@pytest.mark.parametrize("probability", [0.0, 1.0, -0.1, 95.0, float("nan")])
def test_a_probability_outside_0_to_1_is_refused(probability):
    with pytest.raises(StudyError, match=f"ellipse probability: {probability} does not lie"):
        ellipse_scale(probability)


@pytest.mark.parametrize(
    ("bearing", "east", "both", "north"),
    # Major 1000 m, minor 500 m, k = sqrt 2, recomputed; the form of the rotation is that of the
    # CDS guide to error ellipses (position angle from north through east).
    [(0, 125000, 0, 500000), (90, 500000, 0, 125000), (30, 218750, 162379.763, 406250),
     (120, 406250, -162379.763, 218750), (135, 312500, -187500, 312500)],
)  # fmt: skip
def test_covariances_of_an_ellipse_by_bearing(bearing, east, both, north):
    probability = 1 - np.exp(-1)
    cov = covariance_from_ellipse(1000.0, 500.0, bearing, probability)[0]
    # The figures are printed to a thousandth of a square metre.
    np.testing.assert_allclose(cov, [[east, both], [both, north]], rtol=0, atol=6e-4)
    np.testing.assert_allclose(np.linalg.eigvalsh(cov), [125000, 500000], rtol=1e-12)
    again = ellipse_from_covariance(cov[None], probability)
    np.testing.assert_allclose(np.ravel(again), [1000, 500, bearing], rtol=1e-10, atol=1e-8)


@pytest.mark.parametrize(
    ("probability", "area"),
    # pi chi-square, per s1 s2; recomputed. Jennrich & Turner (1969) round the second to 6 pi.
    [(0.5, 4.355172), (0.95, 18.822741), (0.99, 28.935138)],
)
def test_areas_of_credible_ellipses(probability, area):
    ellipse = ellipse_from_covariance(np.array([[[9.0, 0.0], [0.0, 4.0]]]), probability)
    # Six decimals are printed.
    assert np.pi * ellipse.major_m[0] * ellipse.minor_m[0] / 6 == pytest.approx(area, abs=6e-7)


@given(
    major=st.floats(0.1, 1e6), ratio=st.floats(0.01, 0.99), bearing=st.floats(-720, 720),
    probability=st.floats(0.01, 0.99),
)  # fmt: skip
@example(major=1.0, ratio=0.5, bearing=-1e-20, probability=0.5)
def test_ellipses_come_back_from_their_covariances(major, ratio, bearing, probability):
    cov = covariance_from_ellipse(major, major * ratio, bearing, probability)
    again = ellipse_from_covariance(cov, probability)
    # The minor axis is a difference of squares: at a ratio of 0.01 four digits are lost, twice.
    assert again.major_m[0] == pytest.approx(major, rel=1e-10)
    assert again.minor_m[0] == pytest.approx(major * ratio, rel=1e-8)
    assert 0.0 <= again.bearing_deg[0] < 180.0
    turned = (again.bearing_deg[0] - bearing + 90.0) % 180.0 - 90.0
    # A nearly round ellipse (ratio 0.99) has a blunt bearing.
    assert turned == pytest.approx(0.0, abs=1e-8)


def test_a_circle_has_the_bearing_0_and_a_needle_no_negative_width():
    circle = ellipse_from_covariance(4.0 * np.eye(2)[None], 1 - np.exp(-0.5))
    np.testing.assert_allclose(np.ravel(circle), [2.0, 2.0, 0.0], rtol=1e-12)
    needle = ellipse_from_covariance(covariance_from_ellipse(1e4, 0.0, 33.0, 0.5), 0.5)
    # Zero is a difference of equal squares: 1e-8 of the major axis is what rounding leaves.
    assert 0.0 <= needle.minor_m[0] < 1e-3


# --- geodesics -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ends", "expected_km", "tolerance_km"),
    [
        # GeographicLib documentation.
        ((174.81, -41.32, -5.50, 40.96), 19959.67926735, 1e-8),
        # Karney (2013) J. Geodesy 87, tables 4-6: nearly antipodal.
        ((0.0, -30.0, 179.8, 29.9), 19989.832827610, 1e-8),
        # Coordinates of a GeographicLib example, distance recomputed, to a millimetre.
        ((-73.8, 40.6, -0.5, 51.6), 5551.7594003, 1e-6),
        # Quarter meridian, a degree of equator, and over the antimeridian; recomputed, to 1 mm.
        ((0.0, 0.0, 0.0, 90.0), 10001.9657293, 1e-6),
        ((0.0, 0.0, 1.0, 0.0), 111.3194908, 1e-6),
        ((179.9, 0.0, -179.9, 0.0), 22.263898, 1e-6),
    ],
)
def test_geodesic_distances(ends, expected_km, tolerance_km):
    assert geodesic_km(*ends)[0] == pytest.approx(expected_km, abs=tolerance_km)


@pytest.mark.parametrize(
    ("start", "end", "bearing_deg", "distance_km"),
    [
        # Karney (2013) table 2 (from memory, recomputed): 40 N, bearing 30, 10000 km.
        ((0.0, 40.0), (137.84490004377, 41.79331020506), 30.0, 10000.0),
        # GeographicLib documentation; the bearing is printed to eight decimals.
        ((174.81, -41.32), (-5.50, 40.96), 161.06766999, 19959.67926735),
        # Karney (2013) tables 4-6.
        ((0.0, -30.0), (179.8, 29.9), 161.89052473633, 19989.832827610),
    ],
)
def test_geodesic_bearings(start, end, bearing_deg, distance_km):
    assert geodesic_bearing_deg(*start, *end)[0] == pytest.approx(bearing_deg, abs=6e-9)
    assert geodesic_km(*start, *end)[0] == pytest.approx(distance_km, abs=1e-7)


def test_bearings_run_clockwise_from_north_up_to_360():
    bearings = geodesic_bearing_deg(0.0, 0.0, [0.0, 1.0, 0.0, -1.0], [1.0, 0.0, -1.0, 0.0])
    np.testing.assert_allclose(bearings, [0.0, 90.0, 180.0, 270.0], rtol=0, atol=1e-12)
