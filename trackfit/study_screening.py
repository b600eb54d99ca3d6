"""What a study file may say about fixes to set aside or to flag: the table ``[screening]``."""

from typing import Self

from pydantic import model_validator

from trackfit.study_table import Table
from trackfit.study_values import Moment, Texts, refuse, setting


class Deployment(Table):
    """When a tag was on its animal. One end may be left out."""

    start: Moment | None = setting(
        None,
        "Fixes before this moment are set aside.",
        unit="with its zone, such as `2024-05-01T06:00:00Z`",
        alias="from",
    )
    end: Moment | None = setting(
        None,
        "Fixes after this moment are set aside.",
        unit="with its zone, such as `2024-06-12T18:30:00Z`",
        alias="to",
    )

    @model_validator(mode="after")
    def _some_time(self) -> Self:
        if self.start is None and self.end is None:
            refuse("needs `from`, `to` or both")
        if self.start is not None and self.end is not None and self.start >= self.end:
            refuse("must be later than `from`", key="to")
        return self


class Screening(Table):
    """Reasons to set a fix aside before the fit, each switched on by its own key.

    Every fix set aside stands in `set_aside.csv` with its reason and the figure behind it. Fixes
    are tried in this order: deployment, class, land, near-duplicates, then spikes and speed until
    neither finds more. With heavy tails (`errors.tails`) a study can do without: wrong fixes then
    weigh little by themselves.
    """

    invalid_classes: Texts = setting(
        ("Z",),
        "Quality classes that mean no valid position, whatever else the row states. An empty list "
        "`[]` takes every class; a class then still needs an ellipse or an error size to be used.",
        shown='`["Z"]`',
    )
    max_speed_m_per_s: float | None = setting(
        None,
        "Speed test: set aside the fix whose root mean square speed to the two fixes before and "
        "the two after is highest, as long as that is above this limit (McConnell et al. 1992).",
        unit="metres per second",
        shown="no speed test",
        gt=0,
    )
    spike_speed_m_per_s: float | None = setting(
        None,
        "A spike is a fix to which and from which the animal would have moved faster than this, "
        "and nearly straight back (see `spike_angle_deg`).",
        unit="metres per second",
        shown="spikes are not looked for",
        gt=0,
    )
    spike_angle_deg: float = setting(
        30.0,
        "Angle at a spike between the ways to the fixes before and after it, below which it counts "
        "as straight back: 0 is exactly back, 180 straight on.",
        unit="degrees",
        gt=0,
        le=180,
    )
    land_margin_m: float | None = setting(
        None,
        "Set aside fixes on land (see `[coast]`) further than this from the sea; 0 takes all that "
        "are on land. Fixes near the shore often lie ashore by their errors alone.",
        unit="metres",
        shown="fixes on land are used",
        ge=0,
        # a study's coast is read to 50 km beyond its fixes
        lt=50_000,
    )
    near_duplicate_seconds: float | None = setting(
        None,
        "Of fixes of a tag no further apart in time than this, keep only the most precise.",
        unit="seconds",
        shown="all are used",
        gt=0,
    )
    deployments: dict[str, Deployment] = setting(
        dict,
        "Tag -> when it was on its animal, such as `seal-7 = { from = 2024-05-01T06:00:00Z }`.",
        shown="all times",
    )
    flag_p_value: float = setting(
        0.001,
        "A fix is flagged, and used all the same, where the other fixes of its tag make a reported "
        "position as far off as this one less likely than this. At 0.001, one sound fix in a "
        "thousand is flagged by chance.",
        unit="probability",
        gt=0,
        lt=1,
    )

    @model_validator(mode="after")
    def _angle_of_something(self) -> Self:
        if "spike_angle_deg" in self.model_fields_set and self.spike_speed_m_per_s is None:
            refuse("says nothing without spike_speed_m_per_s", key="spike_angle_deg")
        return self
