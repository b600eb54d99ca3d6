"""One page a tag: a map, and longitude and latitude against time."""

import pandas as pd
from matplotlib.figure import Figure

from trackfit.counted import counted
from trackfit.report import style
from trackfit.report.map_panel import draw_map, frame_of
from trackfit.report.scene import FixPoints, Scene
from trackfit.report.time_panels import draw_time_panels
from trackfit.results.inputs import TrackLike

_MAP_HEIGHT_IN = 5.0
_PANEL_WIDTH_IN = 5.2
_MARGINS_IN = (1.1, 1.75)


def track_figure(
    track: TrackLike, fixes: pd.DataFrame, set_aside: pd.DataFrame, scene: Scene
) -> Figure:
    """Draw one tag.

    Parameters
    ----------
    track
        At least one position.
    fixes, set_aside
        This tag's fixes in use, and those set aside (cells as text); either may be empty.
    scene
        The plane, and what else the map shows.

    Returns
    -------
    matplotlib.figure.Figure
        Map with the mean path, its gaps dashed, drawn paths, a readable choice of 95 % ellipses
        and the fixes; at its right longitude and latitude with 50 and 95 % bands.
    """
    used, aside = FixPoints.used(fixes), FixPoints.set_aside(set_aside)
    frame = frame_of(track, used.lonlat, scene.plane, scene.colony_lonlat)
    size = frame.width / frame.height * _MAP_HEIGHT_IN + _PANEL_WIDTH_IN + _MARGINS_IN[0]
    height = _MAP_HEIGHT_IN + _MARGINS_IN[1]
    figure = style.new_figure(size, height, _title(track, used), track.fit_status)
    grid = figure.add_gridspec(2, 2, width_ratios=[size - _PANEL_WIDTH_IN, _PANEL_WIDTH_IN])
    map_axes = figure.add_subplot(grid[:, 0])
    lon_axes = figure.add_subplot(grid[0, 1])
    lat_axes = figure.add_subplot(grid[1, 1], sharex=lon_axes)
    hidden = draw_map(map_axes, frame, track, used.lonlat, aside.lonlat, scene)
    draw_time_panels(lon_axes, lat_axes, track, used, aside)
    _note_hidden(figure, hidden + len(set_aside) - len(aside.time))
    style.legend_below(figure, (map_axes, lat_axes), column_in=1.7)
    return figure


def _title(track: TrackLike, used: FixPoints) -> str:
    first, last = (track.table["time"].iloc[i].strftime("%Y-%m-%d %H:%M") for i in (0, -1))
    fixes = counted(len(used.time), "fix", "fixes")
    return f"Tag {track.tag}: {first} to {last} UTC, {fixes} in use"


def _note_hidden(figure: Figure, count: int) -> None:
    if count:
        text = f"{counted(count, 'fix', 'fixes')} set aside not shown on the map"
        height = style.FOOTER_IN / figure.get_figheight() / 2
        figure.text(0.988, height, text, ha="right", va="center", color=style.GREY, fontsize=7.5)
