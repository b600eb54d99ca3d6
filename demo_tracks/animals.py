"""The invented animals: what drives them, how they are simulated, what their paths could tell."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy.special import ndtri
from trackfit_demo.sea import (
    COLONY,
    EPOCH,
    Array,
    depth_m,
    gradient,
    offshore,
    stream_km2_h,
    temperature_c,
)

SEED = 386204
STEPS_PER_HOUR = 60
STANDARD = {  # layer -> (centre, scale), in the layer's unit
    "depth": (2000.0, 1000.0, "m"),
    "temperature": (11.0, 1.5, "degC"),
}
UNITS = {
    "diffusion": "km/sqrt(h)",
    "preference.depth.linear": "km^2/h",
    "preference.temperature.linear": "km^2/h",
    "preference.temperature.squared": "km^2/h",
    "preference.colony.distance": "km/h",
    "current.drift": "1",
}
PENGUIN = dict(zip(UNITS, (1.2, 30.0, 12.0, -16.0, -0.85, 0.85), strict=True))
SEAL = dict(zip(UNITS, (1.5, 36.0, -10.0, -13.0, -0.8, 0.6), strict=True))


@dataclass(frozen=True)
class Animal:
    """One deployment: truth, and when and how far from the island's middle it starts."""

    tag: str
    truth: dict[str, float]
    start_day: float
    days: float
    start_bearing_deg: float


ANIMALS = (
    Animal("TI-P01", PENGUIN, 7.25, 7.0, 105.0),
    Animal("TI-P02", PENGUIN, 8.0, 8.0, 150.0),
    Animal("TI-P03", PENGUIN, 9.5, 7.5, 205.0),
    Animal("TI-P04", PENGUIN, 10.25, 8.0, 125.0),
    Animal("TI-S01", SEAL, 2.0, 25.0, 185.0),
    Animal("TI-S02", SEAL, 3.5, 24.0, 230.0),
)


def terms(x: Array, y: Array, t: Array) -> dict[str, tuple[Array, Array]]:
    """Return what each parameter multiplies in the drift, as (x, y) of the plane."""
    (_, ds, _), (tc, ts, _) = STANDARD["depth"], STANDARD["temperature"]
    dx, dy = gradient(depth_m, x, y)
    tx, ty = gradient(temperature_c, x, y, t)
    z = (temperature_c(x, y, t) - tc) / ts
    away = np.hypot(x - COLONY[0], y - COLONY[1])
    px, py = gradient(stream_km2_h, x, y, t)
    return {
        "preference.depth.linear": (dx / ds, dy / ds),
        "preference.temperature.linear": (tx / ts, ty / ts),
        "preference.temperature.squared": (2 * z * tx / ts, 2 * z * ty / ts),
        "preference.colony.distance": ((x - COLONY[0]) / away, (y - COLONY[1]) / away),
        "current.drift": (-py, px),
    }


class Draws:
    """Random numbers from raw bits, whose stream numpy promises never to change."""

    def __init__(self, *key: int) -> None:
        self._bits = np.random.PCG64([SEED, *key])

    def uniform(self, *shape: int) -> Array:
        """Uniform on (0, 1)."""
        raw = self._bits.random_raw(int(np.prod(shape)))
        return ((np.asarray(raw) >> np.uint64(11)).astype(float) + 0.5).reshape(shape) * 2.0**-53

    def normal(self, *shape: int) -> Array:
        """Return standard normal numbers."""
        return ndtri(self.uniform(*shape))


class Path2D(NamedTuple):
    """A true path, one position a minute."""

    animal: Animal
    minute: Array  # whole minutes since EPOCH
    xy_km: Array  # (n, 2)


def simulate() -> list[Path2D]:
    """Euler-Maruyama with steps of a minute, all animals side by side."""
    n = int(max(a.days for a in ANIMALS) * 24 * STEPS_PER_HOUR)
    dt = 1.0 / STEPS_PER_HOUR
    start_minute = np.array([round(a.start_day * 1440) for a in ANIMALS])
    truth = {k: np.array([a.truth[k] for a in ANIMALS]) for k in UNITS}
    noise = np.stack([Draws(1, i).normal(n, 2) for i in range(len(ANIMALS))], axis=1)
    noise *= truth["diffusion"][:, None] * np.sqrt(dt)
    xy = np.empty((n + 1, len(ANIMALS), 2))
    xy[0] = [offshore(a.start_bearing_deg, 4.0) for a in ANIMALS]
    for i in range(n):
        x, y = xy[i].T
        parts = terms(x, y, (start_minute + i) / 60.0)
        xy[i + 1, :, 0] = x + dt * sum(truth[k] * g[0] for k, g in parts.items())
        xy[i + 1, :, 1] = y + dt * sum(truth[k] * g[1] for k, g in parts.items())
        xy[i + 1] += noise[i]
    lengths = [round(a.days * 1440) + 1 for a in ANIMALS]
    return [
        Path2D(a, start_minute[j] + np.arange(m), xy[:m, j])
        for j, (a, m) in enumerate(zip(ANIMALS, lengths, strict=True))
    ]


def stamp(minute: int) -> str:
    """Minutes since EPOCH as ISO 8601 in UTC."""
    return f"{EPOCH + np.timedelta64(int(minute), 'm')}Z"


def check(paths: list[Path2D]) -> None:
    """Refuse a scene in which an animal swims over land or leaves the plane's good part."""
    for p in paths:
        lowest, widest = depth_m(*p.xy_km.T).min(), np.hypot(*p.xy_km.T).max()
        if lowest <= 0 or widest > 250:
            raise SystemExit(f"{p.animal.tag}: depth {lowest:.1f} m, {widest:.0f} km off: no scene")


class Estimate(NamedTuple):
    """Least-squares estimates of the drift's parameters and of sigma, with standard errors."""

    value: dict[str, float]
    se: dict[str, float]


def regress(path: Path2D, at: Array, longest_hours: float = 2.0) -> Estimate:
    """Regress steps of the true path on the drift's terms; gaps longer than a limit are left out.

    With u = sum_k b_k g_k, step dx = u dt + sigma sqrt(dt) e: weighted least squares. The layers'
    change within a step is ignored, so long steps bias it: a check of signal, not a fit.
    """
    hours = path.minute[at] / 60.0
    dt, xy = np.diff(hours), path.xy_km[at]
    use = (dt > 0) & (dt <= longest_hours)
    parts = terms(xy[:-1, 0], xy[:-1, 1], hours[:-1])
    g = np.stack([np.stack(v, axis=-1) for v in parts.values()], axis=-1)[use]  # (n, 2, k)
    root = np.sqrt(dt[use])[:, None]
    design = (g * root[..., None]).reshape(-1, len(parts))
    steps = (np.diff(xy, axis=0)[use] / root).ravel()
    inverse = np.linalg.inv(design.T @ design)
    b = inverse @ design.T @ steps
    free = len(steps) - len(b)
    sigma = float(np.sqrt(np.sum((steps - design @ b) ** 2) / free))
    se = dict(zip(parts, (sigma * np.sqrt(np.diag(inverse))).tolist(), strict=True))
    se["diffusion"] = sigma / np.sqrt(2 * free)
    return Estimate({"diffusion": sigma, **dict(zip(parts, b.tolist(), strict=True))}, se)
