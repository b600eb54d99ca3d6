"""What the commands print on stdout: plain text in columns, on a terminal as in a file."""

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

if TYPE_CHECKING:
    from trackfit.analysis import Prepared
    from trackfit.criticism.compare import Compared
    from trackfit.criticism.hidden_fixes import HoldOutTrial
    from trackfit.criticism.judged import Judged
    from trackfit.fixes import Fixes
    from trackfit.frame import Plane
    from trackfit.inference.fit import Fit
    from trackfit.layers.layer import Layer

_GAP = "  "


def columns(header: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Lay rows out under a header: the first column to the left, the others to the right.

    Examples
    --------
    >>> columns(["tag", "fixes"], [["A", "120"], ["long", "7"]])
    ['tag   fixes', 'A       120', 'long      7']
    """
    table = [header, *rows]
    widths = [max(len(row[i]) for row in table) for i in range(len(header))]
    return [
        _GAP.join(
            cell.ljust(width) if i == 0 else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in table
    ]


def parameter_table(fits: "Sequence[Fit]") -> list[str]:
    """Return the lines of the parameter table: one row a tag and parameter."""
    rows = [
        [f"{fit.tag} {name}", *_numbers(row), str(row["unit"])]
        for fit in fits
        for name, row in fit.parameters.set_index("parameter").iterrows()
    ]
    return columns(["tag and parameter", "estimate", "sd", "lower 95", "upper 95", "unit"], rows)


def _numbers(row: "pd.Series") -> Sequence[str]:
    """Estimate, sd and limits; what the study fixes or the fit chooses has no sd to quote."""
    if row["role"] in ("fixed", "chosen"):
        return [f"{row['estimate']:.4g}", str(row["role"]), "", ""]
    return [f"{row[name]:.4g}" for name in ("estimate", "sd", "lower95", "upper95")]


def step_check_table(fits: "Sequence[Fit]") -> list[str]:
    """Return the lines that say how far half the step moves each estimate; none if not asked."""
    rows = [
        [f"{fit.tag} {row['parameter']}", f"{row['change_in_sd']:+.2f}"]
        for fit in fits
        if fit.step_check is not None
        for _, row in fit.step_check.iterrows()
    ]
    return ["", *columns(["at half the step", "change in sd"], rows)] if rows else []


def convergence(fits: "Sequence[Fit]") -> str:
    """Say how many fits converged."""
    failed = [fit for fit in fits if not fit.status.ok]
    told = f"{len(fits) - len(failed)} of {len(fits)} fits converged"
    names = ", ".join(f"{fit.tag} ({fit.status.name})" for fit in failed)
    return f"{told}; not {names}." if failed else f"{told}."


def findings(judged: "Judged") -> list[str]:
    """Return the lines that say what to think of every fit.

    Of what is as it should be only one line is said for each tag; all stands in verdicts.csv.
    """
    lines: list[str] = []
    for criticism in judged.criticisms:
        lines += ["", f"Tag {criticism.tag}:", *_verdicts(judged, criticism.tag)]
    if judged.comparison:
        lines += ["", *_comparison(judged.comparison)]
    if judged.trial is not None:
        lines += ["", *_trial(judged.trial)]
    return lines


def _verdicts(judged: "Judged", tag: str) -> list[str]:
    fine = ("errors as stated", "tails as expected", "motion fits")
    verdicts = judged.of(tag)
    told = [f"  {v.sentence}" for v in verdicts if v.finding.value not in fine]
    plain = [v.about for v in verdicts if v.finding.value in fine]
    if plain:
        told.insert(0, f"  Nothing speaks against the model's {_listed(plain)}.")
    return told


def _listed(words: Sequence[str]) -> str:
    return " and ".join(([", ".join(words[:-1])] if words[:-1] else []) + [words[-1]])


def _comparison(rows: "Sequence[Compared]") -> list[str]:
    cells = [
        [
            f"{row.tag} {row.model}",
            *("" if row.scores is None else f"{x:.1f}" for x in _of_scores(row)),
            *("" if np.isnan(x) else f"{x:+.1f}" for x in _differences(row)),
        ]
        for row in rows
    ]
    header = [
        "tag and model",
        "log marginal",
        "AIC",
        "leave-one-out",
        "AIC less own",
        "l.o.o. less",
    ]
    told = [f"{row.tag}: {row.sentence}" for row in rows if row.outcome.name != "OWN"]
    return [*columns(header, cells), "", *told]


def _of_scores(row: "Compared") -> tuple[float, ...]:
    scores = row.scores
    if scores is None:
        return (np.nan, np.nan, np.nan)
    return (scores.log_marginal, scores.aic, scores.leave_one_out)


def _differences(row: "Compared") -> tuple[float, float]:
    return row.aic_difference, row.leave_one_out_difference


def _trial(trial: "HoldOutTrial") -> list[str]:
    rows = trial.tags if len(trial.tags) == 1 else (*trial.tags, trial.pooled)
    return [f"{row.tag}: {row.sentence}" for row in rows]


def description(prepared: "Prepared") -> list[str]:
    """Return the lines that say what the study holds."""
    return [
        *_tags(prepared),
        "",
        *_set_aside(prepared.fixes),
        "",
        *_plane(prepared),
        "",
        *_layers(prepared),
    ]


def _tags(prepared: "Prepared") -> list[str]:
    rows = []
    for tag in prepared.fixes.tags:
        times = prepared.fixes.of(tag)["time"]
        rows.append(
            [
                tag,
                str(len(times)),
                f"{times.iloc[0]:%Y-%m-%d %H:%M}",
                f"{times.iloc[-1]:%Y-%m-%d %H:%M}",
                str(prepared.n_states(tag)),
            ]
        )
    return columns(["tag", "fixes used", "first (UTC)", "last (UTC)", "states"], rows)


def _set_aside(fixes: "Fixes") -> list[str]:
    if fixes.set_aside.empty:
        return ["No fix is set aside."]
    lines = [[reason, str(count)] for reason, count in fixes.reason_counts().items()]
    return [f"Set aside: {len(fixes.set_aside)}", *columns(["reason", "fixes"], lines)]


def _plane(prepared: "Prepared") -> list[str]:
    table = prepared.fixes.table
    distortion = prepared.plane.distortion(table["lon"], table["lat"])
    # rounded up, never to a perfect 0.00%
    return [
        f"Plane: {prepared.plane.description}; distances at the fixes are true to "
        f"{max(distortion, 1e-4):.2%}."
    ]


def _layers(prepared: "Prepared") -> list[str]:
    if not prepared.layers:
        return ["No layers are named."]
    header = ["layer", "unit", "from", "to", "spacing", "grid", "times", "filled", "outside"]
    rows = [_layer_row(layer, prepared.plane) for layer in prepared.layers.values()]
    return columns(header, rows)


def _layer_row(layer: "Layer", plane: "Plane") -> list[str]:
    rows, across = layer.covered.shape
    low, high = _corners(layer, plane)
    return [
        layer.name,
        layer.unit or "none",
        low,
        high,
        f"{layer.spacing_km:.4g} km",
        f"{across} x {rows}",
        "fixed" if layer.fixed else f"{len(layer.hours)}, {_time_span(layer)}",
        f"{layer.share_filled:.1%}",
        f"{1 - np.mean(layer.covered):.1%}",
    ]


def _corners(layer: "Layer", plane: "Plane") -> Iterator[str]:
    """Yield the south-west and north-east corners of a layer's grid, in degrees."""
    rows, across = layer.covered.shape
    start = np.array([layer.x0_km, layer.y0_km])
    size = layer.spacing_km * np.array([across - 1, rows - 1])
    for lon, lat in zip(*plane.to_lonlat(np.stack([start, start + size])), strict=True):
        yield f"{abs(lat):.2f}{'NS'[int(lat < 0)]} {abs(lon):.2f}{'EW'[int(lon < 0)]}"


def _time_span(layer: "Layer") -> str:
    first, last = (pd.Timestamp(float(hour), unit="h", tz="UTC") for hour in layer.hours[[0, -1]])
    return f"{first:%Y-%m-%d} to {last:%Y-%m-%d}"
