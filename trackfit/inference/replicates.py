"""What leave-one-out residuals look like where the model is true: draws from it.

With the process precision A of the Gaussian approximation, sites of precision L at the fixes (C
picks their positions) and H = A + C'LC, the reported positions y of the model have the precision
matrix P = L - L C inv(H) C' L. The leave-one-out offset of fix k is inv(P_kk) w_k with w = P y ~
N(0, P), and inv(P_kk) is its covariance. A draw of w needs nothing but what is factored already:

    w = a - L C inv(H) (C'a - b),      a ~ N(0, L),  b ~ N(0, A).

Parameters are held: fitted to the track at hand, they make its residuals a little tamer than these.
"""

from __future__ import annotations

import numpy as np
from jaxtyping import Float

from trackfit.inference.banded import Cholesky, NotPositiveDefinite, factor
from trackfit.inference.marginal import Approximation
from trackfit.inference.observations import Sites

DRAWS_AT_ONCE = 100
LIFT = 1e-12


def leave_one_out_replicates(
    found: Approximation, count: int, rng: np.random.Generator
) -> Float[np.ndarray, "count fixes 2"]:
    """Draw standardised leave-one-out residuals of tracks that the fitted model makes.

    The track is taken as linear and normal around the fitted path. Heavy-tailed errors stand there
    as their sites: weak where a fix is far off.
    """
    problem, sites = found.problem, found.mode.sites
    state = problem.observations.state
    process, whole = _factors(found)
    precision = _positive(sites.precision)
    inside = found.spread.covariance_at(state)
    own = _positive(precision - precision @ inside @ precision)
    turn = np.linalg.cholesky(np.linalg.inv(own))
    root = np.linalg.cholesky(precision)
    draws = np.empty((count, len(state), 2))
    for first in range(0, count, DRAWS_AT_ONCE):
        size = min(DRAWS_AT_ONCE, count - first)
        of_fixes = np.einsum("kab,kbd->kad", root, rng.standard_normal((len(state), 2, size)))
        noise = rng.standard_normal((problem.n_states * problem.dim, size))
        right = -process.multiply_factor(noise).reshape(problem.n_states, problem.dim, size)
        np.add.at(right[:, :2], state, of_fixes)
        moved = whole.solve(right.reshape(-1, size)).reshape(right.shape)[state, :2]
        drawn = of_fixes - np.einsum("kab,kbd->kad", precision, moved)
        draws[first : first + size] = np.einsum("kba,kbd->dka", turn, drawn)
    return draws


def _factors(found: Approximation) -> tuple[Cholesky, Cholesky]:
    """Factors of A and of H: exact where A has one, those of Gauss and Newton else."""
    sites, point = found.mode.sites, found.mode.point
    none = Sites.none(len(sites.pull))
    try:
        return factor(point.band(found.problem, none)), found.mode.cholesky
    except NotPositiveDefinite:
        process = _factor_lifted(point.band(found.problem, none, exact=False))
        return process, factor(point.band(found.problem, sites, exact=False))


def _factor_lifted(band: Float[np.ndarray, "states dim 2*dim"]) -> Cholesky:
    """Factor a process precision; beside an animal at rest the vague start is lost in rounding.

    The diagonal is then lifted by what rounding leaves of it: the start becomes less vague, and
    stays vague beside the errors of fixes.

    Raises
    ------
    NotPositiveDefinite
        The precision is not finite.
    """
    try:
        return factor(band)
    except NotPositiveDefinite:
        lifted = band.copy()
        lifted[:, :, 0] += LIFT * band[:, :, 0].max()
        return factor(lifted)


def _positive(matrix: Float[np.ndarray, "n 2 2"]) -> Float[np.ndarray, "n 2 2"]:
    """Matrices whose eigenvalues are lifted to a sliver of the largest of all: sites may be nil."""
    values, vectors = np.linalg.eigh(matrix)
    values = np.maximum(values, 1e-9 * values.max())
    return vectors * values[:, None, :] @ np.swapaxes(vectors, 1, 2)
