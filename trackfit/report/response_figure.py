"""What the tags prefer: h against each layer, with its 95 % band."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from jaxtyping import Float
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from trackfit.report import style
from trackfit.responses import ALL_TAGS
from trackfit.results.inputs import ResponseLike

TAGS_IN_ONE_PANEL = len(style.CYCLE)
"""Up to so many tags share a panel; more get a panel each."""
PANELS_A_PAGE = 20
_RUG_MARKS = 150
_PANEL_IN = (3.1, 2.5)
_COLUMNS = 4

PathValues = Mapping[tuple[str, str], Float[np.ndarray, " n"]]
"""Values of a layer along a path, by (tag, term)."""


@dataclass(frozen=True)
class ResponsePage:
    """One page of responses.

    Attributes
    ----------
    panels
        The panels, each with its responses.
    term
        The term that all panels share; empty where each has its own.
    part
        Which part of the pages alike: ("page2",), or () for the only one.
    alike
        All responses that share the axis of the preference, be they on other pages.
    """

    panels: Sequence[Sequence[ResponseLike]]
    term: str = ""
    part: tuple[str, ...] = ()
    alike: Sequence[ResponseLike] = ()


def response_pages(responses: Sequence[ResponseLike]) -> list[ResponsePage]:
    """Share responses out to pages.

    Few tags: one page, one panel a term, all tags in it. Many tags: pages of one term each, one
    panel a tag, at most `PANELS_A_PAGE`, all with the same axis of the preference.
    """
    terms = list(dict.fromkeys(r.term for r in responses))
    by_term = {term: [r for r in responses if r.term == term] for term in terms}
    if not terms:
        return []
    if max(len(group) for group in by_term.values()) <= TAGS_IN_ONE_PANEL:
        return _paged(list(by_term.values()))
    return [
        page
        for term, group in by_term.items()
        for page in _paged([[r] for r in group], term, group)
    ]


def _paged(
    panels: list[list[ResponseLike]], term: str = "", alike: Sequence[ResponseLike] = ()
) -> list[ResponsePage]:
    starts = range(0, len(panels), PANELS_A_PAGE)
    parts = [()] if len(starts) == 1 else [(f"page{k}",) for k in range(1, len(starts) + 1)]
    return [
        ResponsePage(panels[start : start + PANELS_A_PAGE], term, part, alike)
        for start, part in zip(starts, parts, strict=True)
    ]


def response_figure(
    panels: Sequence[Sequence[ResponseLike]],
    on_path: PathValues | None = None,
    *,
    alike: Sequence[ResponseLike] = (),
) -> Figure:
    """Draw one page of responses.

    Parameters
    ----------
    panels
        One or more panels; the responses of a panel share term, layer and unit.
    on_path
        Layer values along the paths: a rug at the foot of the panel shows where data were.
    alike
        Responses that set the axis of the preference for all panels; each sets its own if none.
        Fits that failed do not count where others converged.
    """
    rows = -(-len(panels) // _COLUMNS)
    columns = -(-len(panels) // rows)
    alone = len({r.term for panel in panels for r in panel}) == 1 and len(panels) > 1
    tags = {r.tag for panel in panels for r in panel} - {ALL_TAGS}
    whose = f" of tag {next(iter(tags))}" if len(tags) == 1 else ""
    title = f"Preference: {panels[0][0].term}" if alone else f"Preferences{whose}"
    width = max(columns * _PANEL_IN[0], 6.2) + 0.3
    figure = style.new_figure(width, rows * _PANEL_IN[1] + 0.95, title)
    cells = figure.subplots(rows, columns, squeeze=False).ravel()
    for axes, panel in zip(cells, panels, strict=False):
        _draw_panel(axes, panel, on_path or {}, _reach(alike or panel))
        axes.set_title(style.as_plain_text(_whose(panel[0]) if alone else panel[0].term))
    for axes in cells[len(panels) :]:
        axes.remove()
    _legend(figure, list(cells[: len(panels)]))
    return figure


def _whose(response: ResponseLike) -> str:
    """The tag, and how its fit ended where it failed."""
    failed = "" if response.fit_status.ok else f" ({response.fit_status.name})"
    return f"tag {response.tag}{failed}"


def _reach(responses: Sequence[ResponseLike]) -> tuple[float, float]:
    """Lowest and highest edge of the bands."""
    trusted = [r for r in responses if r.fit_status.ok] or responses
    low = min(float(np.min(r.lower95)) for r in trusted)
    return low, max(float(np.max(r.upper95)) for r in trusted)


def _draw_panel(
    axes: Axes, panel: Sequence[ResponseLike], on_path: PathValues, reach: tuple[float, float]
) -> None:
    low, high = reach
    room = 0.06 * (high - low or 1.0)
    foot = low - (2 + len(panel)) * room
    axes.set_ylim(foot, high + room)
    axes.axhline(0, color=style.GREY, linewidth=0.6, zorder=1)
    for number, response in enumerate(panel):
        colour, line = style.CYCLE[number % len(style.CYCLE)]
        tag = style.as_plain_text(_whose(response).removeprefix("tag "))
        band = axes.fill_between(response.at, response.lower95, response.upper95, color=colour)
        band.set(alpha=0.18, linewidth=0, zorder=2)
        axes.plot(response.at, response.h, color=colour, linestyle=line, label=tag, zorder=3)
        _rug(axes, on_path.get((response.tag, response.term)), foot + (number + 1) * room, colour)
    axes.set_xlabel(style.with_unit(panel[0].layer, panel[0].unit))
    axes.set_ylabel("preference h (km\N{SUPERSCRIPT TWO}/h)")
    axes.xaxis.set_major_locator(MaxNLocator(5))
    axes.yaxis.set_major_locator(MaxNLocator(6))


def _rug(axes: Axes, values: Float[np.ndarray, " n"] | None, height: float, colour: str) -> None:
    """Mark the values met on the path; of very many, evenly chosen ranks."""
    if values is None or not len(values):
        return
    ranks = np.sort(values[np.isfinite(values)])
    chosen = np.unique(np.linspace(0, len(ranks) - 1, min(len(ranks), _RUG_MARKS)).astype(int))
    at = np.full(len(chosen), height)
    axes.plot(ranks[chosen], at, "|", color=colour, markersize=4.5, alpha=0.45, zorder=2)


def _legend(figure: Figure, cells: Sequence[Axes]) -> None:
    """List every tag once, and say in words what line, band and marks are."""
    many = any(len(axes.get_legend_handles_labels()[1]) > 1 for axes in cells)
    words = "line: estimate; band: 95 %; marks at the foot: values met on the path"
    if many:
        style.legend_below(figure, cells, column_in=1.5, heading=words)
    else:
        style.words_below(figure, words)
