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
from scipy.special import digamma, gammaln, lambertw

import trackfit.compiled  # noqa: F401  (float64 before any array is made)
from trackfit.inference.observations import LOG_2PI

STEPS = ((2.0, 0.4), (8.0, 0.3), (32.0, 0.22), (200.0, 0.09), (5000.0, 0.0175))
"""Step of the nodes in log w, up to a nu.

The rule's relative error is 2 |Gamma(nu/2 + 2 pi i/h)| / Gamma(nu/2), below 1e-9 with these steps.
"""

LEFT_OUT = 28.0
"""Nodes end where the integrand has fallen by exp(-28), less than 1e-12."""

NODES_AT_ONCE, MOST_NODES = 16, 512
"""Numbers of nodes are multiples of the first, so that few sizes are compiled.

The second is reached with a large nu and fixes thousands of standard errors off; their weights are
then those of nearer ones.
"""


def weight_nodes(
    log_nu: float, farthest: float = 0.0, widest: float = np.inf
) -> tuple[Float[np.ndarray, " nodes"], Float[np.ndarray, " nodes"]]:
    """Nodes in log w and the logarithms of their masses under Gamma(nu/2, rate nu/2).

    Above nu = 5000 a t is taken as normal: one node, w = 1.

    Parameters
    ----------
    farthest
        Largest squared distance of a fix, in units of its scale matrix: the nodes reach weights
        small enough for it.
    widest
        Largest variance of a cavity in the same unit; the mass of weights below its inverse falls
        with one power of w more, so that fewer nodes do.
    """
    nu = float(np.exp(log_nu))
    step = next((step for most, step in STEPS if nu <= most), None)
    if step is None:
        return np.zeros(1), np.zeros(1)
    half, fall = 0.5 * nu, min(2.0 * LEFT_OUT / nu, 500.0)
    # where e^t - 1 - t = fall, to the right and to the left of the mode t = 0
    right, left = (float(-1.0 - fall - lambertw(-np.exp(-1.0 - fall), k).real) for k in (-1, 0))
    least = np.log((nu + 2.0) / (nu + 2.0 + farthest))
    # below the weight 1/widest the integrand falls with one more power of w
    turn = min(-np.log(widest) - least, 0.0)
    left = max(left, (turn - LEFT_OUT - half) / (half + 1.0))
    last = int(np.ceil(right / step))
    count = last + 1 - int(np.floor((least + left) / step))
    count = min(NODES_AT_ONCE * -(-count // NODES_AT_ONCE), MOST_NODES)
    t = step * np.arange(last + 1 - count, last + 1)
    log_mass = np.log(step) + half * np.log(half) - gammaln(half) + half * (t - np.exp(t))
    return t, log_mass


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
    root, offset = _padded(root_km, n), _padded(offset_km, n)
    d, r, turn = _rotated(root, offset, _padded(cavity_covariance_km2, n))
    squared_scale = np.exp(2.0 * log_scale)
    farthest = float(np.sum(np.square(r), axis=0).max()) / squared_scale
    widest = float(np.max(d)) / squared_scale
    # moments of cavities that are not finite are not finite either, whatever the nodes
    finite = np.isfinite(farthest) and widest > 0.0
    nodes, log_mass = weight_nodes(log_nu, *((farthest, widest) if finite else ()))
    log_total, mean, covariance, by_log_scale, by_nodes = (
        np.asarray(part)[..., :n] for part in _mixture(d, r, root, turn, nodes, log_mass, log_scale)
    )
    half = 0.5 * np.exp(log_nu)
    by_log_nu = half * (np.log(half) + 1.0 - digamma(half) + by_nodes)
    if len(nodes) == 1:
        by_log_nu = np.zeros(n)
    return Tilted(
        log_z=log_total - LOG_2PI,
        mean_km=mean.T,
        covariance_km2=covariance[[0, 1, 1, 2]].T.reshape(n, 2, 2),
        by_log_scale=by_log_scale,
        by_log_nu=by_log_nu,
    )


def _padded(values: Float[np.ndarray, "fixes ..."], n: int) -> Float[np.ndarray, "padded ..."]:
    """Values of the first fix repeated at the end, up to the compiled size."""
    padded = np.empty((padded_fixes(n), *values.shape[1:]))
    padded[:n], padded[n:] = values, values[0]
    return padded


def padded_fixes(n: int) -> int:
    """Compiled size for a number of fixes: 128, 192, 256, 384, 512, 768, ..."""
    size = 128
    while size < n:
        size = size * 3 // 2 if size & (size - 1) == 0 else size * 4 // 3
    return size


@jax.jit
def _rotated(
    root_km: Float[Array, "fixes 2 2"],
    offset_km: Float[Array, "fixes 2"],
    cavity_covariance_km2: Float[Array, "fixes 2 2"],
) -> tuple[Float[Array, "2 fixes"], Float[Array, "2 fixes"], Float[Array, "2 fixes"]]:
    """The coordinates where C is the identity and V diagonal.

    Returns V's diagonal (d_1, d_2) and the offset there, and cosine and sine of the rotation.
    """
    k, m, n = root_km[:, 0, 0], root_km[:, 1, 0], root_km[:, 1, 1]
    xx, xy, yy = (cavity_covariance_km2[:, i, j] for i, j in ((0, 0), (0, 1), (1, 1)))
    a, b = xx / k**2, (xy - m / k * xx) / (k * n)
    c = (yy - 2.0 * m / k * xy + (m / k) ** 2 * xx) / n**2
    largest = 0.5 * (a + c) + jnp.hypot(0.5 * (a - c), b)
    angle = 0.5 * jnp.arctan2(2.0 * b, a - c)
    cos, sin = jnp.cos(angle), jnp.sin(angle)
    x = offset_km[:, 0] / k
    y = (offset_km[:, 1] - m * x) / n
    return (
        jnp.stack([largest, (a * c - b**2) / largest]),
        jnp.stack([cos * x + sin * y, cos * y - sin * x]),
        jnp.stack([cos, sin]),
    )


@jax.jit
def _mixture(
    d: Float[Array, "2 fixes"],
    r: Float[Array, "2 fixes"],
    root_km: Float[Array, "fixes 2 2"],
    turn: Float[Array, "2 fixes"],
    nodes: Float[Array, " nodes"],
    log_mass: Float[Array, " nodes"],
    log_scale: Float[Array, ""],
) -> tuple[Array, Array, Array, Array, Array]:
    """The quadrature, in the coordinates of `_rotated`; mean and covariance are turned back.

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
    mean = [mean_gain[0] * r[0], mean_gain[1] * r[1]]
    inside = (
        mean_of(apart[0] ** 2) + own[0],
        mean_of(apart[0] * apart[1]),
        mean_of(apart[1] ** 2) + own[1],
    )
    by_scale = noise * ((misfit[0] - 1.0) * precision[0] + (misfit[1] - 1.0) * precision[1])
    cos, sin = turn
    # columns of C's root times the rotation
    back = [
        [root_km[:, i, 0] * cos + root_km[:, i, 1] * sin for i in range(2)],
        [root_km[:, i, 1] * cos - root_km[:, i, 0] * sin for i in range(2)],
    ]
    covariance = [
        back[0][i] * back[0][j] * inside[0]
        + (back[0][i] * back[1][j] + back[1][i] * back[0][j]) * inside[1]
        + back[1][i] * back[1][j] * inside[2]
        for i, j in ((0, 0), (0, 1), (1, 1))
    ]
    return (
        largest + jnp.log(total) - jnp.log(root_km[:, 0, 0] * root_km[:, 1, 1]),
        jnp.stack([back[0][i] * mean[0] + back[1][i] * mean[1] for i in range(2)]),
        jnp.stack(covariance),
        mean_of(by_scale),
        mean_of(t - jnp.exp(t)),
    )
