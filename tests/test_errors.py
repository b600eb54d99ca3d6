"""What a fix says about its position: precedence, classes, and ellipses turned into the plane."""

import numpy as np
import pandas as pd
import pyproj
import pytest
from hypothesis import given
from hypothesis import strategies as st

from trackfit.errors import CLASS_SD_M, ErrorRules, fix_covariances, without_error
from trackfit.faults import FixesError, StudyError
from trackfit.fixes import COLUMNS, read_fixes
from trackfit.frame import Plane, ellipse_from_covariance, ellipse_scale

GEOD = pyproj.Geod(ellps="WGS84")
PLANE = Plane.centred_on(5.0, 50.0)
HALF_TURN = 1 - np.exp(-1)  # k = sqrt 2 exactly


def table(**columns: list) -> pd.DataFrame:
    rows = len(next(iter(columns.values())))
    stated = {"lon": [5.0] * rows, "lat": [50.0] * rows, "error_class": [None] * rows} | columns
    frame = pd.DataFrame({name: stated.get(name, [np.nan] * rows) for name in COLUMNS})
    return frame.assign(file="fixes.csv", line=range(2, rows + 2))


def ellipses(rows: int, major: float, minor: float, bearing: float) -> dict[str, list]:
    return {
        "ellipse_major_m": [major] * rows,
        "ellipse_minor_m": [minor] * rows,
        "ellipse_bearing_deg": [bearing] * rows,
    }


def test_class_table_is_the_published_percentiles_as_one_axis():
    # Costa et al. (2010) PLoS ONE 5:e8677, 68th percentiles of the distance, metres.
    percentiles = {"3": 490, "2": 1010, "1": 1200, "0": 4180, "A": 6190, "B": 10280}
    expected = {name: value / ellipse_scale(0.6827) for name, value in percentiles.items()}
    # The table is in whole metres.
    assert {**expected, "G": 100.0} == pytest.approx(CLASS_SD_M, abs=0.6)
    assert "Z" not in CLASS_SD_M


def test_a_row_uses_its_ellipse_then_its_sd_then_its_class_then_the_default():
    rows = table(
        gps_sd_m=[30.0, 30.0, np.nan, np.nan],
        error_class=["3", "3", "3", "Z"],
        ellipse_major_m=[1000.0, np.nan, 1000.0, np.nan],
        ellipse_minor_m=[500.0, 500.0, np.nan, np.nan],
        ellipse_bearing_deg=[0.0, 0.0, 0.0, np.nan],
    )
    rules = ErrorRules(HALF_TURN, {"3": 250.0}, default_sd_m=7000.0)
    cov = fix_covariances(rows, PLANE, rules)
    east, north = np.sqrt(cov[:, 0, 0]), np.sqrt(cov[:, 1, 1])
    # At its centre the plane is true to scale up to PROJ's numerical derivative.
    np.testing.assert_allclose(east, [np.sqrt(0.125), 0.030, 0.250, 7.0], rtol=1e-8)
    np.testing.assert_allclose(north, [np.sqrt(0.5), 0.030, 0.250, 7.0], rtol=1e-8)


@pytest.mark.parametrize(
    ("bearing", "east", "both", "north"),
    # 1000 m by 500 m with k = sqrt 2, m^2; recomputed, printed to a thousandth.
    [(0, 125000, 0, 500000), (90, 500000, 0, 125000), (30, 218750, 162379.763, 406250),
     (120, 406250, -162379.763, 218750), (135, 312500, -187500, 312500)],
)  # fmt: skip
def test_published_ellipses_in_square_kilometres(bearing, east, both, north):
    cov = fix_covariances(table(**ellipses(1, 1000, 500, bearing)), PLANE, ErrorRules(HALF_TURN))
    expected = np.array([[east, both], [both, north]]) / 1e6
    # 1e-8 is PROJ's numerical derivative at the centre.
    np.testing.assert_allclose(cov[0], expected, rtol=0, atol=1e-8)


def test_the_default_reading_is_two_dimensional_and_the_rival_is_double():
    rows = table(**ellipses(1, 1000, 500, 0))
    default = fix_covariances(rows, PLANE, ErrorRules())[0]
    rival = fix_covariances(rows, PLANE, ErrorRules(ellipse_probability=0.39347))[0]
    # 0.632 is sqrt 2 to three digits: -2 ln(1 - 0.632) = 1.9993.
    np.testing.assert_allclose(default, np.diag([0.125, 0.5]), rtol=4e-4, atol=1e-8)
    np.testing.assert_allclose(rival, np.diag([0.25, 1.0]), rtol=1e-5, atol=1e-8)


@pytest.mark.parametrize(
    ("plane", "lon", "lat"),
    [
        (Plane.centred_on(180.0, -20.0), -160.0, 0.0),
        (Plane.centred_on(0.0, 88.0), 130.0, 89.5),
        (Plane.centred_on(0.0, 0.0), 50.0, 50.0),
        (Plane.from_crs("EPSG:3031"), 100.0, -70.0),
    ],
)
def test_the_ellipse_on_the_ground_is_the_ellipse_in_the_plane(plane, lon, lat):
    """The outline drawn by geodesics on the ground lies on one contour of the plane's normal."""
    major, minor, bearing = 400.0, 150.0, 35.0
    rows = table(lon=[lon], lat=[lat], **ellipses(1, major, minor, bearing))
    cov = fix_covariances(rows, plane, ErrorRules(HALF_TURN))[0]
    angle = np.linspace(0, 2 * np.pi, 24)
    along, across = major * np.cos(angle), minor * np.sin(angle)
    azimuth = bearing + np.degrees(np.arctan2(across, along))
    place = [np.full(24, value) for value in (lon, lat)]
    outline = GEOD.fwd(*place, azimuth, np.hypot(along, across))
    offset = plane.to_plane(outline[0], outline[1]) - plane.to_plane(lon, lat)
    squared = np.einsum("ni,ij,nj->n", offset, np.linalg.inv(cov), offset)
    # The plane bends over 400 m: relative 400 m / Earth's radius.
    np.testing.assert_allclose(squared, 2.0, rtol=3e-4)


@given(
    lon=st.floats(-180, 180), lat=st.floats(-89, 89),
    minor=st.floats(1, 5e3), ratio=st.floats(1.05, 50), bearing=st.floats(0, 179.9),
    probability=st.floats(0.2, 0.95),
)  # fmt: skip
def test_area_is_kept_and_the_ellipse_comes_back(lon, lat, minor, ratio, bearing, probability):
    plane = Plane.centred_on(lon, lat)
    rows = table(lon=[lon], lat=[lat], **ellipses(1, minor * ratio, minor, bearing))
    cov = fix_covariances(rows, plane, ErrorRules(probability))
    jacobian = plane.ground_to_plane(lon, lat)
    ground = np.linalg.inv(jacobian) @ cov @ np.linalg.inv(jacobian).swapaxes(1, 2) * 1e6
    again = ellipse_from_covariance(ground, probability)
    # The minor axis loses ratio^2 = 2500 of double precision; near the pole inv(J) is noisy too.
    np.testing.assert_allclose(np.ravel(again)[:2], [minor * ratio, minor], rtol=1e-8)
    # PROJ's numerical derivatives, 1e-6 near the poles.
    area = np.sqrt(np.linalg.det(cov[0])) * ellipse_scale(probability) ** 2 * 1e6
    assert area == pytest.approx(minor**2 * ratio, rel=3e-6)


def test_rows_that_nothing_describes():
    rows = table(
        gps_sd_m=[30.0, np.nan, np.nan, np.nan, np.nan],
        error_class=[None, "3", "Z", "Z", None],
        ellipse_major_m=[np.nan, np.nan, np.nan, 500.0, 500.0],
        ellipse_minor_m=[np.nan, np.nan, np.nan, 200.0, np.nan],
        ellipse_bearing_deg=[np.nan, np.nan, np.nan, 10.0, 10.0],
    )
    assert without_error(rows, ErrorRules()).tolist() == [False, False, True, False, True]
    assert without_error(rows, ErrorRules(default_sd_m=1.0)).tolist() == [False] * 5
    assert without_error(rows, ErrorRules(class_sd_m={})).tolist() == [
        False,
        True,
        True,
        False,
        True,
    ]
    with pytest.raises(FixesError, match=r"^fixes.csv:4: nothing describes the error of this fix "):
        fix_covariances(rows, PLANE, ErrorRules())


def test_no_row_has_no_covariance():
    rows = table(lon=[5.0]).iloc[:0]
    assert fix_covariances(rows, PLANE, ErrorRules()).shape == (0, 2, 2)
    assert without_error(rows, ErrorRules()).shape == (0,)


def test_a_table_as_read_has_its_errors(tmp_path):
    path = tmp_path / "fixes.csv"
    path.write_text(
        "tag,time,lon,lat,error_class\n"
        "a,2020-01-01T00:00Z,5,50,3\na,2020-01-01T01:00Z,5,50,\na,2020-01-01T02:00Z,5,50,Z\n"
    )
    rows = read_fixes([path]).table
    assert without_error(rows, ErrorRules()).tolist() == [False, True, True]
    cov = fix_covariances(rows[:1], PLANE, ErrorRules())
    # 1e-8 is PROJ's numerical derivative at the centre.
    np.testing.assert_allclose(cov, 0.323**2 * np.eye(2)[None], rtol=0, atol=1e-8)


@pytest.mark.parametrize(
    ("rules", "message"),
    [
        ({"ellipse_probability": 1.0}, r"^errors.ellipse_probability: 1.0 does not lie between"),
        ({"ellipse_probability": 0.0}, r"^errors.ellipse_probability: 0.0 does not lie between"),
        (
            {"class_sd_m": {"3": -1.0}},
            r"^errors.classes.3: -1.0 is not a positive number of metres",
        ),
        ({"class_sd_m": {"Z": np.inf}}, r"^errors.classes.Z: inf is not a positive number"),
        ({"default_sd_m": 0.0}, r"^errors.default_sd_m: 0.0 is not a positive number of metres"),
    ],
)
def test_impossible_rules_are_refused(rules, message):
    with pytest.raises(StudyError, match=message):
        ErrorRules(**rules)
