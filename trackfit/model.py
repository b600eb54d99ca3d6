"""From a study's settings to the model that the engine fits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import jax.numpy as jnp
import numpy as np
from jaxtyping import Float

from trackfit.faults import LayerError
from trackfit.frame import Plane
from trackfit.inference.grid import PacePrior
from trackfit.inference.parameters import Parameter, ParameterSet
from trackfit.inference.task import Model, TrackData
from trackfit.layers.layer import Layer
from trackfit.layers.splines import Spline, fit_spline
from trackfit.motion import (
    Diffusive,
    DistanceTerm,
    LayerTerm,
    Motion,
    Persistent,
    SmoothTerm,
    VelocityField,
    fit_curve,
)
from trackfit.motion.terms import TermName
from trackfit.motion.velocity import Term
from trackfit.study import Study
from trackfit.study_schema import Preference

DRIFT_PRIOR = (1.0, 1.0)
"""Mean and sd of the current drift's weak prior: carried wholly, give or take the whole."""

SCALE_PRIOR_LOG_SD = 1.0
"""Sd of the logarithm of the error scale around zero: 95 % between a seventh and sevenfold."""

NU_PRIOR = (5.0, 1.0)
"""Median and log sd of the weak prior of a tail's degrees of freedom."""

MOTIONS: dict[str, Motion] = {"diffusive": Diffusive(), "persistent": Persistent()}


@dataclass(frozen=True)
class Standard:
    """How a layer is standardised: z = (value - centre)/scale, both in the layer's unit."""

    centre: float
    scale: float


@dataclass(frozen=True)
class StudyModel:
    """A study's model, the same for all its tags but for where the search starts."""

    base: Model
    names: tuple[TermName, ...]
    standards: Mapping[str, Standard]

    def for_track(self, data: TrackData) -> Model:
        """The model with the motion's parameters started from a track's own pace."""
        motion = self.base.motion
        starts = motion.starting_values(typical_diffusion(data), typical_spacing_hours(data))
        parameters = tuple(
            replace(p, start=float(np.log(starts[i]))) if i < len(starts) else p
            for i, p in enumerate(self.base.parameters.all)
        )
        return replace(self.base, parameters=ParameterSet(parameters))


def typical_diffusion(data: TrackData) -> float:
    """Rough diffusion of a track, km per sqrt(hour): the median over neighbouring fixes.

    For each pair, (squared distance - what the errors explain) / (2 x hours between), a moment
    estimate of sigma^2 in two dimensions; never below a hundredth of the raw one.
    """
    hours = np.diff(data.hours)
    apart = hours > 1.0 / 60.0
    if not apart.any():
        return 1.0
    moved = np.sum(np.diff(data.at_km, axis=0) ** 2, axis=1)
    errors = np.trace(data.covariance_km2, axis1=1, axis2=2)
    raw = (moved / (2.0 * hours.clip(1e-9)))[apart]
    net = ((moved - errors[1:] - errors[:-1]) / (2.0 * hours.clip(1e-9)))[apart]
    variance = max(float(np.median(net)), 0.01 * float(np.mean(raw)), 1e-6)
    return float(np.sqrt(variance))


def typical_spacing_hours(data: TrackData) -> float:
    """Median time between neighbouring fixes, an hour at least."""
    return max(1.0, float(np.median(np.diff(data.hours)))) if len(data.hours) > 1 else 1.0


def build_model(study: Study, layers: Mapping[str, Layer], plane: Plane) -> StudyModel:
    """Make the velocity field and the parameters that a study asks for.

    Raises
    ------
    LayerError
        A layer of the preference is the same everywhere, so that nothing can be learnt from it.
    """
    splines = {name: fit_spline(layer) for name, layer in layers.items()}
    standards = {
        name: _standard(layer, study.layers[name].centre, study.layers[name].scale)
        for name, layer in layers.items()
        if not study.layers[name].is_current
    }
    terms: list[Term] = []
    behind: list[Layer | None] = []
    names: list[TermName] = []
    parameters: list[Parameter] = []
    for preference in study.preference:
        layer = layers[preference.layer] if preference.layer else None
        if layer is None:
            terms.append(_distance_term(preference, plane))
            names.append(TermName(preference.term, "distance", "km"))
        else:
            terms.append(_layer_term(preference, splines[layer.name], standards[layer.name], layer))
            names.append(TermName(preference.term, layer.name, layer.unit))
        behind.append(layer)
        own = _term_parameters(study, preference, layer, standards)
        parameters += [replace(p, shared=preference.shared) for p in own]
    current = layers[study.current.layer] if study.current else None
    motion = MOTIONS[study.motion.kind]
    return StudyModel(
        base=Model(
            motion=motion,
            field=VelocityField(tuple(terms), None if current is None else splines[current.name]),
            layers=(tuple(behind), current),
            parameters=ParameterSet(
                (
                    *_motion_parameters(study, motion),
                    *parameters,
                    *_drift_parameter(study),
                    _scale_parameter(study),
                    *_tail_parameter(study),
                )
            ),
            heavy=study.errors.tails == "heavy",
            pace=_pace_prior(study),
        ),
        names=tuple(names),
        standards=standards,
    )


def _pace_prior(study: Study) -> PacePrior | None:
    motion = study.motion
    if motion.pace_log_sd == 0.0:
        return None
    return PacePrior(motion.pace_log_sd, motion.pace_hours, 2.0 * motion.pace_hours)


def _layer_term(
    preference: Preference, spline: Spline, standard: Standard, layer: Layer
) -> LayerTerm | SmoothTerm:
    place = jnp.asarray(standard.centre), jnp.asarray(standard.scale)
    if preference.shape == "smooth":
        return SmoothTerm(spline, *place, fit_curve(_standardised(layer, standard)))
    return LayerTerm(spline, *place, humped=preference.shape == "humped")


def _standardised(layer: Layer, standard: Standard) -> Float[np.ndarray, " n"]:
    """The values a layer takes at its own nodes, as z."""
    return (layer.values[:, _seen(layer), 0].ravel() - standard.centre) / standard.scale


def _distance_term(preference: Preference, plane: Plane) -> DistanceTerm:
    point = preference.point
    assert point is not None
    return DistanceTerm(jnp.asarray(plane.to_plane([point.lon], [point.lat])[0]))


def _seen(layer: Layer) -> np.ndarray:
    """Nodes with values of their own: inside the source, not filled in from neighbours."""
    seen = layer.covered & ~layer.filled
    return seen if seen.any() else layer.covered


def _standard(layer: Layer, centre: float | None, scale: float | None) -> Standard:
    values = layer.values[:, _seen(layer), 0]
    spread = float(values.std())
    if spread == 0.0:
        raise LayerError(
            f"layer '{layer.name}' ({layer.source}): it has one value everywhere in the study "
            "area, so nothing can be learnt from it; leave it out or use a finer file"
        )
    return Standard(
        float(values.mean()) if centre is None else centre, spread if scale is None else scale
    )


def _motion_parameters(study: Study, motion: Motion) -> list[Parameter]:
    weak = study.fit.priors == "weak"
    speed_log = float(np.log(study.fit.prior_speed_kmh))
    parameters = []
    for p in motion.parameters:
        centre = float(np.log(p.prior_median)) + p.speed_power * speed_log
        parameters.append(
            Parameter(
                name=p.name,
                unit=p.unit,
                positive=True,
                start=centre,
                prior_mean=centre,
                prior_sd=p.prior_log_sd if weak else np.inf,
                reach=1.0,
            )
        )
    return parameters


def _term_parameters(
    study: Study, preference: Preference, layer: Layer | None, standards: Mapping[str, Standard]
) -> list[Parameter]:
    name = f"preference.{preference.term}"
    if layer is None:
        return [_amplitude(study, f"{name}.distance", "km/h", 1.0)]
    standard = standards[layer.name]
    z = (layer.values[..., 0] - standard.centre) / standard.scale
    if preference.shape == "smooth":
        linear = _amplitude(study, f"{name}.linear", "km^2/h", _rms_slope(z, layer))
        return [linear, *_bends(study, name, _standardised(layer, standard), linear.reach)]
    powers = {"linear": z, "squared": z**2} if preference.shape == "humped" else {"linear": z}
    return [
        _amplitude(study, f"{name}.{power}", "km^2/h", _rms_slope(values, layer))
        for power, values in powers.items()
    ]


def _bends(study: Study, name: str, z: Float[np.ndarray, " n"], linear: float) -> list[Parameter]:
    """The bends of a smooth curve; they start with slopes a third of a linear preference's.

    `linear` is the slope of h in z that makes the study's typical speed. A search is surer where
    the curve has yet to unbend than where it has to be straightened.
    """
    slopes = np.asarray(fit_curve(z).values(jnp.asarray(z))[1])
    spread = linear / (3.0 * float(np.sqrt(np.sum(np.mean(slopes**2, axis=1)))))
    return [
        Parameter(
            name=f"{name}.bend_{i + 1}",
            unit="km^2/h",
            positive=False,
            start=0.0,
            prior_mean=0.0,
            prior_sd=spread,
            reach=spread,
            reported=False,
            smooth=name,
        )
        for i in range(len(slopes))
    ]


def _rms_slope(values: Float[np.ndarray, "times ny nx"], layer: Layer) -> float:
    """Root mean square slope of a potential over the study area, per km."""
    along_y, along_x = np.gradient(values, layer.spacing_km, axis=(1, 2))
    squared = (along_x**2 + along_y**2)[:, _seen(layer)]
    return float(np.sqrt(squared.mean()))


def _amplitude(study: Study, name: str, unit: str, rms_slope: float) -> Parameter:
    """An amplitude whose prior sd makes the study's typical speed on typical slopes."""
    scale = study.fit.prior_speed_kmh / rms_slope
    return Parameter(
        name=name,
        unit=unit,
        positive=False,
        start=0.0,
        prior_mean=0.0,
        prior_sd=scale if study.fit.priors == "weak" else np.inf,
        reach=scale,
    )


def _drift_parameter(study: Study) -> list[Parameter]:
    if study.current is None:
        return []
    drift = study.current.drift
    estimated = isinstance(drift, str)
    mean, sd = DRIFT_PRIOR
    return [
        Parameter(
            name="current.drift",
            unit="1",
            positive=False,
            start=mean if isinstance(drift, str) else float(drift),
            prior_mean=mean,
            prior_sd=sd if estimated and study.fit.priors == "weak" else np.inf,
            reach=0.5,
            fixed=not estimated,
            shared=study.current.shared,
        )
    ]


def _scale_parameter(study: Study) -> Parameter:
    scale = study.errors.scale
    estimated = isinstance(scale, str)
    return Parameter(
        name="error_scale",
        unit="1",
        positive=True,
        start=0.0 if isinstance(scale, str) else float(np.log(scale)),
        prior_mean=0.0,
        prior_sd=SCALE_PRIOR_LOG_SD if estimated and study.fit.priors == "weak" else np.inf,
        reach=1.0,
        fixed=not estimated,
    )


def _tail_parameter(study: Study) -> list[Parameter]:
    if study.errors.tails != "heavy":
        return []
    nu = study.errors.tail_nu
    median, log_sd = NU_PRIOR
    estimated = isinstance(nu, str)
    return [
        Parameter(
            name="tail_nu",
            unit="1",
            positive=True,
            start=float(np.log(median if isinstance(nu, str) else nu)),
            prior_mean=float(np.log(median)),
            prior_sd=log_sd if estimated and study.fit.priors == "weak" else np.inf,
            reach=1.0,
            fixed=not estimated,
        )
    ]
