"""From raw fixes of tagged animals at sea to hourly positions with credible ellipses.

    study = trackfit.read_study("study.toml")
    prepared = trackfit.prepare(study)
    fits = trackfit.fit_tags(prepared)
    tracks = trackfit.fill_tracks(prepared, fits)
    trackfit.write_results("results", prepared, fits, tracks)

Everything public is named here and nowhere else; `docs/library.md` explains it. Modules are loaded
when a name is first used, so that importing trackfit costs nothing.
"""

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from trackfit.analysis import (
        Prepared,
        fill_tracks,
        fit_tags,
        parameter_table,
        preference_responses,
        prepare,
    )
    from trackfit.errors import CLASS_SD_M, ErrorRules
    from trackfit.faults import FixesError, LayerError, ResultsError, StudyError, TrackfitError
    from trackfit.fixes import Fixes, read_fixes
    from trackfit.frame import Plane
    from trackfit.inference.fit import Fit, FitStatus
    from trackfit.layers import Coast, Layer
    from trackfit.outputs import write_results
    from trackfit.paths import FilledTrack
    from trackfit.responses import Response
    from trackfit.results import Results, read_results, to_geodataframe, to_pandas, to_xarray
    from trackfit.study import Study, read_study

_WHERE = {
    "CLASS_SD_M": "errors",
    "Coast": "layers",
    "ErrorRules": "errors",
    "FilledTrack": "paths",
    "Fit": "inference.fit",
    "FitStatus": "inference.fit",
    "Fixes": "fixes",
    "FixesError": "faults",
    "Layer": "layers",
    "LayerError": "faults",
    "Plane": "frame",
    "Prepared": "analysis",
    "Response": "responses",
    "Results": "results",
    "ResultsError": "faults",
    "Study": "study",
    "StudyError": "faults",
    "TrackfitError": "faults",
    "fill_tracks": "analysis",
    "fit_tags": "analysis",
    "parameter_table": "analysis",
    "preference_responses": "analysis",
    "prepare": "analysis",
    "read_fixes": "fixes",
    "read_results": "results",
    "read_study": "study",
    "to_geodataframe": "results",
    "to_pandas": "results",
    "to_xarray": "results",
    "write_results": "outputs",
}

__all__ = [
    "CLASS_SD_M",
    "Coast",
    "ErrorRules",
    "FilledTrack",
    "Fit",
    "FitStatus",
    "Fixes",
    "FixesError",
    "Layer",
    "LayerError",
    "Plane",
    "Prepared",
    "Response",
    "Results",
    "ResultsError",
    "Study",
    "StudyError",
    "TrackfitError",
    "fill_tracks",
    "fit_tags",
    "parameter_table",
    "preference_responses",
    "prepare",
    "read_fixes",
    "read_results",
    "read_study",
    "to_geodataframe",
    "to_pandas",
    "to_xarray",
    "write_results",
]


def __getattr__(name: str) -> Any:
    """Load the module that holds a public name, at its first use."""
    if name in _WHERE:
        return getattr(importlib.import_module(f"trackfit.{_WHERE[name]}"), name)
    raise AttributeError(f"module 'trackfit' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
