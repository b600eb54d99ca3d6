"""Fixes of one tag against their neighbours in time: near-duplicates, spikes and the speed test.

Speeds are geodesic distances on WGS 84 over elapsed time. Two fixes at the same moment have no
speed. What is taken out is taken out one fix at a time, the worst first, and the neighbours it
leaves are looked at anew; of fixes equally bad the less precise goes, then the later.
"""

from __future__ import annotations

from bisect import bisect_left, insort
from collections.abc import Sequence
from dataclasses import dataclass
from heapq import heappop, heappush
from typing import Protocol, runtime_checkable

import numpy as np
from jaxtyping import Bool, Float, Int

from trackfit.frame import geodesic_bearing_deg, geodesic_km

NONE = -1
"""Stands for the neighbour before the first fix and after the last."""

REACH = 2
"""So many neighbours on each side are looked at."""


class Chain:
    """The fixes of one tag in time order, from which fixes are taken out one by one.

    Parameters
    ----------
    lon, lat
        Degrees, WGS 84.
    time_ns
        Times from any zero, not falling, nanoseconds.
    sd_m
        Size of each fix's error; infinite if unknown.
    """

    def __init__(
        self,
        lon: Float[np.ndarray, " n"],
        lat: Float[np.ndarray, " n"],
        time_ns: Int[np.ndarray, " n"],
        sd_m: Float[np.ndarray, " n"],
    ) -> None:
        self.lon, self.lat, self.time_ns, self.sd_m = lon, lat, time_ns, sd_m
        # One entry more than fixes: it is the one that NONE finds, and leads to itself.
        self.before = np.append(np.arange(-1, len(lon) - 1), NONE)
        self.after = np.append(np.arange(1, len(lon) + 1), NONE)
        self.after[len(lon) - 1] = NONE
        self.is_in = np.ones(len(lon), dtype=bool)

    def take_out(self, row: int) -> None:
        """Take out a fix and join its neighbours."""
        self.is_in[row] = False
        first, last = self.before[row], self.after[row]
        if first != NONE:
            self.after[first] = last
        if last != NONE:
            self.before[last] = first

    def around(self, row: int, reach: int) -> Int[np.ndarray, " k"]:
        """Up to `reach` neighbours on each side of a fix, also of one just taken out."""
        rows = []
        for link in (self.before, self.after):
            at = row
            for _ in range(reach):
                at = link[at]
                rows.append(at)
        return np.array([at for at in rows if at != NONE], dtype=int)

    def speeds_m_per_s(
        self, ones: Int[np.ndarray, " n"], others: Int[np.ndarray, " n"]
    ) -> Float[np.ndarray, " n"]:
        """Speed between pairs of fixes; NaN where one is `NONE` or no time passes.

        Reckoned from the earlier to the later fix, so that both of a pair see the same figure to
        the last digit.
        """
        speeds = np.full(len(ones), np.nan)
        a, b = np.minimum(ones, others), np.maximum(ones, others)
        elapsed_ns = self.time_ns[b] - self.time_ns[a]
        known = (a != NONE) & (elapsed_ns > 0)
        a, b = a[known], b[known]
        far_km = geodesic_km(self.lon[a], self.lat[a], self.lon[b], self.lat[b])
        speeds[known] = 1e12 * far_km / elapsed_ns[known]
        return speeds


@runtime_checkable
class NeighbourTest(Protocol):
    """A test of a fix against its neighbours."""

    @property
    def rule(self) -> str:
        """The rule a fix breaks, in words."""

    def breaks(self, chain: Chain, rows: Int[np.ndarray, " n"]) -> Bool[np.ndarray, " n"]:
        """Tell which of some fixes break the rule; looks `REACH` neighbours far on each side."""

    def shown(self, chain: Chain, row: int) -> str:
        """The figures that break the rule, in words."""


def rms_speeds_m_per_s(chain: Chain, rows: Int[np.ndarray, " n"]) -> Float[np.ndarray, " n"]:
    """Root mean square speed between each of some fixes and its neighbours, m/s.

    V_i = sqrt(mean of v_ij^2 over j = i - 2, i - 1, i + 1, i + 2), with v_ij the speed between
    fixes i and j (McConnell, Chambers & Fedak 1992, Antarct. Sci. 4:393; the formula is from
    memory). At the ends of a track, and beside a fix at the same moment, the mean is over the
    neighbours that are there; 0 where there is none.
    """
    before, after = chain.before[rows], chain.after[rows]
    neighbours = np.concatenate([chain.before[before], before, after, chain.after[after]])
    speeds = chain.speeds_m_per_s(np.tile(rows, 4), neighbours).reshape(4, -1)
    # Sorted, so that fixes with the same speeds in another order are equal to the last digit.
    speeds = np.sort(speeds, axis=0)
    there = np.sum(~np.isnan(speeds), axis=0)
    return np.sqrt(np.nansum(speeds**2, axis=0) / np.maximum(there, 1))


@dataclass(frozen=True)
class SpeedTest:
    """The iterative speed test of McConnell, Chambers & Fedak 1992 (Antarct. Sci. 4:393).

    A fix breaks it where `rms_speeds_m_per_s` exceeds the limit. The fix with the highest is taken
    out, speeds are reckoned anew around it, and so on until none is above.
    """

    limit_m_per_s: float

    @property
    def rule(self) -> str:
        """The rule a fix breaks, in words."""
        return f"faster than {self.limit_m_per_s:g} m/s (speed test)"

    def breaks(self, chain: Chain, rows: Int[np.ndarray, " n"]) -> Bool[np.ndarray, " n"]:
        """Tell which of some fixes are faster than the limit."""
        return rms_speeds_m_per_s(chain, rows) > self.limit_m_per_s

    def shown(self, chain: Chain, row: int) -> str:
        """The root mean square speed, in words."""
        return _m_per_s(rms_speeds_m_per_s(chain, np.array([row]))[0])


@dataclass(frozen=True)
class SpikeTest:
    """Out and straight back: fast both ways, with a sharp angle at the fix.

    The angle lies between the bearings from the fix to the one before and to the one after: 0 is
    straight back, 180 straight on. The first and the last fix are no spikes.
    """

    limit_m_per_s: float
    angle_deg: float

    @property
    def rule(self) -> str:
        """The rule a fix breaks, in words."""
        return (
            f"a spike (there and back faster than {self.limit_m_per_s:g} m/s at an angle below "
            f"{self.angle_deg:g} degrees)"
        )

    def breaks(self, chain: Chain, rows: Int[np.ndarray, " n"]) -> Bool[np.ndarray, " n"]:
        """Tell which of some fixes are spikes."""
        there, back, angle_deg = self._figures(chain, rows)
        # A speed that is not there (NaN) is above no limit.
        fast = (there > self.limit_m_per_s) & (back > self.limit_m_per_s)
        return fast & (angle_deg < self.angle_deg)

    def shown(self, chain: Chain, row: int) -> str:
        """Both speeds and the angle, in words."""
        there, back, angle_deg = (float(x[0]) for x in self._figures(chain, np.array([row])))
        return f"{_m_per_s(there)} and {_m_per_s(back)}, {angle_deg:.0f} degrees"

    @staticmethod
    def _figures(
        chain: Chain, rows: Int[np.ndarray, " n"]
    ) -> tuple[Float[np.ndarray, " n"], Float[np.ndarray, " n"], Float[np.ndarray, " n"]]:
        before, after = chain.before[rows], chain.after[rows]
        ways = [
            geodesic_bearing_deg(
                chain.lon[rows], chain.lat[rows], chain.lon[others], chain.lat[others]
            )
            for others in (before, after)
        ]
        turn = np.abs(ways[0] - ways[1])
        there, back = (chain.speeds_m_per_s(rows, others) for others in (before, after))
        return there, back, np.minimum(turn, 360.0 - turn)


def _m_per_s(speed: float) -> str:
    return f"{speed:.1f} m/s" if speed >= 0.95 else f"{speed:.2g} m/s"


def take_out_all(chain: Chain, tests: Sequence[NeighbourTest]) -> dict[int, tuple[str, str]]:
    """Take out of a chain what breaks the tests, one test after the other, until none finds more.

    Returns
    -------
    dict
        Row of each fix taken out -> the rule, and the figures that broke it then.
    """
    taken: dict[int, tuple[str, str]] = {}
    found = True
    while found:
        found = False
        for test in tests:
            for row, figures in peel(chain, test).items():
                taken[row] = test.rule, figures
                found = True
    return taken


def peel(chain: Chain, test: NeighbourTest) -> dict[int, str]:
    """Take out the worst of the fixes that break a test, again and again, until none does.

    The worst is the one with the highest `rms_speeds_m_per_s`: a sound fix between two spikes is a
    spike as well, but slower as seen from the fixes beyond.

    Returns
    -------
    dict
        Row of each fix taken out -> the figures that broke the rule then.
    """
    badness = np.full(len(chain.lon), -1.0)
    queue: list[tuple[float, float, int]] = []

    def look_at(rows: Int[np.ndarray, " k"]) -> None:
        breaks = test.breaks(chain, rows)
        badness[rows] = np.where(breaks, rms_speeds_m_per_s(chain, rows), -1.0)
        for row in rows[breaks]:
            heappush(queue, (-badness[row], -chain.sd_m[row], -int(row)))

    look_at(np.flatnonzero(chain.is_in))
    taken: dict[int, str] = {}
    while queue:
        bad, _, last = heappop(queue)
        row = -last
        # What was queued before a neighbour went is stale.
        if chain.is_in[row] and -bad == badness[row]:
            taken[row] = test.shown(chain, row)
            chain.take_out(row)
            look_at(chain.around(row, REACH))
    return taken


def near_duplicates(
    time_ns: Int[np.ndarray, " n"], sd_m: Float[np.ndarray, " n"], within_seconds: float
) -> Float[np.ndarray, " n"]:
    """Seconds from each fix to the better one that makes it superfluous; NaN for those kept.

    The most precise fix is kept first (of equals the earliest), then the most precise of those
    further than `within_seconds` from all kept, and so on.
    """
    apart = np.full(len(time_ns), np.nan)
    kept: list[int] = []
    order = np.lexsort((np.arange(len(time_ns)), sd_m))
    for row, now in zip(order, time_ns[order].tolist(), strict=True):
        at = bisect_left(kept, now)
        nearest_ns = min(
            (abs(other - now) for other in kept[max(at - 1, 0) : at + 1]), default=None
        )
        if nearest_ns is not None and nearest_ns <= 1e9 * within_seconds:
            apart[row] = nearest_ns / 1e9
        else:
            insort(kept, now)
    return apart
