"""Long Hamiltonian sampling of the plain model, and the summary that is kept of it.

    python tests/plain_nuts.py

samples the six tracks of `tests/plain_model.py` with NumPyro (not a dependency of the project:
`pip install numpyro`; Phan, Pradhan & Jankowiak 2019, arXiv:1912.11554), some minutes a track, and
writes `tests/nuts_summaries.json`. Names of tracks as arguments renew those only; `--warmup` and
`--draws` set the length of each chain.

NUTS (Hoffman & Gelman 2014, J. Mach. Learn. Res. 15:1593) sees parameters theta and whitened states
z: states = m(theta) + inv(L(theta)') z, with L the Cholesky factor of the precision H that the
motion without a field and the fixes with fixed weights would give, and m their posterior mean with
the field taken along a fixed path. That is a change of variables, exact whatever H and m are: the
density sampled is that of `log_joint`, times the determinant of inv(L).
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from functools import partial
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
import numpyro
import numpyro.distributions as dist
from numpyro.diagnostics import effective_sample_size, split_gelman_rubin
from numpyro.infer import MCMC, NUTS
from plain_model import CASES, START_SD_KM, Case, log_fixes, log_process, steps, terms

SUMMARIES = Path(__file__).with_name("nuts_summaries.json")
CHAINS, WARMUP, DRAWS, SEED = 4, 1000, 3000, 2024


class Map:
    """The change of variables of one track; both axes share one precision."""

    def __init__(self, case: Case) -> None:
        self.case = case
        track = case.track
        self.dt = jnp.asarray(np.diff(track.hours))
        self.weight = np.ones(len(track.at))
        self.path = np.stack(
            [np.interp(track.hours, track.fix_hours, xy) for xy in track.fix_km.T], axis=1
        )
        # the fixed path and weights: a few rounds of smoothing at the parameters of the simulation
        for _ in range(8):
            states, _ = self(jnp.asarray(case.truth), jnp.zeros(self.shape))
            self.path = np.asarray(states[:, 0])
            if case.nu is not None:
                off = track.fix_km - self.path[track.at]
                precision = np.linalg.inv(track.covariance_km2)
                squared = np.einsum("ka,kab,kb->k", off, precision, off)
                self.weight = (case.nu + 2.0) / (case.nu + squared)

    @property
    def shape(self) -> tuple[int, int, int]:
        """Of the states: (states, k, axes)."""
        return (len(self.case.track.hours), len(self.case.motion), 2)

    def __call__(self, theta, z):
        """The states (n, k, 2) of whitened ones, and the log determinant of the map."""
        diagonal, below, pull = self._normal(theta)
        roots, links, forward = _factor(diagonal, below, pull)
        states = _solve_transposed(roots, links, forward + z)
        k = self.shape[1]
        return states, -2.0 * sum(jnp.sum(jnp.log(roots[:, p, p])) for p in range(k))

    def _normal(self, theta):
        """Precision of one axis in blocks (n, k, k), the blocks below, and precision times mean."""
        case, track, (n, k, _) = self.case, self.case.track, self.shape
        motion = jnp.exp(theta[:k])
        F, G, Q = steps(motion, self.dt)
        u = jnp.einsum("a,nad->nd", theta[k:-1], terms(jnp.asarray(self.path)))
        F, W = jnp.moveaxis(F, -1, 0), jnp.linalg.inv(jnp.moveaxis(Q, -1, 0))
        drift = G.T[:, :, None] * u[:-1, None, :]
        diagonal = jnp.zeros((n, k, k)).at[1:].add(W)
        diagonal = diagonal.at[:-1].add(jnp.einsum("npq,npr,nrs->nqs", F, W, F))
        below = -jnp.einsum("npq,nqr->npr", W, F)
        pull = jnp.zeros(self.shape).at[1:].add(W @ drift)
        pull = pull.at[:-1].add(-jnp.einsum("npq,npr,nrd->nqd", F, W, drift))
        first = [START_SD_KM**-2.0, 2.0 * motion[0] ** -2.0][:k]
        diagonal = diagonal.at[0].add(jnp.diag(jnp.stack([jnp.asarray(p) for p in first])))
        pull = pull.at[0, 0].add(first[0] * track.fix_km[0])
        if case.persistent:
            pull = pull.at[0, 1].add(first[1] * u[0])
        own = 0.5 * np.trace(np.linalg.inv(track.covariance_km2), axis1=1, axis2=2) * self.weight
        own = jnp.asarray(own) * jnp.exp(-2.0 * theta[-1])
        diagonal = diagonal.at[track.at, 0, 0].add(own)
        return diagonal, below, pull.at[track.at, 0].add(own[:, None] * track.fix_km)


def _root(block):
    """Cholesky factor of a block of one or two, written out."""
    first = jnp.sqrt(block[0, 0])
    if len(block) == 1:
        return first[None, None]
    across = block[1, 0] / first
    last = jnp.sqrt(block[1, 1] - across**2)
    return jnp.array([[first, 0.0], [across, last]])


def _forward(root, right):
    """Solve root x = right, written out."""
    first = right[0] / root[0, 0]
    if len(root) == 1:
        return first[None]
    return jnp.stack([first, (right[1] - root[1, 0] * first) / root[1, 1]])


def _backward(root, right):
    """Solve root' x = right, written out."""
    if len(root) == 1:
        return right / root[0, 0]
    last = right[1] / root[1, 1]
    return jnp.stack([(right[0] - root[1, 0] * last) / root[0, 0], last])


def _factor(diagonal, below, pull):
    """Block Cholesky factor: roots L_ii and links L_(i,i-1); and the solution of L y = pull."""

    def step(before, block):
        root, y = before
        own, low, right = block
        link = _forward(root, low.T).T
        root = _root(own - link @ link.T)
        y = _forward(root, right - link @ y)
        return (root, y), (root, link, y)

    root = _root(diagonal[0])
    first = root, _forward(root, pull[0])
    _, (roots, links, y) = jax.lax.scan(step, first, (diagonal[1:], below, pull[1:]))
    return (
        jnp.concatenate([root[None], roots]),
        links,
        jnp.concatenate([first[1][None], y]),
    )


def _solve_transposed(roots, links, right):
    """Solve L' x = right."""

    def step(after, block):
        root, link, own = block
        x = _backward(root, own - link.T @ after)
        return x, x

    last = _backward(roots[-1], right[-1])
    _, rest = jax.lax.scan(step, last, (roots[:-1], links, right[:-1]), reverse=True)
    return jnp.concatenate([rest, last[None]])


def plain(case: Case, whiten: Map) -> None:
    """The NumPyro model."""
    mean, sd = case.prior
    theta = numpyro.sample("theta", dist.Normal(mean, sd).to_event(1))
    z = numpyro.sample("z", dist.Normal(0.0, 1.0).expand(whiten.shape).to_event(3))
    states, log_det = whiten(theta, z)
    density = log_process(case, theta, states) + log_fixes(case, theta, states)
    numpyro.factor("plain", density + log_det + 0.5 * jnp.sum(z**2))


def sampled(case: Case, warmup: int, draws_asked: int) -> dict[str, object]:
    """Sample one track; the summary of its parameters (on the scale of the model's vector)."""
    whiten = Map(case)
    begun = time.time()
    kernel = NUTS(partial(plain, case, whiten), dense_mass=[("theta",)], target_accept_prob=0.9)
    mcmc = MCMC(
        kernel,
        num_warmup=warmup,
        num_samples=draws_asked,
        num_chains=CHAINS,
        chain_method="vectorized",
        progress_bar=False,
    )
    key, *keys = jax.random.split(jax.random.PRNGKey(SEED + case.seed), 3)
    scatter = 0.2 * jax.random.normal(keys[0], (CHAINS, len(case.names)))
    start = {
        "theta": jnp.asarray(case.truth) + scatter,
        "z": jax.random.normal(keys[1], (CHAINS, *whiten.shape)),
    }
    mcmc.run(key, init_params=start, extra_fields=("diverging", "num_steps"))
    draws = np.asarray(mcmc.get_samples(group_by_chain=True)["theta"])
    flat = draws.reshape(-1, draws.shape[-1])
    extra = mcmc.get_extra_fields()
    return {
        "names": list(case.names),
        "mean": flat.mean(axis=0).tolist(),
        "sd": flat.std(axis=0, ddof=1).tolist(),
        "effective": effective_sample_size(draws).round(1).tolist(),
        "r_hat": split_gelman_rubin(draws).round(5).tolist(),
        "divergences": int(extra["diverging"].sum()),
        "steps_per_draw": round(float(extra["num_steps"].mean()), 1),
        "states": whiten.shape[0],
        "fixes": case.fixes,
        "chains": CHAINS,
        "warmup": warmup,
        "draws": draws_asked,
        "seed": SEED + case.seed,
        "minutes": round((time.time() - begun) / 60.0, 1),
    }


def main() -> None:
    """Sample the named tracks, all by default, and write the summaries."""
    names = [case.name for case in CASES]
    parser = argparse.ArgumentParser(description="Sample the plain model at length.")
    parser.add_argument("tracks", nargs="*", help=f"tracks to renew: {', '.join(names)}")
    parser.add_argument("--warmup", type=int, default=WARMUP, help="of each chain")
    parser.add_argument("--draws", type=int, default=DRAWS, help="of each chain")
    asked = parser.parse_args()
    wanted = asked.tracks or names
    if not set(wanted) <= set(names):
        parser.error(f"no such track: {sorted(set(wanted) - set(names))}")
    kept = json.loads(SUMMARIES.read_text()) if SUMMARIES.exists() else {"tracks": {}}
    kept["command"] = "python tests/plain_nuts.py"
    kept["versions"] = {
        "python": sys.version.split()[0],
        **{part.__name__: part.__version__ for part in (numpyro, jax, np)},
    }
    for case in CASES:
        if case.name in wanted:
            kept["tracks"][case.name] = sampled(case, asked.warmup, asked.draws)
            SUMMARIES.write_text(json.dumps(kept, indent=1) + "\n")


if __name__ == "__main__":
    main()
