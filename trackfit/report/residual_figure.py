"""One page a tag on its residuals: their quantiles, their course in time, what they remember."""

import numpy as np
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.dates import AutoDateLocator, ConciseDateFormatter
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import MaxNLocator

from trackfit.counted import counted
from trackfit.criticism.residuals import Autocorrelation, Quantiles
from trackfit.report import style
from trackfit.results.inputs import StatusLike

SHOWN = 5.0
"""Residuals beyond this are drawn at the edge of the panel, as arrows."""

_SIZE_IN = (9.6, 7.4)
_AXES = ((style.BLUE, "o", "east in the plane"), (style.ORANGE, "^", "north, given east"))


def residual_figure(
    tag: str,
    hours: Float[np.ndarray, " fixes"],
    left_out: Float[np.ndarray, "fixes 2"],
    quantiles: Quantiles,
    of_ahead: Autocorrelation,
    of_left_out: Autocorrelation,
    status: StatusLike | None = None,
) -> Figure:
    """Draw the residuals of one tag.

    Parameters
    ----------
    hours
        Times of the fixes, hours since 1970.
    left_out
        Leave-one-out residuals, standard normal under the model.
    quantiles
        Of these.
    of_ahead, of_left_out
        Autocorrelation of one-step-ahead and of leave-one-out residuals.
    status
        How the fit ended; one that failed is told below the title.
    """
    words = f"Tag {tag}: residuals of {counted(len(hours), 'fix', 'fixes')}"
    figure = style.new_figure(*_SIZE_IN, words, status)
    grid = figure.subplots(2, 2, width_ratios=(1.0, 1.35))
    _draw_quantiles(grid[0, 0], quantiles)
    _draw_in_time(grid[0, 1], hours, left_out)
    _draw_lags(grid[1, 0], of_ahead, "One step ahead: what the motion misses")
    _draw_lags(grid[1, 1], of_left_out, "Leave-one-out: beside what the model gives")
    style.legend_below(figure, grid.ravel(), column_in=2.3)
    return figure


def _draw_quantiles(axes: Axes, quantiles: Quantiles) -> None:
    at = quantiles.normal
    alone = axes.fill_between(at, quantiles.lower95, quantiles.upper95, color=style.GREY)
    alone.set(alpha=0.35, linewidth=0, label="95 % band of one point or lag", zorder=2)
    whole = axes.fill_between(at, quantiles.lower95_all, quantiles.upper95_all, color=style.GREY)
    whole.set(alpha=0.18, linewidth=0, label="95 % band of all points", zorder=1)
    axes.axline((0.0, 0.0), slope=1.0, color=style.GREY, linewidth=0.7, zorder=3)
    outside = (quantiles.residual < quantiles.lower95_all) | (
        quantiles.residual > quantiles.upper95_all
    )
    for chosen, colour, size in ((~outside, style.BLACK, 5), (outside, style.VERMILION, 9)):
        value = quantiles.residual[chosen]
        axes.scatter(at[chosen], np.clip(value, -SHOWN, SHOWN), s=size, color=colour, zorder=4)
    reach = float(np.clip(np.abs(quantiles.residual).max() * 1.08, 3.2, SHOWN * 1.06))
    axes.set(title="Quantiles, leave-one-out", ylim=(-reach, reach))
    axes.set(xlabel="expected of a standard normal", ylabel="residual")
    axes.xaxis.set_major_locator(MaxNLocator(7))


def _draw_in_time(
    axes: Axes, hours: Float[np.ndarray, " fixes"], residual: Float[np.ndarray, "fixes 2"]
) -> None:
    days = hours / 24.0
    for axis, (colour, marker, words) in enumerate(_AXES):
        value = residual[:, axis]
        near = np.abs(value) <= SHOWN
        size = float(np.clip(2500 / max(len(hours), 1), 4, 14))
        axes.scatter(
            days[near],
            value[near],
            s=size,
            color=colour,
            marker=marker,
            alpha=0.65,
            linewidths=0,
            label=words,
            zorder=3,
        )
        for sign, arrow in ((1.0, "$\\uparrow$"), (-1.0, "$\\downarrow$")):
            far = sign * value > SHOWN
            axes.scatter(
                days[far],
                np.full(far.sum(), sign * SHOWN),
                s=60,
                color=colour,
                marker=arrow,
                linewidths=0,
                zorder=4,
            )
    for level in (-2.0, 2.0):
        axes.axhline(level, color=style.GREY, linewidth=0.8, linestyle=(0, (4, 3)), zorder=5)
    axes.axhline(0.0, color=style.GREY, linewidth=0.7, zorder=2)
    axes.add_line(
        Line2D(
            [],
            [],
            color=style.GREY,
            linewidth=0.8,
            linestyle=(0, (4, 3)),
            label="19 of 20 lie between",
        )
    )
    reach = float(np.clip(np.abs(residual).max() * 1.08, 3.2, SHOWN * 1.06))
    margin = max(0.02 * (days[-1] - days[0]), 0.5 / 24.0)
    axes.set(title="Against time, leave-one-out", ylim=(-reach, reach), ylabel="residual")
    axes.set(xlabel="time (UTC)", xlim=(days[0] - margin, days[-1] + margin))
    locator = AutoDateLocator(minticks=3, maxticks=7, tz="UTC")
    axes.xaxis.set_major_locator(locator)
    axes.xaxis.set_major_formatter(ConciseDateFormatter(locator, tz="UTC"))


def _draw_lags(axes: Axes, of: Autocorrelation, title: str) -> None:
    axes.set(title=title, xlabel="fixes apart", ylabel="autocorrelation")
    if not len(of.lag):
        axes.text(
            0.5, 0.5, "too few fixes", transform=axes.transAxes, ha="center", color=style.GREY
        )
        axes.set(xticks=[], yticks=[])
        return
    axes.axhline(0.0, color=style.GREY, linewidth=0.7, zorder=2)
    for lag, low, high in zip(of.lag, of.lower95, of.upper95, strict=True):
        axes.fill_between(
            [lag - 0.4, lag + 0.4], low, high, color=style.GREY, alpha=0.3, linewidth=0, zorder=1
        )
    outside = (of.value < of.lower95) | (of.value > of.upper95)
    label = "autocorrelation"
    for chosen, colour, size in ((~outside, style.BLACK, 20), (outside, style.VERMILION, 34)):
        axes.vlines(of.lag[chosen], of.expected[chosen], of.value[chosen], color=colour, zorder=3)
        axes.scatter(of.lag[chosen], of.value[chosen], s=size, color=colour, zorder=4)
    axes.add_line(Line2D([], [], color=style.BLACK, marker="o", markersize=4, label=label))
    axes.add_line(
        Line2D(
            [],
            [],
            color=style.VERMILION,
            marker="o",
            linestyle="",
            markersize=5,
            label="outside its band",
        )
    )
    ends = np.concatenate([of.value, of.lower95, of.upper95, [0.0]])
    ends = ends[np.isfinite(ends)]
    low, high = min(float(ends.min()), -0.2), max(float(ends.max()), 0.2)
    room = 0.08 * (high - low)
    axes.set(xlim=(0.3, of.lag[-1] + 0.7), ylim=(low - room, high + room))
    axes.xaxis.set_major_locator(MaxNLocator(integer=True))
