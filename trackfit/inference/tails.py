"""Heavy tails: moments of a Gaussian cavity times a bivariate Student-t error, by quadrature.

A bivariate t with scale matrix C and nu degrees of freedom is a scale mixture of normals,

    y | x, w ~ N(x, C / w),      w ~ Gamma(nu/2, rate nu/2)

(Andrews & Mallows 1974, J. R. Stat. Soc. B 36:99). For a cavity x ~ N(m, V) every w gives a
conjugate posterior; what is left is an integral over t = log w, whose integrand is smooth and falls
off at both ends faster than any exponential we need, so the trapezoidal rule converges
geometrically (Trefethen & Weideman 2014, SIAM Rev. 56:385). Nodes reach weights so small that a
fix thousands of standard errors off is no special case.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float
from scipy.special import digamma, gammaln

import trackfit.compiled  # noqa: F401  (float64 before any array is made)
from trackfit.inference.observations import LOG_2PI

GRIDS = (
    (8.0, 0.4, -30.0, 5.4),
    (32.0, 0.22, -24.0, 4.1),
    (200.0, 0.09, -20.0, 2.4),
    (5000.0, 0.0175, -8.0, 0.6),
)
"""Nodes in log w: up to this nu, their step, the first and the last.

The rule's relative error is 2 |Gamma(nu/2 + 2 pi i/h)| / Gamma(nu/2), below 1e-9 with these steps;
the ends leave out less than 1e-9 of the mass, and reach the weights (nu + 2)/r^2 of fixes a million
standard errors off (ten thousand where nu is large).
"""


def weight_nodes(
    log_nu: float,
) -> tuple[Float[np.ndarray, " nodes"], Float[np.ndarray, " nodes"]]:
    """Nodes in log w and the logarithms of their masses under Gamma(nu/2, rate nu/2).

    Above nu = 5000 a t is taken as normal: one node, w = 1.
    """
    nu = float(np.exp(log_nu))
    for most, step, first, last in GRIDS:
        if nu <= most:
            t = np.arange(first, last, step)
            half = 0.5 * nu
            log_mass = np.log(step) + half * np.log(half) - gammaln(half) + half * (t - np.exp(t))
            return t, log_mass
    return np.zeros(1), np.zeros(1)


@dataclass(frozen=True)
class Tilted:
    """Moments of cavity times error density, for every fix.

    `by_log_scale` and `by_log_nu` are the derivatives of `log_z`, the cavity held.
    """

    log_z: Float[np.ndarray, " fixes"]
    mean_km: Float[np.ndarray, "fixes 2"]
    covariance_km2: Float[np.ndarray, "fixes 2 2"]
    by_log_scale: Float[np.ndarray, " fixes"]
    by_log_nu: Float[np.ndarray, " fixes"]

    def shifted(self, by_km: Float[np.ndarray, "fixes 2"]) -> Tilted:
        """The same moments about another origin: `by_km` is added to the means."""
        return replace(self, mean_km=self.mean_km + by_km)


def tilted_moments(
    root_km: Float[np.ndarray, "fixes 2 2"],
    offset_km: Float[np.ndarray, "fixes 2"],
    cavity_covariance_km2: Float[np.ndarray, "fixes 2 2"],
    log_scale: float,
    log_nu: float,
) -> Tilted:
    """Mass, mean and covariance of N(x; m, V) t_nu(y; x, s^2 C), for every fix.

    Parameters
    ----------
    root_km
        Lower Cholesky factors of the scale matrices C.
    offset_km
        Reported position less the cavity's mean, y - m; the mean returned is of x - m.
    cavity_covariance_km2
        V, positive definite.
    """
    n = len(offset_km)
    inverse = np.linalg.inv(root_km)
    d, turn = np.linalg.eigh(inverse @ cavity_covariance_km2 @ np.swapaxes(inverse, 1, 2))
    back = root_km @ turn
    r = np.einsum("kba,kbc,kc->ka", turn, inverse, offset_km)
    extra = padded_fixes(n) - n
    nodes, log_mass = weight_nodes(log_nu)
    log_total, mean, covariance, by_log_scale, by_nodes = (
        np.asarray(part)[..., :n]
        for part in _mixture(
            jnp.asarray(np.pad(d, ((0, extra), (0, 0)), constant_values=1.0).T),
            jnp.asarray(np.pad(r, ((0, extra), (0, 0))).T),
            jnp.asarray(nodes),
            jnp.asarray(log_mass),
            log_scale,
        )
    )
    half = 0.5 * np.exp(log_nu)
    by_log_nu = half * (np.log(half) + 1.0 - digamma(half) + by_nodes)
    if len(nodes) == 1:
        by_log_nu = np.zeros(n)
    xx, xy, yy = covariance
    whole = np.stack([np.stack([xx, xy]), np.stack([xy, yy])]).transpose(2, 0, 1)
    log_det = np.log(np.einsum("kaa->ka", root_km)).sum(axis=1)
    return Tilted(
        log_z=log_total - LOG_2PI - log_det,
        mean_km=np.einsum("kab,bk->ka", back, mean),
        covariance_km2=back @ whole @ np.swapaxes(back, 1, 2),
        by_log_scale=by_log_scale,
        by_log_nu=by_log_nu,
    )


def padded_fixes(n: int) -> int:
    """Compiled size for a number of fixes: 128, 256, 512, ..."""
    return 128 * 2 ** max(0, int(np.ceil(np.log2(max(n, 1) / 128) - 1e-9)))


@jax.jit
def _mixture(
    d: Float[Array, "2 fixes"],
    r: Float[Array, "2 fixes"],
    nodes: Float[Array, " nodes"],
    log_mass: Float[Array, " nodes"],
    log_scale: Float[Array, ""],
) -> tuple[Array, Array, Array, Array, Array]:
    """The quadrature, in the coordinates where C is the identity and V is diagonal (d_1, d_2).

    The covariance of y at weight w is d_a + s^2/w on each axis, so all is elementwise. The last
    value returned is the mean of log w - w.
    """
    t = nodes[:, None]
    noise = jnp.exp(2.0 * log_scale - t)
    precision = [1.0 / (d[a] + noise) for a in range(2)]
    misfit = [r[a] ** 2 * precision[a] for a in range(2)]
    log_terms = log_mass[:, None] - 0.5 * (misfit[0] + misfit[1])
    log_terms = log_terms + 0.5 * jnp.log(precision[0] * precision[1])
    largest = jnp.max(log_terms, axis=0)
    share = jax.lax.optimization_barrier(jnp.exp(log_terms - largest))
    total = jnp.sum(share, axis=0)

    def mean_of(values: Array) -> Array:
        return jnp.sum(share * values, axis=0) / total

    gain = [d[a] * precision[a] for a in range(2)]
    mean_gain = [mean_of(gain[a]) for a in range(2)]
    apart = [(gain[a] - mean_gain[a]) * r[a] for a in range(2)]
    own = [mean_of(gain[a] * noise) for a in range(2)]
    covariance = (
        mean_of(apart[0] ** 2) + own[0],
        mean_of(apart[0] * apart[1]),
        mean_of(apart[1] ** 2) + own[1],
    )
    by_scale = noise * ((misfit[0] - 1.0) * precision[0] + (misfit[1] - 1.0) * precision[1])
    return (
        largest + jnp.log(total),
        jnp.stack([mean_gain[0] * r[0], mean_gain[1] * r[1]]),
        jnp.stack(covariance),
        mean_of(by_scale),
        mean_of(t - jnp.exp(t)),
    )
