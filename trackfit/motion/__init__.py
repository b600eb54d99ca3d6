"""How animals move: the velocity field they follow and the steps in which they follow it."""

from trackfit.motion.diffusive import Diffusive
from trackfit.motion.motion import Motion, MotionParameter, Transition
from trackfit.motion.persistent import Persistent
from trackfit.motion.smooth import SmoothTerm, fit_curve
from trackfit.motion.velocity import DistanceTerm, FieldTimes, LayerTerm, VelocityField

__all__ = [
    "Diffusive",
    "DistanceTerm",
    "FieldTimes",
    "LayerTerm",
    "Motion",
    "MotionParameter",
    "Persistent",
    "SmoothTerm",
    "Transition",
    "VelocityField",
    "fit_curve",
]
