"""What a study file may say: every table and key, with its unit, default, limits and meaning.

The descriptions are the reference page ``docs/study-file.md``; nothing is written twice. Rules that
concern one table stand here; rules between tables stand in :mod:`trackfit.study`.
"""

from typing import Literal, Self

from pydantic import model_validator

from trackfit.study_table import Table
from trackfit.study_values import (
    ESTIMATED,
    CurrentShare,
    ErrorScale,
    ExistingFile,
    Folder,
    Formats,
    PositiveMetres,
    ProjectedCrs,
    TailWeight,
    Text,
    Texts,
    Unit,
    refuse,
    setting,
    unit_dimensions,
)

MINUTE_HOURS = 1 / 60
"""Shortest step and interval: below it a tag's clock and the layers say nothing more."""


class About(Table):
    """What the study is called and which tags it takes."""

    name: Text = setting(..., "The name of the study; it heads the report and every file written.")
    seed: int = setting(
        1,
        "Start of the random numbers. The same seed, data and version give the same drawn paths.",
        ge=0,
        lt=2**32,
    )
    tags: Texts = setting(
        (), "Fit only these tags, by the names the fixes give them.", shown="every tag in the fixes"
    )


class PlaneSettings(Table):
    """The flat map on which the movement is worked out."""

    crs: ProjectedCrs | None = setting(
        None,
        "A projected coordinate system in metres, as an authority code, WKT or PROJ text.",
        shown="an equal-area plane centred on the fixes",
    )


class LayerSettings(Table):
    """One gridded variable over the sea; the name after `layers.` is yours to choose."""

    file: ExistingFile = setting(..., "A NetCDF or GeoTIFF file.")
    variable: Text | None = setting(
        None, "Variable to read from a NetCDF file.", shown="the only gridded variable in the file"
    )
    east: Text | None = setting(
        None,
        "Variable with the eastward part of a current; of a GeoTIFF the band, as text.",
    )
    north: Text | None = setting(
        None,
        "Variable with the northward part of a current; of a GeoTIFF the band, as text.",
    )
    band: int = setting(1, "Band to read from a GeoTIFF file, counted from 1.", ge=1)
    select: dict[str, float] = setting(
        dict,
        "For a variable with more dimensions than time, y and x: the coordinate to take along each "
        "further dimension, such as `{ depth = 0.5 }`.",
        shown="nothing",
    )
    unit: Unit | None = setting(
        None,
        "Unit of the values, where the file gives none or a wrong one.",
        shown="the file's unit",
    )
    to_unit: Unit | None = setting(
        None,
        "Unit to turn the values into before anything else. A current always becomes km/h.",
        shown="the unit they have",
    )
    factor: float = setting(
        1.0, "Multiply the values by this after any change of unit; -1 turns heights into depths."
    )
    resolution_km: float | None = setting(
        None, "Spacing of the working grid.", unit="kilometres", shown="near the file's own", gt=0
    )
    centre: float | None = setting(
        None,
        "Value taken as zero when the layer is standardised.",
        unit="the layer's unit",
        shown="the layer's mean",
    )
    scale: float | None = setting(
        None,
        "Difference taken as one when the layer is standardised.",
        unit="the layer's unit",
        shown="the layer's standard deviation",
        gt=0,
    )

    @property
    def is_current(self) -> bool:
        """Whether the layer holds the two parts of a current."""
        return self.east is not None and self.north is not None

    @model_validator(mode="after")
    def _scalar_or_current(self) -> Self:
        if self.factor == 0:
            refuse("must not be 0: every value would vanish", key="factor")
        if (self.east is None) != (self.north is None):
            here, absent = ("east", "north") if self.north is None else ("north", "east")
            refuse(f"a current needs both parts, and {absent} is missing", key=here)
        if self.is_current:
            self._refuse_beside_a_current()
        if (
            self.unit
            and self.to_unit
            and unit_dimensions(self.unit) != unit_dimensions(self.to_unit)
        ):
            refuse(f'"{self.unit}" cannot become a unit of another kind', key="to_unit")
        return self

    def _refuse_beside_a_current(self) -> None:
        for key in ("variable", "to_unit", "centre", "scale"):
            if getattr(self, key) is not None:
                refuse("has no place in a layer with east and north (a current)", key=key)
        if self.east == self.north:
            refuse("east and north name the same variable", key="north")


class CoastFile(Table):
    """Land, for the maps and for telling a position at sea from one ashore."""

    file: ExistingFile = setting(..., "Polygons of land: GeoPackage, GeoJSON or shapefile.")


class Motion(Table):
    """How the animal is taken to move between fixes."""

    kind: Literal["diffusive", "persistent"] = setting(
        "diffusive",
        "`diffusive`: a drift up the preference and with the current, plus unmodelled movement "
        "that spreads with the square root of time. `persistent`: the animal keeps heading; its "
        "velocity relaxes to that same drift over a persistence time.",
    )
    step_hours: float = setting(
        0.5,
        "Longest step in the working grid of times; all fix times are added to it.",
        unit="hours",
        ge=MINUTE_HOURS,
        le=24,
    )
    pace_log_sd: float = setting(
        0.0,
        "How much the pace of the movement changes in time: the standard deviation of its "
        "logarithm from spell to spell. 0 keeps one pace; 0.5 lets it differ by a factor of 1.6 "
        "either way. A varying pace makes regions wide where the animal is restless, narrow where "
        "it is steady.",
        ge=0,
        le=3,
    )
    pace_hours: float = setting(
        24.0,
        "Length of a spell of one pace; paces of spells twice this apart are all but unrelated.",
        unit="hours",
        gt=0,
    )


class Point(Table):
    """A place, such as a colony."""

    lon: float = setting(..., "Longitude of the place.", unit="degrees east", ge=-180, le=360)
    lat: float = setting(..., "Latitude of the place.", unit="degrees north", ge=-90, le=90)


class Preference(Table):
    """One term of the preference: what draws the animal. Give the table once for each term."""

    name: Text | None = setting(
        None,
        "Name of the term in the tables and figures; a `point` needs one.",
        shown="the layer's",
    )
    layer: Text | None = setting(None, "The layer the term is made of.")
    point: Point | None = setting(None, "Or the place whose distance the term uses.")
    shape: Literal["linear", "humped", "smooth", "distance"] = setting(
        ...,
        "`linear`: the more the better, or the worse. `humped`: a best value with less on both "
        "sides. `smooth`: a curve, as wiggly as the fixes ask for. `distance`: towards or away "
        "from a point.",
    )
    shared: bool = setting(
        False,
        "All tags of the study have the same coefficients in this term, estimated from all of them "
        "together; everything else stays a tag's own.",
    )

    @property
    def term(self) -> str:
        """The name of the term in tables and figures."""
        return self.name or self.layer or ""

    @model_validator(mode="after")
    def _layer_or_point(self) -> Self:
        if self.layer is not None and self.point is not None:
            refuse("a term has a layer or a point, not both", key="point")
        if self.shape == "distance" and self.point is None:
            refuse('shape "distance" needs a point', key="shape", hint="linear")
        if self.shape != "distance" and self.layer is None:
            near = "distance" if self.point is not None else ""
            refuse(f'shape "{self.shape}" needs a layer', key="shape", hint=near)
        if self.point is not None and self.name is None:
            refuse('a term with a point needs a name, such as "colony"', key="name")
        return self


class Current(Table):
    """Which layer carries the animal, and how far."""

    layer: Text = setting(..., "A layer with `east` and `north`.")
    drift: CurrentShare = setting(
        ESTIMATED,
        "Share of the water's velocity the animal takes on: `estimated`, or a number between 0 "
        "(not carried) and 2; 1 is carried wholly.",
    )
    shared: bool = setting(
        False, "All tags of the study have the same drift, estimated from all of them together."
    )

    @model_validator(mode="after")
    def _shared_is_estimated(self) -> Self:
        if self.shared and self.drift != ESTIMATED:
            refuse("a drift that is given is the same for all tags already", key="shared")
        return self


class Errors(Table):
    """What a fix says about the position: how far off it may be."""

    ellipse_probability: float = setting(
        0.632,
        "Probability that the supplier's error ellipse holds the true position. 0.632 means "
        "half-axes of sqrt(2) standard deviations, 0.393 means one.",
        unit="probability",
        gt=0,
        lt=1,
    )
    default_sd_m: float | None = setting(
        None,
        "Standard deviation along each axis of a fix that nothing else describes.",
        unit="metres",
        shown="such fixes are set aside",
        gt=0,
    )
    scale: ErrorScale = setting(
        1.0,
        "Multiplies every error size: a number above 0, or `estimated` for one common factor.",
    )
    tails: Literal["normal", "heavy"] = setting(
        "normal",
        "`normal`: errors as stated. `heavy`: a few fixes may be far worse than stated (bivariate "
        "Student-t errors); such fixes then weigh little by themselves.",
    )
    tail_nu: TailWeight = setting(
        ESTIMATED,
        "Degrees of freedom of heavy tails: `estimated`, or a number from 0.5; the smaller, the "
        "heavier. Above 30 tails are all but normal.",
    )
    classes: dict[str, PositiveMetres] = setting(
        dict,
        "Quality class -> standard deviation along each axis, over the built-in ones.",
        unit="metres",
        shown="the built-in table",
    )


class Fit(Table):
    """How the parameters are found."""

    priors: Literal["weak", "none"] = setting(
        "weak",
        "`weak`: mild limits from what animals can do. `none`: the data alone; a parameter the "
        "data do not speak about then has no answer.",
    )
    prior_speed_kmh: float = setting(
        2.0, "Typical speed of the animal, on which the weak priors rest.", unit="km/h", gt=0
    )
    coarse_factor: int = setting(
        4, "The search starts on steps this many times longer; 1 leaves this out.", ge=1, le=64
    )
    step_check: bool = setting(
        False, "Fit again with half the step and report how far the estimates move."
    )
    points: int = setting(
        128,
        "Points at which the parameters' posterior, often skewed, is evaluated; estimates, "
        "intervals and positions average over what they show. 0 takes the plain normal "
        "approximation, which is faster.",
        ge=0,
        le=8192,
    )
    max_iterations: int = setting(100, "Longest search before it counts as not converged.", ge=1)


class Paths(Table):
    """The positions to write out."""

    interval_hours: float = setting(
        1.0,
        "Time between written positions; a whole number of steps.",
        unit="hours",
        ge=MINUTE_HOURS,
        le=168,
    )
    gap_hours: float = setting(
        12.0,
        "Positions between fixes further apart than this are marked as in a gap.",
        unit="hours",
        gt=0,
    )
    draws: int = setting(20, "Number of possible paths to draw for each tag.", ge=0, le=10_000)
    keep_at_sea: bool | None = setting(
        None,
        "Keep positions and drawn paths off the land of `[coast]`, as far as fixes and land leave "
        "a way by sea; where they leave none, a warning says when, and the path there is the one "
        "without a coast. Positions, ellipses and draws are changed, not the parameters. `false` "
        "for animals that fly or haul out.",
        shown="true where there is a `[coast]`",
    )


class Output(Table):
    """Where the results go, and in what form."""

    folder: Folder = setting(
        "results", "Folder for the results, made if absent.", validate_default=True
    )
    formats: Formats = setting(
        ("csv", "geopackage", "geojson", "netcdf"), "Files of positions to write.", shown="all four"
    )
    figures: bool = setting(True, "Draw maps and response curves.")
    figure_format: Literal["png", "svg", "pdf"] = setting("png", "File type of the figures.")
