"""Expectation propagation: heavy-tailed errors stood in for by Gaussian sites.

Each Student-t factor is replaced by a Gaussian site such that cavity times site and cavity times
factor have the same first two moments (Minka 2001, Uncertainty in Artificial Intelligence 17:362).
The posterior with sites is a Laplace problem. Its marginal at a fix's state is taken as
N(m + a, V - a a') with a the adjoint of `trackfit.inference.laplace`: with these moments

    log Z = log Z_Laplace(sites) + sum_k [log Z_tilted,k - log Z_site,k]

is stationary in the sites at the fixed point, so that its gradient in the parameters is exact with
the sites held.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from jaxtyping import Bool, Float

from trackfit.inference.observations import Observations, Sites
from trackfit.inference.tails import Tilted, tilted_moments

DAMPING = 0.8
LEAST_DAMPING = 0.1
"""Longest and shortest share of the way to the matched sites that one sweep goes."""

MEMORY = 6
"""Sweeps that the mixing remembers."""


@dataclass(frozen=True)
class Cavity:
    """What all other fixes say of a fix's position: the leave-one-out prediction.

    Means are of e = x - y, the position less the reported one. `sound` is False where a site took
    more than the marginal had; such a cavity is not to be used.
    """

    mean_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]
    sound: Bool[np.ndarray, " fixes"]


def cavities(
    sites: Sites,
    mean_km: Float[np.ndarray, "fixes 2"],
    covariance_km2: Float[np.ndarray, "fixes 2 2"],
) -> Cavity:
    """Marginals of e = x - y, with each fix's own site taken out."""
    precision = inverse_2x2(covariance_km2)
    pull = np.einsum("kab,kb->ka", precision, mean_km) - sites.pull
    left = precision - sites.precision
    sound = is_positive(left)
    # an unsound cavity is replaced by the marginal, so that all arithmetic stays finite
    left = np.where(sound[:, None, None], left, precision)
    covariance = inverse_2x2(left)
    mean = np.where(sound[:, None], np.einsum("kab,kb->ka", covariance, pull), mean_km)
    return Cavity(mean, covariance, sound)


def tilted(observations: Observations, cavity: Cavity, log_scale: float, log_nu: float) -> Tilted:
    """Moments of each cavity times its Student-t factor; means of e = x - y."""
    moments = tilted_moments(
        observations.root_km, -cavity.mean_km, cavity.covariance_km2, log_scale, log_nu
    )
    return moments.shifted(cavity.mean_km)


def matched_sites(sites: Sites, cavity: Cavity, moments: Tilted) -> Sites:
    """The sites that give cavity times site the tilted moments; unsound ones are kept."""
    wanted = inverse_2x2(moments.covariance_km2)
    left = inverse_2x2(cavity.covariance_km2)
    precision = wanted - left
    pull = np.einsum("kab,kb->ka", wanted, moments.mean_km) - np.einsum(
        "kab,kb->ka", left, cavity.mean_km
    )
    usable = cavity.sound & np.isfinite(precision).all(axis=(1, 2)) & np.isfinite(pull).all(axis=1)
    return Sites(
        np.where(usable[:, None, None], precision, sites.precision),
        np.where(usable[:, None], pull, sites.pull),
    )


def log_site_mass(sites: Sites, cavity: Cavity) -> Float[np.ndarray, " fixes"]:
    """Log of the integral of N(e; m, V) exp(-1/2 e'L e + c'e) over e, for every fix.

    With P = inv(V) + L and b = inv(V) m + c:  1/2 [b' inv(P) b - m' inv(V) m - log det(V P)].
    """
    left = inverse_2x2(cavity.covariance_km2)
    joint = left + sites.precision
    start = np.einsum("kab,kb->ka", left, cavity.mean_km)
    pull = start + sites.pull
    quadratic = np.einsum("ka,kab,kb->k", pull, inverse_2x2(joint), pull)
    quadratic -= np.sum(start * cavity.mean_km, axis=1)
    log_det = np.log(determinant(joint)) - np.log(determinant(left))
    return 0.5 * (quadratic - log_det)


@dataclass
class SiteMixer:
    """Anderson mixing of the sites' fixed-point iteration (Anderson 1965, J. ACM 12:547).

    Plain damping is slow, and may circle, where neighbouring fixes contradict each other. The last
    few residuals (matched less present sites) are combined so that their sum is least, in units of
    the marginals' sds, and the same combination of sites is moved on. A residual that grows throws
    the memory away and shortens the steps.
    """

    share: float = DAMPING
    before: list[tuple[np.ndarray, np.ndarray]] = field(default_factory=list)
    size: float = np.inf

    def proposed(
        self, sites: Sites, matched: Sites, covariance_km2: Float[np.ndarray, "fixes 2 2"]
    ) -> Sites:
        """The next sites to try."""
        root = np.linalg.cholesky(covariance_km2)
        here = _flat(sites)
        residual = _flat(matched) - here
        wanted = _scaled(residual, root)
        size = float(np.linalg.norm(wanted))
        if size > 2.0 * self.size:
            self.before.clear()
            self.share = max(0.5 * self.share, LEAST_DAMPING)
        else:
            self.share = min(1.1 * self.share, DAMPING)
        self.size = size
        change = self.share * residual
        if self.before:
            moves = np.stack([here - s for s, _ in self.before])
            turns = np.stack([residual - r for _, r in self.before])
            scaled = _scaled(turns, root).reshape(len(turns), -1)
            weights = np.linalg.lstsq(scaled.T, wanted.ravel(), rcond=1e-8)[0]
            change = change - np.tensordot(weights, moves + self.share * turns, axes=1)
        self.before = [*self.before[-(MEMORY - 1) :], (here, residual)]
        return _folded(here + change)


def _flat(sites: Sites) -> Float[np.ndarray, "fixes 5"]:
    """Sites as rows: xx, xy, yy of the precision, then the pull."""
    precision = sites.precision[:, [0, 0, 1], [0, 1, 1]]
    return np.concatenate([precision, sites.pull], axis=1)


def _folded(flat: Float[np.ndarray, "fixes 5"]) -> Sites:
    return Sites(flat[:, [0, 1, 1, 2]].reshape(-1, 2, 2), flat[:, 3:])


def _scaled(
    flat: Float[np.ndarray, "... fixes 5"], root_km: Float[np.ndarray, "fixes 2 2"]
) -> Float[np.ndarray, "... fixes 6"]:
    """Changes of sites in units of the marginals: R' dL R and R' dc, with R R' the covariance.

    R is lower triangular, and all is elementwise: for many fixes that is several times faster.
    """
    xx, xy, yy, px, py = np.moveaxis(flat, -1, 0)
    a, b, c = root_km[:, 0, 0], root_km[:, 1, 0], root_km[:, 1, 1]
    side = c * (a * xy + b * yy)
    turned = (a * (a * xx + 2.0 * b * xy) + b * b * yy, side, side, c * c * yy)
    return np.stack([*turned, a * px + b * py, c * py], axis=-1)


def starting_sites(
    observations: Observations, hours: Float[np.ndarray, " fixes"], log_scale: float, log_nu: float
) -> Sites:
    """Sites of normal errors, weakened where a fix is far from the median of its neighbours.

    The weight is the t's own, (nu + 2) / (nu + r^2), with r in standard errors of the fix and of
    the scatter of its neighbours.
    """
    away, scatter = neighbour_medians(observations.at_km, hours)
    precision = observations.precision * np.exp(-2.0 * log_scale)
    own = 0.5 * np.trace(inverse_2x2(precision), axis1=1, axis2=2)
    squared = np.sum(away**2, axis=1) / (own + scatter**2)
    nu = np.exp(log_nu)
    weight = (nu + 2.0) / (nu + squared)
    return Sites(precision * weight[:, None, None], np.zeros_like(observations.at_km))


def neighbour_medians(
    at_km: Float[np.ndarray, "fixes 2"], hours: Float[np.ndarray, " fixes"], reach: int = 2
) -> tuple[Float[np.ndarray, "fixes 2"], Float[np.ndarray, " fixes"]]:
    """Each fix less the median of the nearest five in time order, and the scatter around it.

    The scatter is the median distance of those five from their median.
    """
    order = np.argsort(hours, kind="stable")
    n = len(at_km)
    window = np.arange(-reach, reach + 1)
    first = np.clip(np.arange(n) - reach, 0, max(n - 2 * reach - 1, 0))
    index = np.clip(first[:, None] + window + reach, 0, n - 1)
    near = at_km[order][index]
    middle = np.median(near, axis=1)
    scatter = np.median(np.linalg.norm(near - middle[:, None], axis=2), axis=1)
    away, spread = np.empty_like(at_km), np.empty(n)
    away[order] = at_km[order] - middle
    spread[order] = scatter
    return away, spread


def determinant(matrix: Float[np.ndarray, "n 2 2"]) -> Float[np.ndarray, " n"]:
    """Determinants of 2 x 2 matrices."""
    return matrix[:, 0, 0] * matrix[:, 1, 1] - matrix[:, 0, 1] * matrix[:, 1, 0]


def is_positive(matrix: Float[np.ndarray, "n 2 2"]) -> np.ndarray:
    """Whether symmetric 2 x 2 matrices are positive definite, with a margin for rounding."""
    scale = matrix[:, 0, 0] * matrix[:, 1, 1]
    return (matrix[:, 0, 0] > 0.0) & (matrix[:, 1, 1] > 0.0) & (determinant(matrix) > 1e-12 * scale)


def inverse_2x2(matrix: Float[np.ndarray, "n 2 2"]) -> Float[np.ndarray, "n 2 2"]:
    """Inverses of 2 x 2 matrices."""
    swapped = np.empty_like(matrix)
    swapped[:, 0, 0], swapped[:, 1, 1] = matrix[:, 1, 1], matrix[:, 0, 0]
    swapped[:, 0, 1], swapped[:, 1, 0] = -matrix[:, 0, 1], -matrix[:, 1, 0]
    return swapped / determinant(matrix)[:, None, None]
