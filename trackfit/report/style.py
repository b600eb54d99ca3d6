"""How every figure looks: colours, sizes, the footer, the way to a file.

Colours are from the set of Okabe and Ito (2008, "Color Universal Design"), chosen so that their
greys differ, too; line styles and marker shapes carry the same distinctions.
"""

from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import PathCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from trackfit.results.inputs import StatusLike

BLUE = "#0072B2"
ORANGE = "#E69F00"
VERMILION = "#D55E00"
GREEN = "#009E73"
BLACK = "#1A1A1A"
GREY = "#6E6E6E"
FIX_EDGE = "#5C3D00"
LAND = "#DDD8CC"
SHORE = "#8C8577"
GAP = "#E6E6E6"
CONTOUR = "#86A3B3"
CYCLE = ((BLUE, "-"), (VERMILION, "--"), (BLACK, "-."), (GREEN, ":"))
"""Colour and line style of the first, second, ... tag in one panel."""

CAUTION = "Not for navigation. Exact positions of protected species are sensitive: share with care."
FIGURE_FORMATS = ("png", "svg", "pdf")
DOTS_PER_INCH = 160
FOOTER_IN = 0.28
_NO_DATE: dict[str, dict[str, Any]] = {
    "png": {},
    "svg": {"Date": None},
    "pdf": {"CreationDate": None},
}
_SETTINGS: dict[Any, Any] = {
    "font.family": "sans-serif",
    "font.size": 8.5,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.labelsize": 8.5,
    "axes.edgecolor": GREY,
    "axes.linewidth": 0.7,
    "axes.grid": True,
    "axes.axisbelow": True,
    "grid.color": "#EFEFEF",
    "grid.linewidth": 0.6,
    "xtick.color": GREY,
    "ytick.color": GREY,
    "xtick.labelcolor": BLACK,
    "ytick.labelcolor": BLACK,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.fontsize": 8,
    "legend.frameon": False,
    "figure.titlesize": 11.5,
    "figure.titleweight": "bold",
    "svg.hashsalt": "trackfit",
}


@contextmanager
def house_style() -> Iterator[None]:
    """Use the house style inside the block, whatever the user's own settings are."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_SETTINGS)
        yield


def new_figure(
    width_in: float, height_in: float, title: str, status: StatusLike | None = None
) -> Figure:
    """Return an empty figure with its title and its footer; call inside `house_style`.

    A fit that failed is told below the title.
    """
    failed = status is not None and not status.ok
    if status is not None and failed:
        title += f"\nFit status {status.name}: not to be relied on"
    share = FOOTER_IN / height_in
    figure = Figure(figsize=(width_in, height_in), facecolor="white")
    FigureCanvasAgg(figure)
    figure.set_layout_engine("constrained", rect=(0.005, share, 0.99, 1 - share - 0.005))
    colour = VERMILION if failed else BLACK
    figure.suptitle(as_plain_text(title), x=0.012, ha="left", color=colour)
    figure.text(0.012, share / 2, CAUTION, ha="left", va="center", color=GREY, fontsize=7.5)
    return figure


def legend_below(
    figure: Figure, axes: Iterable[Axes], column_in: float, heading: str | None = None
) -> None:
    """List what the axes label, each text once, between the panels and the footer."""
    handles: dict[str, Any] = {}
    for one in axes:
        for handle, text in zip(*one.get_legend_handles_labels(), strict=True):
            handles.setdefault(text, handle)
    width, height = figure.get_size_inches()
    legend = figure.legend(
        list(handles.values()),
        list(handles),
        loc="lower center",
        bbox_to_anchor=(0.5, FOOTER_IN / height),
        borderaxespad=0,
        ncols=min(len(handles), max(3, int(width / column_in))),
        title=heading,
        title_fontsize=8,
    )
    for shown in legend.legend_handles:
        if isinstance(shown, Line2D) and (shown.get_alpha() or 1) < 0.6:
            shown.set(alpha=0.8, linewidth=0.9)
        if isinstance(shown, PathCollection) and shown.get_sizes()[0] < 14:
            shown.set(sizes=[14], alpha=0.9)
    _keep_clear_below(figure, legend)


def words_below(figure: Figure, words: str) -> None:
    """Write a line between the panels and the footer."""
    at = FOOTER_IN / figure.get_figheight()
    line = figure.text(0.5, at, words, ha="center", va="bottom", color=GREY, fontsize=8)
    _keep_clear_below(figure, line)


def _keep_clear_below(figure: Figure, artist: Artist) -> None:
    """End the panels above an artist that stands on the footer."""
    top = artist.get_window_extent(FigureCanvasAgg(figure).get_renderer()).y1
    share = top / figure.bbox.height + 0.05 / figure.get_figheight()
    figure.set_layout_engine("constrained", rect=(0.005, share, 0.99, 1 - share - 0.005))


def with_unit(name: str, unit: str) -> str:
    """Return a label as people write units: degC as °C, m^2 as m².

    Examples
    --------
    >>> with_unit("temperature", "degC"), with_unit("slope", "1"), with_unit("area", "km^2")
    ('temperature (°C)', 'slope', 'area (km²)')
    """
    if unit in ("", "1", "none"):
        return as_plain_text(name)
    for written, shown in _UNITS:
        unit = unit.replace(written, shown)
    return as_plain_text(f"{name} ({unit})")


_UNITS = (
    ("degC", "°C"),
    ("degree_Celsius", "°C"),
    ("^2", "²"),
    ("^3", "³"),
)


def as_plain_text(text: str) -> str:
    """Return a text that a figure shows as it is: a dollar sign starts no formula."""
    return text.replace("$", r"\$")


def save_figure(draw: Callable[[], Figure], path: Path) -> None:
    """Draw a figure in the house style and write it; the suffix of the path is the format.

    No date is written into it: equal figures give equal PNG files.
    """
    kind = path.suffix.removeprefix(".")
    with house_style():
        draw().savefig(path, format=kind, dpi=DOTS_PER_INCH, metadata=_NO_DATE.get(kind))
