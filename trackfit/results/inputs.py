"""What the writers and figures ask of a filled track, a fit, a response and a set of fixes.

These are shapes, not classes: anything with the same attributes will do.
"""

from typing import Protocol

import numpy as np
import pandas as pd
from jaxtyping import Float

POSITION_COLUMNS = (
    "time",
    "lon",
    "lat",
    "sd_m",
    "ellipse_bearing_deg",
    "ellipse50_major_m",
    "ellipse50_minor_m",
    "ellipse95_major_m",
    "ellipse95_minor_m",
    "hours_to_fix",
    "in_gap",
    "at_fix",
    "coast_adjusted",
)
"""The columns of a filled track's table, in order."""

POSITION_FLAGS = ("in_gap", "at_fix", "coast_adjusted")
"""Those of them that hold truth values."""

JUDGEMENT_COLUMNS = (
    "time",
    "lon",
    "lat",
    "predicted_lon",
    "predicted_lat",
    "offset_m",
    "bearing_deg",
    "distance_sd",
    "p_value",
    "expected_sd_m",
    "flagged",
)
"""The columns of a judgement's table, in order."""


class StatusLike(Protocol):
    """How a fit ended."""

    @property
    def name(self) -> str:
        """One word for programs."""

    @property
    def sentence(self) -> str:
        """The sentence for the user."""

    @property
    def ok(self) -> bool:
        """True if the fit can be used."""


class TrackLike(Protocol):
    """One tag's positions at regular times, and paths drawn from the same posterior."""

    @property
    def tag(self) -> str:
        """Name of the tag."""

    @property
    def table(self) -> pd.DataFrame:
        """One row a time, with the columns of `POSITION_COLUMNS`."""

    @property
    def draws_lonlat(self) -> Float[np.ndarray, "draws times 2"]:
        """Drawn paths in degrees at `draw_times`; there may be none."""

    @property
    def draw_times(self) -> pd.DatetimeIndex:
        """Times of the drawn paths: those of the table, and more where they round the land."""

    @property
    def fit_status(self) -> StatusLike:
        """How the fit ended that the positions are from."""


class FitLike(Protocol):
    """The fit of one tag."""

    @property
    def tag(self) -> str:
        """Name of the tag."""

    @property
    def status(self) -> StatusLike:
        """How the fit ended."""

    @property
    def parameters(self) -> pd.DataFrame:
        """Columns parameter, unit, estimate, sd, lower95, upper95, role."""

    @property
    def log_marginal(self) -> float:
        """Logarithm of the marginal likelihood."""

    @property
    def n_fixes(self) -> int:
        """Number of fixes used."""

    @property
    def n_states(self) -> int:
        """Number of times of the grid."""

    @property
    def step_hours(self) -> float:
        """Regular step of the grid."""

    @property
    def step_check(self) -> pd.DataFrame | None:
        """Change of every parameter at half the step, in standard errors; None if not asked."""


class ResponseLike(Protocol):
    """One preference term of one tag: h against the layer, with its 95 % band."""

    @property
    def tag(self) -> str:
        """Name of the tag."""

    @property
    def term(self) -> str:
        """Name of the preference term."""

    @property
    def layer(self) -> str:
        """Name of the layer."""

    @property
    def unit(self) -> str:
        """Unit of `at`."""

    @property
    def at(self) -> Float[np.ndarray, " m"]:
        """Values of the layer."""

    @property
    def h(self) -> Float[np.ndarray, " m"]:
        """Preference at those values, km^2/h."""

    @property
    def lower95(self) -> Float[np.ndarray, " m"]:
        """Lower edge of the 95 % band, km^2/h."""

    @property
    def upper95(self) -> Float[np.ndarray, " m"]:
        """Upper edge of the 95 % band, km^2/h."""

    @property
    def fit_status(self) -> StatusLike:
        """How the fit ended that the response is from."""


class JudgementLike(Protocol):
    """The used fixes of one tag against their predictions from all its other fixes."""

    @property
    def tag(self) -> str:
        """Name of the tag."""

    @property
    def table(self) -> pd.DataFrame:
        """One row a fix, with the columns of `JUDGEMENT_COLUMNS`."""

    @property
    def flag_p_value(self) -> float:
        """Fixes with a smaller p-value are flagged."""


class FixesLike(Protocol):
    """Fixes in use and fixes set aside."""

    @property
    def table(self) -> pd.DataFrame:
        """Fixes in use, by tag and time."""

    @property
    def set_aside(self) -> pd.DataFrame:
        """Fixes set aside: file, line, tag, time, lon, lat as read, and the reason."""
