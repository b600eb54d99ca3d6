"""The local plane: projection, bearings, distances, and error ellipses as covariances.

Inside, positions are kilometres in one projected plane per study; outside, they are WGS 84 degrees.
An error ellipse is stated on the ground (metres, bearing from true north), so it has to be turned
and stretched into the plane at its own place: `Plane.ground_to_plane` is that matrix.
"""

import functools
from collections.abc import Collection
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import pyproj
from jaxtyping import Float

from trackfit.faults import StudyError

# numpy's own alias takes text and complex numbers, and run-time checks refuse plain floats by it.
Numbers = float | int | Collection[Any]

_WGS84 = pyproj.CRS("EPSG:4326")
_GEOD = pyproj.Geod(ellps="WGS84")
# Within 111 m of a pole PROJ's numerical derivatives step over it; directions hardly change there.
_LAT_LIMIT_DEG = 89.999
# A mean of unit vectors shorter than this points nowhere: the fixes surround the globe.
_SHORTEST_MEAN = 1e-3


class Ellipses(NamedTuple):
    """Ellipses on the ground: semi-axes in metres, bearing of the major one in [0, 180) degrees."""

    major_m: Float[np.ndarray, " n"]
    minor_m: Float[np.ndarray, " n"]
    bearing_deg: Float[np.ndarray, " n"]


@dataclass(frozen=True)
class Plane:
    """A projected plane in kilometres, x east and y north at its middle.

    Attributes
    ----------
    crs
        The projected coordinate reference system; its own axes are in metres.
    description
        One line for reports: what the plane is.

    Examples
    --------
    The antimeridian is nothing special:

    >>> plane = Plane.centred_on([179.9, -179.9], [0.0, 0.0])
    >>> plane.to_plane([179.9, -179.9], [0.0, 0.0]).round(3).tolist()
    [[-11.132, 0.0], [11.132, 0.0]]
    """

    crs: pyproj.CRS
    description: str

    @classmethod
    def centred_on(cls, lon_deg: Numbers, lat_deg: Numbers) -> "Plane":
        """Lambert's azimuthal equal-area plane (WGS 84) about the spherical mean of the points.

        The centre is rounded to 0.0001 degrees so that it can be written down and typed in again.

        Reference: Snyder, J. P. (1987) Map projections: a working manual, USGS PP 1395, ch. 24.

        Parameters
        ----------
        lon_deg, lat_deg
            Degrees, (n,), n >= 1.

        Raises
        ------
        StudyError
            Where there is no point, or the points surround the globe and have no middle.
        """
        lon0, lat0 = _spherical_mean(lon_deg, lat_deg)
        crs = pyproj.CRS(
            f"+proj=laea +lat_0={lat0:.4f} +lon_0={lon0:.4f} +datum=WGS84 +units=m +type=crs"
        )
        place = f"{abs(lat0):.4f} {'NS'[lat0 < 0]}, {abs(lon0):.4f} {'EW'[lon0 < 0]}"
        return cls(crs, f"Lambert azimuthal equal-area, WGS 84, centred on {place}")

    @classmethod
    def from_crs(cls, text: str) -> "Plane":
        """Read a projected coordinate reference system in metres, as the user names it.

        Parameters
        ----------
        text
            Anything PROJ reads: "EPSG:3035", a PROJ string, WKT.

        Raises
        ------
        StudyError
            Where PROJ does not know it, it is not projected, not in metres, or counts westwards.
        """
        try:
            crs = pyproj.CRS(text)
        except pyproj.exceptions.CRSError as error:
            raise StudyError(
                f"plane.crs: {text!r} is not a coordinate reference system PROJ knows; "
                'give a code such as "EPSG:3035"'
            ) from error
        _check_projected(text, crs)
        return cls(crs, _described(text, crs))

    def to_plane(self, lon_deg: Numbers, lat_deg: Numbers) -> Float[np.ndarray, "n 2"]:
        """Degrees (WGS 84) to kilometres in the plane, (n, 2).

        Raises
        ------
        StudyError
            Where the projection cannot show a position; names the first.
        """
        lon, lat = _columns(lon_deg, lat_deg)
        x_m, y_m = self._forward.transform(lon, lat)
        xy_km = np.column_stack([x_m, y_m]) / 1000.0
        self._refuse_unshown(xy_km, lon, lat, "lon {:g}, lat {:g} degrees")
        return xy_km

    def to_lonlat(
        self, xy_km: Float[np.ndarray, "n 2"]
    ) -> tuple[Float[np.ndarray, " n"], Float[np.ndarray, " n"]]:
        """Kilometres in the plane, (n, 2), to longitude in [-180, 180) and latitude, degrees.

        PROJ's inverse of the equal-area projection is good to about 1e-8 degrees (a millimetre).

        Raises
        ------
        StudyError
            Where a point of the plane is no place on Earth; names the first.
        """
        xy = np.asarray(xy_km, dtype=float).reshape(-1, 2)
        x_m, y_m = xy.T * 1000.0
        lon, lat = self._forward.transform(x_m, y_m, direction="INVERSE")
        self._refuse_unshown(np.column_stack([lon, lat]), xy[:, 0], xy[:, 1], "x {:g}, y {:g} km")
        return _wrap(lon), lat

    def ground_to_plane(self, lon_deg: Numbers, lat_deg: Numbers) -> Float[np.ndarray, "n 2 2"]:
        """How a small step on the ground appears in the plane: d(x, y) / d(east, north), no unit.

        J = a [[x_lam / (N cos lat), x_phi / M], [y_lam / (N cos lat), y_phi / M]], with M and N
        the radii of curvature of WGS 84 along the meridian and across it. PROJ's factors are
        derivatives by radians in units of the semi-major axis a of the plane's own ellipsoid.

        Reference: Snyder (1987) pp. 20-27. Within 111 m of a pole the matrix is that of the nearest
        place outside, on the same meridian.

        Raises
        ------
        StudyError
            Where the projection has no derivative at a position; names the first.
        """
        lon, lat = _columns(lon_deg, lat_deg)
        if lon.size == 0:  # PROJ's binding refuses to find the factors of no place
            return np.empty((0, 2, 2))
        clear_lat = np.clip(lat, -_LAT_LIMIT_DEG, _LAT_LIMIT_DEG)
        factors = self._proj.get_factors(lon - self._meridian_deg, clear_lat)
        across_m, along_m = _radii_m(clear_lat)
        east = np.stack([factors.dx_dlam, factors.dy_dlam], axis=-1) / across_m[:, None]
        north = np.stack([factors.dx_dphi, factors.dy_dphi], axis=-1) / along_m[:, None]
        matrix = np.stack([east, north], axis=-1) * (self.crs.get_geod() or _GEOD).a
        self._refuse_unshown(matrix.reshape(-1, 4), lon, lat, "lon {:g}, lat {:g} degrees")
        return matrix

    def distortion(self, lon_deg: Numbers, lat_deg: Numbers) -> float:
        """Find the largest stretch of the plane at the points: max |singular value of J - 1|.

        Zero where there is no point; 0.01 means that a kilometre is drawn up to 10 m wrong.
        """
        values = np.linalg.svd(self.ground_to_plane(lon_deg, lat_deg), compute_uv=False)
        return float(np.max(np.abs(values - 1.0), initial=0.0))

    @functools.cached_property
    def _forward(self) -> pyproj.Transformer:
        return pyproj.Transformer.from_crs(_WGS84, self.crs, always_xy=True)

    @functools.cached_property
    def _proj(self) -> pyproj.Proj:
        return pyproj.Proj(self.crs)

    @functools.cached_property
    def _meridian_deg(self) -> float:
        """PROJ's factors count longitude from the prime meridian of the system (Paris, Rome)."""
        meridian = self.crs.prime_meridian
        if meridian is None:
            return 0.0
        return float(np.degrees(meridian.longitude * float(meridian.unit_conversion_factor)))

    def _refuse_unshown(
        self, shown: np.ndarray, first: np.ndarray, second: np.ndarray, place: str
    ) -> None:
        bad = ~np.isfinite(shown).all(axis=1)
        if bad.any():
            i = int(np.argmax(bad))
            raise StudyError(
                f"plane: {self.description} cannot show {bad.sum()} of {len(bad)} positions, "
                f"the first at {place.format(first[i], second[i])}; "
                "choose another plane.crs or check that position"
            )


def ellipse_scale(probability: float) -> float:
    """Semi-axis of the ellipse that holds `probability` of a 2-D normal, in standard deviations.

    k = sqrt(-2 ln(1 - p)): 1 for p = 0.3935, sqrt 2 for 0.6321, 2.4477 for 0.95. It is the square
    root of the chi-square quantile with two degrees of freedom.

    Raises
    ------
    StudyError
        Where the probability is not between 0 and 1.

    Examples
    --------
    >>> round(ellipse_scale(0.95), 5)
    2.44775
    """
    if not 0.0 < probability < 1.0:
        raise StudyError(f"ellipse probability: {probability!r} does not lie between 0 and 1")
    return float(np.sqrt(-2.0 * np.log1p(-probability)))


def covariance_from_ellipse(
    major_m: Numbers, minor_m: Numbers, bearing_deg: Numbers, probability: float
) -> Float[np.ndarray, "n 2 2"]:
    """Covariances (east, north) in m^2 of ellipses that hold `probability`.

    S_ee = (M^2 sin^2 + m^2 cos^2) / k^2, S_nn = (M^2 cos^2 + m^2 sin^2) / k^2,
    S_en = (M^2 - m^2) sin cos / k^2, with the bearing of the major axis clockwise from true north
    and k = `ellipse_scale(probability)`.

    Examples
    --------
    A major axis that points north:

    >>> covariance_from_ellipse([2.0], [1.0], [0.0], 1 - np.exp(-0.5)).round(6).tolist()
    [[[1.0, 0.0], [0.0, 4.0]]]
    """
    scale = ellipse_scale(probability)
    major, minor, bearing = np.broadcast_arrays(*_columns(major_m, minor_m, bearing_deg))
    sin, cos = np.sin(np.radians(bearing)), np.cos(np.radians(bearing))
    major2, minor2 = (major / scale) ** 2, (minor / scale) ** 2
    east = major2 * sin**2 + minor2 * cos**2
    north = major2 * cos**2 + minor2 * sin**2
    both = (major2 - minor2) * sin * cos
    return np.stack([east, both, both, north], axis=-1).reshape(-1, 2, 2)


def ellipse_from_covariance(cov_m2: Float[np.ndarray, "n 2 2"], probability: float) -> Ellipses:
    """Ellipses that hold `probability` of normals with covariances (east, north) in m^2, (n, 2, 2).

    The inverse of `covariance_from_ellipse`; a circle gets the bearing 0.

    Examples
    --------
    >>> ellipses = ellipse_from_covariance(np.array([[[4.0, 0.0], [0.0, 1.0]]]), 1 - np.exp(-0.5))
    >>> [round(float(value[0]), 6) for value in ellipses]
    [2.0, 1.0, 90.0]
    """
    scale = ellipse_scale(probability)
    cov = np.asarray(cov_m2, dtype=float).reshape(-1, 2, 2)
    east, north, both = cov[:, 0, 0], cov[:, 1, 1], cov[:, 0, 1]
    middle, half = (north + east) / 2, (north - east) / 2
    radius = np.hypot(half, both)
    bearing = np.degrees(np.arctan2(both, half)) / 2
    major = scale * np.sqrt(middle + radius)
    # Rounding may leave a needle's variance a hair below zero.
    minor = scale * np.sqrt(np.clip(middle - radius, 0.0, None))
    return Ellipses(major, minor, _wrap(bearing, low=0.0, turn=180.0))


def geodesic_km(
    lon1_deg: Numbers, lat1_deg: Numbers, lon2_deg: Numbers, lat2_deg: Numbers
) -> Float[np.ndarray, " n"]:
    """Shortest distance over the WGS 84 ellipsoid, kilometres, (n,).

    Reference: Karney, C. F. F. (2013) Algorithms for geodesics, J. Geodesy 87, 43-55.
    """
    _, _, distance_m = _GEOD.inv(*_columns(lon1_deg, lat1_deg, lon2_deg, lat2_deg))
    return np.asarray(distance_m) / 1000.0


def geodesic_bearing_deg(
    lon1_deg: Numbers, lat1_deg: Numbers, lon2_deg: Numbers, lat2_deg: Numbers
) -> Float[np.ndarray, " n"]:
    """Bearing at the first point of the shortest way to the second, degrees in [0, 360), (n,).

    Clockwise from true north; the WGS 84 ellipsoid, as in `geodesic_km`.
    """
    bearing_deg, _, _ = _GEOD.inv(*_columns(lon1_deg, lat1_deg, lon2_deg, lat2_deg))
    return _wrap(np.asarray(bearing_deg), low=0.0)


def _columns(*values: Numbers) -> list[Any]:
    """Every argument as a writable float vector; numbers are vectors of one."""
    arrays = np.broadcast_arrays(*(np.atleast_1d(np.asarray(v, dtype=float)) for v in values))
    return [np.array(a) for a in arrays]


def _wrap(angle_deg: np.ndarray, low: float = -180.0, turn: float = 360.0) -> np.ndarray:
    """Angles in [low, low + turn); those already there keep every bit."""
    turned = np.mod(angle_deg - low, turn) + low
    # The remainder of a tiny negative number rounds up to a whole turn.
    turned = np.where(turned >= low + turn, low, turned)
    return np.where((angle_deg >= low) & (angle_deg < low + turn), angle_deg, turned)


def _spherical_mean(lon_deg: Numbers, lat_deg: Numbers) -> tuple[float, float]:
    """Longitude and latitude (degrees) of the mean of the points' unit vectors."""
    lon, lat = (np.radians(values) for values in _columns(lon_deg, lat_deg))
    if lon.size == 0:
        raise StudyError("plane: there is no fix to centre the plane on")
    vectors = np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    x, y, z = vectors.mean(axis=1)
    if np.sqrt(x * x + y * y + z * z) < _SHORTEST_MEAN:
        raise StudyError(
            "plane: the fixes surround the globe and have no middle; "
            "state plane.crs, or split the tags into several studies"
        )
    return float(np.degrees(np.arctan2(y, x))), float(np.degrees(np.arctan2(z, np.hypot(x, y))))


def _check_projected(text: str, crs: pyproj.CRS) -> None:
    """Refuse what is not a plane in metres whose first axis does not count westwards."""
    advice = 'choose a projected system in metres, such as "EPSG:3035"'
    if not crs.is_projected:
        raise StudyError(f"plane.crs: {text!r} is {crs.type_name}, not a projected plane; {advice}")
    axes = crs.axis_info[:2]
    wrong = [axis.unit_name for axis in axes if axis.unit_conversion_factor != 1.0]
    if wrong:
        raise StudyError(f"plane.crs: {text!r} counts in {wrong[0]}, not in metres; {advice}")
    if any(axis.direction == "west" for axis in axes):
        raise StudyError(f"plane.crs: {text!r} counts westwards, not eastwards; {advice}")


def _described(text: str, crs: pyproj.CRS) -> str:
    """One line on a plane: its own name, or for a PROJ text, which has none, what it does."""
    if crs.name not in ("", "unknown", "undefined"):
        return f"{crs.name} ({text})" if crs.name != text else text
    method = crs.coordinate_operation.method_name if crs.coordinate_operation else "a projection"
    datum = crs.datum.name if crs.datum else ""
    if datum.lower().startswith("unknown") or not datum:
        datum = _ellipsoid(crs)
    return f"{method}, {datum} ({text})"


def _ellipsoid(crs: pyproj.CRS) -> str:
    body = crs.ellipsoid
    if body is None:
        return "no stated ellipsoid"
    if body.name in ("", "unknown"):
        round_or_not = "sphere" if body.semi_major_metre == body.semi_minor_metre else "ellipsoid"
        return f"{round_or_not} of {body.semi_major_metre / 1000.0:.3f} km"
    return f"ellipsoid {body.name}"


def _radii_m(lat_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Radius of the parallel (N cos lat) and of the meridian's curvature (M), WGS 84, metres."""
    sin2 = np.sin(np.radians(lat_deg)) ** 2
    root = np.sqrt(1.0 - _GEOD.es * sin2)
    across = _GEOD.a / root * np.cos(np.radians(lat_deg))
    return across, _GEOD.a * (1.0 - _GEOD.es) / root**3
