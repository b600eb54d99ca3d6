"""What the invented tags report of a true path, and the mess a real table is in."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from pyproj import Geod
from trackfit_demo.animals import Draws, Path2D, stamp
from trackfit_demo.sea import Array, to_lonlat

HEADERS = (
    "who",
    "when",
    "east_deg",
    "north_deg",
    "gps_m",
    "class",
    "long_axis_m",
    "short_axis_m",
    "axis_from_north",
)
# 68th percentiles of Costa et al. 2010 (PLoS ONE 5:e8677, abstract) over 1.515: sd per axis, m.
CLASS_SD_M = {"3": 323.0, "2": 667.0, "1": 792.0, "0": 2759.0, "A": 4086.0, "B": 6785.0}
CLASS_SHARE = (0.14, 0.20, 0.20, 0.12, 0.17, 0.17)
ELLIPSE_K = np.sqrt(2.0)  # the ellipse holds the position with probability 1 - exp(-1) = 0.632


class Fix(NamedTuple):
    """One clean fix: the row as text, and how wrong it is (for the tests)."""

    row: dict[str, str]
    error_m: Array  # (2,) east, north on the ground
    covariance_m2: Array  # (2, 2) east, north on the ground


class Schedule(NamedTuple):
    """Minutes between fixes, share lost, rest hours (on, off) and gaps (after hours, length)."""

    every_min: float
    lost: float
    duty_hours: tuple[float, float]
    gaps: tuple[tuple[float, float], ...]


SCHEDULES = {
    "TI-P01": Schedule(20, 0.20, (1e9, 0), ((31, 5.5), (77, 22.5), (140, 8))),
    "TI-P02": Schedule(30, 0.12, (10, 5), ((100, 16),)),
    "TI-P03": Schedule(15, 0.30, (8, 3), ((52, 11),)),
    "TI-P04": Schedule(30, 0.15, (1e9, 0), ((40, 24), (120, 9), (165, 7))),
    "TI-S01": Schedule(95, 0.08, (1e9, 0), ((150, 30), (330, 62), (500, 26))),
    "TI-S02": Schedule(110, 0.08, (1e9, 0), ((90, 44), (260, 25), (450, 62))),
}


def fix_minutes(path: Path2D, draws: Draws) -> Array:
    """Return indices along the path (minutes since its start) at which the tag reported."""
    plan = SCHEDULES[path.animal.tag]
    last = len(path.minute) - 1
    count = int(last / plan.every_min)
    if path.animal.tag.startswith("TI-P"):
        at = np.round(plan.every_min * np.arange(count) + 2 * draws.uniform(count)).astype(int)
    else:  # satellites pass when they pass
        at = np.cumsum(8 + (plan.every_min - 8) * -np.log(draws.uniform(count))).astype(int)
    at = np.unique(at[at <= last])
    hour, (on, off) = at / 60.0, plan.duty_hours
    keep = (draws.uniform(len(at)) > plan.lost) & (hour % (on + off) < on)
    for after, length in plan.gaps:
        keep &= (hour < after) | (hour > after + length)
    return at[keep]


def _gps(draws: Draws) -> tuple[dict[str, str], Array]:
    sd = float(np.round(np.clip(24.0 * np.exp(0.45 * draws.normal(1)[0]), 10, 60), 1))
    return {"gps_m": f"{sd:.1f}"}, np.eye(2) * sd**2


def _satellite(draws: Draws, with_ellipse: bool) -> tuple[dict[str, str], Array]:
    u = draws.uniform(4)
    name = list(CLASS_SD_M)[int(np.searchsorted(np.cumsum(CLASS_SHARE), u[0]))]
    sd = CLASS_SD_M[name]
    if not (with_ellipse and u[1] < 0.75):
        return {"class": name}, np.eye(2) * sd**2
    major = round(sd * 1.5 * float(np.exp(0.35 * np.clip(draws.normal(1)[0], -2, 2))))
    minor, bearing = round(major * (0.2 + 0.6 * u[2])), round(50 + 85 * u[3])
    s, c = np.sin(np.radians(bearing)), np.cos(np.radians(bearing))
    turn = np.array([[s, c], [c, -s]])  # columns: along the long axis, along the short one
    cov = turn @ np.diag([major**2, minor**2]) @ turn.T / ELLIPSE_K**2
    cells = (name, str(major), str(minor), str(bearing))
    return dict(zip(HEADERS[5:], cells, strict=True)), cov


def observe(path: Path2D, number: int) -> list[Fix]:
    """All fixes of one tag, in time order, before any mess."""
    draws, tag = Draws(2, number), path.animal.tag
    geod, fixes = Geod(ellps="WGS84"), []
    for i in fix_minutes(path, draws):
        is_gps = tag.startswith("TI-P")
        cells, cov = _gps(draws) if is_gps else _satellite(draws, tag == "TI-S01")
        error = np.linalg.cholesky(cov) @ draws.normal(2)
        (lon, lat), bearing = to_lonlat(path.xy_km[[i]])[0], np.degrees(np.arctan2(*error))
        lon, lat, _ = geod.fwd(lon, lat, bearing, np.hypot(*error))
        digits = 5 if is_gps else 4
        where = {"east_deg": f"{lon:.{digits}f}", "north_deg": f"{lat:.{digits}f}"}
        row = {"who": tag, "when": stamp(path.minute[i]), **where, **cells}
        fixes.append(Fix({h: row.get(h, "") for h in HEADERS}, error, cov))
    return fixes


class Spoil(NamedTuple):
    """One planted fault: what it is, and whether a careful reader still uses the row."""

    tag: str
    number: int  # of the tag's clean fixes
    what: str
    expect: str  # "used" or "set aside"
    cells: dict[str, str]
    extra: bool  # a row more (True), or the fix itself changed


SPOILS = {
    "penguins.csv": (
        Spoil("TI-P01", 60, "latitude impossible", "set aside", {"north_deg": "-98.61204"}, True),
        Spoil("TI-P01", 120, "error size missing", "set aside", {"gps_m": ""}, False),
        Spoil("TI-P02", 45, "row repeated", "set aside", {}, True),
        Spoil("TI-P03", 30, "longitude missing", "set aside", {"east_deg": ""}, False),
        Spoil("TI-P03", 90, "error size missing", "set aside", {"gps_m": ""}, False),
        Spoil("TI-P04", 70, "time unreadable", "set aside", {"when": "2025-01-14T27:90:00Z"}, True),
    ),
    "seals.csv": (
        Spoil("TI-S01", 33, "class Z", "set aside", {"class": "Z", "long_axis_m": ""}, True),
        Spoil("TI-S02", 50, "class missing", "set aside", {"class": ""}, False),
        Spoil("TI-S02", 88, "latitude missing", "set aside", {"north_deg": ""}, False),
    ),
}
SWAPS = {  # pairs of neighbours out of order: (tag, number of the first)
    "penguins.csv": (("TI-P01", 15), ("TI-P02", 110), ("TI-P04", 33)),
    "seals.csv": (("TI-S01", 70), ("TI-S02", 20)),
}


def spoil(name: str, fixes: list[Fix]) -> tuple[list[dict[str, str]], list[dict[str, str]]]:
    """Rows of a file with its planted faults, and the list of those faults with line numbers."""
    rows = [dict(f.row) for f in fixes]
    first = {tag: next(i for i, r in enumerate(rows) if r["who"] == tag) for tag, _ in SWAPS[name]}
    notes: dict[int, tuple[str, str]] = {}
    for tag, i in SWAPS[name]:
        k = first[tag] + i
        rows[k], rows[k + 1] = rows[k + 1], rows[k]
        notes[id(rows[k + 1])] = ("out of order", "used")
    for s in SPOILS[name]:
        k = next(i for i, r in enumerate(rows) if r["who"] == s.tag) + s.number
        row = rows[k]
        if s.extra:
            row = dict(row)
            if s.what == "class Z":
                row |= {"short_axis_m": "", "axis_from_north": "", "east_deg": "-24.8817"}
            rows.insert(k + 1, row)
        row |= s.cells
        notes[id(row)] = (s.what, s.expect)
    planted = [
        {"file": name, "line": str(i), "what": notes[id(r)][0], "expect": notes[id(r)][1]}
        for i, r in enumerate(rows, start=2)
        if id(r) in notes
    ]
    return rows, planted
