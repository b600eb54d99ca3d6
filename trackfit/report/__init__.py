"""Figures of a study: one page a tag, and what the tags prefer."""

from trackfit.report.figures import figure_writers, file_stems
from trackfit.report.judgement_figure import judgement_figure
from trackfit.report.residual_figure import residual_figure
from trackfit.report.response_figure import (
    PathValues,
    ResponsePage,
    response_figure,
    response_pages,
)
from trackfit.report.scene import FixPoints, Scene
from trackfit.report.style import CAUTION, FIGURE_FORMATS, house_style, save_figure
from trackfit.report.track_figure import track_figure

__all__ = [
    "CAUTION",
    "FIGURE_FORMATS",
    "FixPoints",
    "PathValues",
    "ResponsePage",
    "Scene",
    "figure_writers",
    "file_stems",
    "house_style",
    "judgement_figure",
    "residual_figure",
    "response_figure",
    "response_pages",
    "save_figure",
    "track_figure",
]
