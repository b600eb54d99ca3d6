"""Reported positions against their predictions: p-values, log scores and standard residuals.

A prediction N(m, V) of the true position, made without the fix itself, predicts the reported one
as N(m, V + s^2 C), or with heavy tails as the mixture of N(m, V + s^2 C / w) over w (see
`trackfit.inference.tails`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Self

import numpy as np
from jaxtyping import Float
from scipy.special import logsumexp

from trackfit.inference.observations import LOG_2PI
from trackfit.inference.sites import determinant, inverse_2x2
from trackfit.inference.tails import weight_nodes


@dataclass(frozen=True)
class Predicted:
    """One entry a fix, in the order of the observations.

    Attributes
    ----------
    offset_km
        Reported position less the predicted one.
    covariance_km2
        Covariance of the prediction of the reported position at normal errors: V + s^2 C.
    p_value
        Probability of a reported position at least as far off. Exact for normal errors, and for
        heavy tails where V is proportional to C; else the ellipses of different w are averaged.
    log_density
        Log predictive density of the reported position, 1/km^2: the log score.
    residual
        Per axis, standard normal under the model: the offset in units of its prediction, both axes
        made independent (Cholesky); with heavy tails through the p-value's radius.
    """

    offset_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]
    p_value: Float[np.ndarray, " fixes"]
    log_density: Float[np.ndarray, " fixes"]
    residual: Float[np.ndarray, "fixes 2"]

    @classmethod
    def of(
        cls,
        offset_km: Float[np.ndarray, "fixes 2"],
        covariance_km2: Float[np.ndarray, "fixes 2 2"],
        error_km2: Float[np.ndarray, "fixes 2 2"],
        log_nu: float | None,
    ) -> Self:
        """Compare reported positions with predictions of the true ones.

        Parameters
        ----------
        offset_km
            Reported position less the predicted one.
        covariance_km2
            V, the covariance of the prediction of the true position.
        error_km2
            s^2 C, covariance of the fix's own error; its scale matrix where tails are heavy.
        log_nu
            Logarithm of the tails' degrees of freedom; None for normal errors.
        """
        weights, log_mass = error_mixture(log_nu)
        misfit = np.empty((len(offset_km), len(weights)))
        log_density = np.empty_like(misfit)
        for j, weight in enumerate(weights):
            spread = covariance_km2 + error_km2 / weight
            misfit[:, j] = np.einsum("ka,kab,kb->k", offset_km, inverse_2x2(spread), offset_km)
            log_density[:, j] = -LOG_2PI - 0.5 * np.log(determinant(spread)) - 0.5 * misfit[:, j]
        log_p = logsumexp(log_mass - 0.5 * misfit, axis=1)
        spread = covariance_km2 + error_km2
        return cls(
            offset_km=offset_km,
            covariance_km2=spread,
            p_value=np.clip(np.exp(log_p), 0.0, 1.0),
            log_density=logsumexp(log_mass + log_density, axis=1),
            residual=_residuals(offset_km, spread, log_p),
        )


def error_mixture(
    log_nu: float | None,
) -> tuple[Float[np.ndarray, " nodes"], Float[np.ndarray, " nodes"]]:
    """Weights w at which errors are N(0, s^2 C / w), and the logarithms of their masses.

    Quadrature nodes in log w of w ~ Gamma(nu/2, nu/2); one weight of one for normal errors. Large
    nu make log w narrow, and the nodes are drawn together as its standard deviation falls.
    """
    if log_nu is None:
        return np.ones(1), np.zeros(1)
    nodes, log_mass = weight_nodes(log_nu)
    return np.exp(nodes), log_mass


def _residuals(
    offset_km: Float[np.ndarray, "n 2"],
    covariance_km2: Float[np.ndarray, "n 2 2"],
    log_p: Float[np.ndarray, " n"],
) -> Float[np.ndarray, "n 2"]:
    """Independent standard normal residuals: direction from the offset, radius from the p-value.

    A radius r of two standard normals is exceeded with probability exp(-r^2/2).
    """
    root = np.linalg.cholesky(covariance_km2)
    turned = np.linalg.solve(root, offset_km[..., None])[..., 0]
    radius = np.sqrt(-2.0 * np.minimum(log_p, 0.0))
    length = np.linalg.norm(turned, axis=1)
    stretch = np.where(length > 0.0, radius / np.where(length > 0.0, length, 1.0), 0.0)
    return turned * stretch[:, None]
