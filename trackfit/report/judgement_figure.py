"""One page a tag on its used fixes: how far each lies from where all others place it."""

from typing import Any

import numpy as np
import pandas as pd
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter

from trackfit.counted import counted
from trackfit.report import style
from trackfit.report.map_panel import (
    HALO,
    Frame,
    draw_ground,
    draw_path,
    draw_scale_bar,
    fix_marks,
    frame_of,
)
from trackfit.report.scene import Scene
from trackfit.report.time_panels import days_since_1970, shade_gaps, share_time_axis
from trackfit.results.inputs import JudgementLike, TrackLike

LEAST_P_VALUE = 1e-12
"""Smaller p-values are drawn here: what they are says no more about a fix."""
LEAST_OFFSET_M = 1.0
NUMBERED_FIXES = 12
"""Up to so many flagged fixes are numbered, the same on the map and against time."""

_MAP_HEIGHT_IN = 5.0
_PANEL_WIDTH_IN = 5.2
_MARGINS_IN = (1.1, 1.75)
_K95 = np.sqrt(-2.0 * np.log(0.05))  # a circle of so many sd holds 95 % of a round normal
_FLAG_MARKS: dict[str, Any] = {
    "marker": "D", "s": 34, "facecolors": style.VERMILION, "edgecolors": style.BLACK,
    "linewidths": 0.8,
}  # fmt: skip


def judgement_figure(judgement: JudgementLike, track: TrackLike, scene: Scene) -> Figure:
    """Draw the judgement of one tag's fixes.

    Parameters
    ----------
    judgement
        At least one fix, with predictions.
    track
        The filled track of the same tag.

    Returns
    -------
    matplotlib.figure.Figure
        Map with the mean path and the fixes, each flagged one joined to where the others place
        it; at its right p-values and distances against time. Flagged fixes differ in shape, size
        and colour.
    """
    table = judgement.table
    flagged = table["flagged"].to_numpy(bool)
    lonlat = table[["lon", "lat"]].to_numpy(float)
    frame = frame_of(track, lonlat[~flagged], scene.plane, None)
    size = frame.width / frame.height * _MAP_HEIGHT_IN + _PANEL_WIDTH_IN + _MARGINS_IN[0]
    height = _MAP_HEIGHT_IN + _MARGINS_IN[1]
    figure = style.new_figure(size, height, _title(judgement), track.fit_status)
    grid = figure.add_gridspec(2, 2, width_ratios=[size - _PANEL_WIDTH_IN, _PANEL_WIDTH_IN])
    map_axes = figure.add_subplot(grid[:, 0])
    p_axes = figure.add_subplot(grid[0, 1])
    offset_axes = figure.add_subplot(grid[1, 1], sharex=p_axes)
    hidden = _draw_map(map_axes, frame, table, track, scene)
    _draw_against_time(p_axes, offset_axes, judgement, track)
    _note_hidden(figure, hidden)
    style.legend_below(figure, (map_axes, p_axes, offset_axes), column_in=2.0)
    return figure


def _title(judgement: JudgementLike) -> str:
    count, flagged = len(judgement.table), int(judgement.table["flagged"].sum())
    return (
        f"Tag {judgement.tag}: each fix against all others; {flagged} of {count} "
        f"flagged (p below {judgement.flag_p_value:g})"
    )


def _draw_map(axes: Axes, frame: Frame, table: pd.DataFrame, track: TrackLike, scene: Scene) -> int:
    """Draw the map; return how many flagged fixes lie outside of it."""
    path, fixes, predicted = (
        scene.plane.to_plane(places.iloc[:, 0], places.iloc[:, 1])
        for places in (
            track.table[["lon", "lat"]],
            table[["lon", "lat"]],
            # A prediction that is no place on Earth has nothing to draw: it stays with its fix.
            table[["predicted_lon", "predicted_lat"]].fillna(
                {"predicted_lon": table["lon"], "predicted_lat": table["lat"]}
            ),
        )
    )
    flagged = table["flagged"].to_numpy(bool)
    draw_ground(axes, frame, scene, path)
    draw_path(axes, path, track.table["in_gap"].to_numpy(bool))
    if not flagged.all():
        marks = fix_marks(int((~flagged).sum()))
        axes.scatter(*fixes[~flagged].T, zorder=7, label="fix", **marks)
    _join(axes, predicted[flagged], fixes[flagged])
    _draw_flagged(axes, *fixes[flagged].T)
    draw_scale_bar(axes, frame, np.vstack([path, fixes]))
    return int((~frame.holds(fixes[flagged])).sum())


def _join(axes: Axes, predicted: Float[np.ndarray, "k 2"], fixes: Float[np.ndarray, "k 2"]) -> None:
    """Draw a line from where the others place each fix to the fix."""
    label = "to it from where the others place it"
    for ends in np.stack([predicted, fixes], axis=1):
        line = axes.plot(*ends.T, color=style.VERMILION, linewidth=1.0, zorder=6, label=label)[0]
        line.set(marker="o", markevery=[0], markersize=3.5, markerfacecolor="white")
        label = "_join"


def _draw_flagged(axes: Axes, x: Float[np.ndarray, " k"], y: Float[np.ndarray, " k"]) -> None:
    """Mark flagged fixes; a few are numbered in time order, so that panels can be compared."""
    if not len(x):
        return
    axes.scatter(x, y, zorder=9, label="flagged fix", **_FLAG_MARKS)
    if len(x) > NUMBERED_FIXES:
        return
    for number, at in enumerate(zip(x, y, strict=True), 1):
        text = axes.annotate(str(number), at, (5, 3), textcoords="offset points", fontsize=7.5)
        text.set(path_effects=HALO, zorder=10, annotation_clip=True, clip_on=True)


def _draw_against_time(
    p_axes: Axes, offset_axes: Axes, judgement: JudgementLike, track: TrackLike
) -> None:
    table = judgement.table
    time = days_since_1970(pd.DatetimeIndex(table["time"]))
    on_path = days_since_1970(pd.DatetimeIndex(track.table["time"]))
    flagged = table["flagged"].to_numpy(bool)
    p_value = np.maximum(table["p_value"].to_numpy(float), LEAST_P_VALUE)
    offset_km = np.maximum(table["offset_m"].to_numpy(float), LEAST_OFFSET_M) / 1000.0
    for axes, values in ((p_axes, p_value), (offset_axes, offset_km)):
        shade_gaps(axes, on_path, track.table["in_gap"].to_numpy(bool))
        axes.set_yscale("log")
        if not flagged.all():
            marks = fix_marks(int((~flagged).sum()))
            axes.scatter(time[~flagged], values[~flagged], zorder=4, **marks)
        _draw_flagged(axes, time[flagged], values[flagged])
    _dress_p_values(p_axes, p_value, judgement.flag_p_value)
    reach_km = _K95 * table["expected_sd_m"].to_numpy(float) / 1000.0
    offset_axes.plot(
        time,
        reach_km,
        "_",
        color=style.BLUE,
        markersize=5,
        zorder=3,
        label="95 % below if errors are normal",
    )
    offset_axes.set(title="Distance from where the others place it", ylabel="distance (km)")
    offset_axes.yaxis.set_major_formatter(FuncFormatter(lambda km, _: f"{km:g}"))
    share_time_axis(p_axes, offset_axes)
    margin = max(0.02 * (time[-1] - time[0]), 1 / 48)
    p_axes.set_xlim(time[0] - margin, time[-1] + margin)


def _dress_p_values(axes: Axes, p_value: Float[np.ndarray, " n"], limit: float) -> None:
    axes.axhline(
        limit, color=style.BLACK, linewidth=0.9, linestyle="--", zorder=2, label="flagged below"
    )
    axes.set_ylim(min(float(p_value.min()), 0.1 * limit) / 3.0, 3.0)
    axes.set(title="Probability of a fix at least as far off", ylabel="p-value")


def _note_hidden(figure: Figure, count: int) -> None:
    if count:
        text = f"{counted(count, 'flagged fix', 'flagged fixes')} beyond the map"
        height = style.FOOTER_IN / figure.get_figheight() / 2
        figure.text(0.988, height, text, ha="right", va="center", color=style.GREY, fontsize=7.5)
