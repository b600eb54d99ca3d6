"""What is fitted to what: a track, a model, and the settings of the search."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float

from trackfit.inference.grid import PacePrior
from trackfit.inference.parameters import ParameterSet
from trackfit.inference.process import Start
from trackfit.layers.layer import Layer
from trackfit.motion import Motion, VelocityField


@dataclass(frozen=True)
class TrackData:
    """The used fixes of one tag in the plane, in time order."""

    tag: str
    hours: Float[np.ndarray, " fixes"]
    at_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]


@dataclass(frozen=True)
class Model:
    """What is fitted to a track: motion, velocity field with its layers, parameters, errors.

    `heavy` errors are bivariate Student-t, normal ones else. `pace` lets the motion's pace vary in
    time; its spells are further parameters, added when a track's length is known. `start` is the
    prior of the first
    position, vague around the first fix if None.
    """

    motion: Motion
    field: VelocityField
    layers: tuple[tuple[Layer | None, ...], Layer | None]
    parameters: ParameterSet
    heavy: bool = False
    pace: PacePrior | None = None
    start: Start | None = None


@dataclass(frozen=True)
class FitSettings:
    """How a track is fitted.

    `points` is the number of weighted points that stand for the parameters' posterior; zero takes
    the normal approximation at the mode.
    """

    step_hours: float = 0.5
    coarse_factor: int = 4
    max_iterations: int = 100
    step_check: bool = False
    points: int = 0
