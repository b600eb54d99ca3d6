"""The response to each preference term: h along the layer's values, with its band."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from jaxtyping import Float

from trackfit.inference.estimates import NORMAL_95
from trackfit.inference.fit import Fit, FitStatus
from trackfit.layers.splines import spline_jet
from trackfit.motion import DistanceTerm, SmoothTerm
from trackfit.motion.terms import TermName

POINTS = 101

ALL_TAGS = "all tags"
"""Stands for the tag of a response that all tags share."""


@dataclass(frozen=True)
class Response:
    """How much one tag, or all, likes each value of a layer, or each distance from a point.

    Attributes
    ----------
    at
        Values of the layer (unit `unit`), over the range that the fitted path met.
    h
        Preference there, km^2/h; zero at the layer's centre, or at the point.
    lower95, upper95
        Pointwise 95 % band from the parameters' covariance.
    on_path
        The layer's values along the fitted path.
    fit_status
        How the fit ended.
    """

    tag: str
    term: str
    layer: str
    unit: str
    at: Float[np.ndarray, " m"]
    h: Float[np.ndarray, " m"]
    lower95: Float[np.ndarray, " m"]
    upper95: Float[np.ndarray, " m"]
    on_path: Float[np.ndarray, " n"]
    fit_status: FitStatus


def responses_of(fit: Fit, names: tuple[TermName, ...]) -> list[Response]:
    """The response to every preference term a fitted tag has for itself; none if not fitted."""
    if fit.states is None:
        return []
    return [
        _response(fit, slot, name, places, _along_path(fit, slot))
        for slot, (name, places) in enumerate(zip(names, _places(fit), strict=True))
        if not _is_shared(fit, places)
    ]


def shared_responses(fits: Sequence[Fit], names: tuple[TermName, ...]) -> list[Response]:
    """The response to every preference term that tags share, over all values their paths met.

    Tags whose fits failed are left out, unless all did.
    """
    fitted = [fit for fit in fits if fit.states is not None]
    fitted = [fit for fit in fitted if fit.status.ok] or fitted
    if not fitted:
        return []
    return [
        replace(
            _response(
                fitted[0],
                slot,
                name,
                places,
                np.concatenate([_along_path(fit, slot) for fit in fitted]),
            ),
            tag=ALL_TAGS,
        )
        for slot, (name, places) in enumerate(zip(names, _places(fitted[0]), strict=True))
        if _is_shared(fitted[0], places)
    ]


def _places(fit: Fit) -> list[np.ndarray]:
    """Where each term's amplitudes stand in the full vector of parameters."""
    first, found = len(fit.model.motion.parameters), []
    for term in fit.model.field.terms:
        found.append(np.arange(first, first + term.n_amplitudes))
        first += term.n_amplitudes
    return found


def _is_shared(fit: Fit, places: np.ndarray) -> bool:
    return bool(np.isin(places, fit.model.parameters.shared_at).all())


def _response(
    fit: Fit, slot: int, name: TermName, places: np.ndarray, on_path: Float[np.ndarray, " n"]
) -> Response:
    assert fit.states is not None
    at = np.linspace(on_path.min(), on_path.max(), POINTS)
    basis = _basis(fit, slot, at)
    theta = fit.states.approximation.theta[places]
    h = basis @ theta
    sd = np.sqrt(np.einsum("mi,ij,mj->m", basis, _covariance(fit, places), basis))
    return Response(
        tag=fit.tag,
        term=name.term,
        layer=name.layer,
        unit=name.unit,
        at=at,
        h=h,
        lower95=h - NORMAL_95 * sd,
        upper95=h + NORMAL_95 * sd,
        on_path=on_path,
        fit_status=fit.status,
    )


def _along_path(fit: Fit, slot: int) -> Float[np.ndarray, " n"]:
    assert fit.states is not None
    term = fit.model.field.terms[slot]
    problem = fit.states.problem
    x, y = fit.states.positions_km().T
    if isinstance(term, DistanceTerm):
        point = np.asarray(term.point_km)
        return np.hypot(x - point[0], y - point[1])
    when = problem.track.times.terms[slot]
    when = type(when)(*(part[: problem.n_states] for part in when))
    return np.asarray(spline_jet(term.spline, when, x, y, 0))[0, 0]


def _basis(fit: Fit, slot: int, at: Float[np.ndarray, " m"]) -> Float[np.ndarray, "m amplitudes"]:
    term = fit.model.field.terms[slot]
    if isinstance(term, DistanceTerm):
        return at[:, None]
    z = (at - float(term.centre)) / float(term.scale)
    if isinstance(term, SmoothTerm):
        bends = np.asarray(term.curve.values(z)[0] - term.curve.values(np.zeros(1))[0])
        return np.column_stack([z, bends.T])
    return np.stack([z, z**2], axis=1) if term.humped else z[:, None]


def _covariance(fit: Fit, places: np.ndarray) -> Float[np.ndarray, "k k"]:
    assert fit.states is not None
    free = list(fit.model.parameters.free_at)
    at = [free.index(place) for place in places]
    return fit.states.theta_covariance[np.ix_(at, at)]
