"""Moments and regions of confined paths, steadied by unconfined twins whose law is known."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from jaxtyping import Float


@dataclass
class TwinSums:
    """Sums over paths and sweeps of confined positions z and of their free twins w.

    Both are taken less `about`, the known mean of the twins' law.
    """

    about: Float[np.ndarray, "states 2"]
    count: int
    z: Float[np.ndarray, "states 2"]
    w: Float[np.ndarray, "states 2"]
    zz: Float[np.ndarray, "states 2 2"]
    ww: Float[np.ndarray, "states 2 2"]
    zw: Float[np.ndarray, " states"]

    @classmethod
    def of(cls, mean: Float[np.ndarray, "states 2"]) -> TwinSums:
        """Empty sums about a mean."""
        n = len(mean)
        first, second = np.zeros((2, n, 2)), np.zeros((2, n, 2, 2))
        return cls(mean, 0, first[0], first[1], second[0], second[1], np.zeros(n))

    def add(
        self, z_km: Float[np.ndarray, "paths states 2"], w_km: Float[np.ndarray, "paths states 2"]
    ) -> None:
        """Add one sweep of all paths."""
        z, w = z_km - self.about, w_km - self.about
        self.count += len(z)
        self.z += z.sum(axis=0)
        self.w += w.sum(axis=0)
        self.zz += np.einsum("pni,pnj->nij", z, z)
        self.ww += np.einsum("pni,pnj->nij", w, w)
        self.zw += np.einsum("pni,pni->n", z, w)

    def controlled(
        self, covariance: Float[np.ndarray, "states 2 2"]
    ) -> tuple[
        Float[np.ndarray, "states 2"], Float[np.ndarray, "states 2 2"], Float[np.ndarray, " states"]
    ]:
        """Mean and covariance of z, with w for control variate: its own are zero and `covariance`.

        mean = z - b w, covariance = S_z - b^2 (S_w - V), with b = tr S_zw / tr S_w in [0, 1], which
        is returned as well. Where z and w are the same, these are 0 and V, without noise: no seam
        shows where a coast begins to matter.
        """
        z, w = self.z / self.count, self.w / self.count
        of_z = self.zz / self.count - z[:, :, None] * z[:, None, :]
        of_w = self.ww / self.count - w[:, :, None] * w[:, None, :]
        both = self.zw / self.count - np.sum(z * w, axis=1)
        b = np.clip(both / np.einsum("nii->n", of_w), 0.0, 1.0)
        around = of_z - b[:, None, None] ** 2 * (of_w - covariance)
        sound = np.linalg.eigvalsh(around)[:, 0] > 0.0
        return z - b[:, None] * w, np.where(sound[:, None, None], around, of_z), b


def squared_radius(
    xy_km: Float[np.ndarray, "paths states 2"],
    centre_km: Float[np.ndarray, "states 2"],
    covariance_km2: Float[np.ndarray, "states 2 2"],
    probability: float,
) -> Float[np.ndarray, " states"]:
    """Squared Mahalanobis radius around a centre within which a share of the paths lies."""
    off = xy_km - centre_km
    inverse = np.linalg.inv(covariance_km2)
    return np.quantile(np.einsum("pni,nij,pnj->pn", off, inverse, off), probability, axis=0)


def medoid(
    candidates_km: Float[np.ndarray, "n 2"], cloud_km: Float[np.ndarray, "m 2"]
) -> Float[np.ndarray, " 2"]:
    """The candidate with the least mean distance to a cloud of points."""
    apart = np.hypot(*(candidates_km[:, None] - cloud_km[None]).transpose(2, 0, 1))
    return candidates_km[int(np.argmin(apart.mean(axis=1)))]
