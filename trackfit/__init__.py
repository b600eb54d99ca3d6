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
        fix_judgements,
        parameter_table,
        preference_responses,
        prepare,
    )
    from trackfit.criticism.compare import Compared, compare_models
    from trackfit.criticism.criticism import Criticism, criticise_fits
    from trackfit.criticism.hidden_fixes import HoldOutTrial, hold_out
    from trackfit.criticism.judged import Judged, judge_fits
    from trackfit.criticism.verdicts import Verdict, verdicts_of
    from trackfit.errors import CLASS_SD_M, ErrorRules
    from trackfit.faults import FixesError, LayerError, ResultsError, StudyError, TrackfitError
    from trackfit.fixes import Fixes, read_fixes
    from trackfit.frame import Plane
    from trackfit.inference.fit import Fit, FitStatus
    from trackfit.judgement import FixJudgement
    from trackfit.layers import Coast, Layer
    from trackfit.outputs import write_results
    from trackfit.paths import FilledTrack
    from trackfit.responses import Response
    from trackfit.results import Results, read_results, to_geodataframe, to_pandas, to_xarray
    from trackfit.study import Study, read_study

_WHERE = {
    "CLASS_SD_M": "errors",
    "Coast": "layers",
    "Compared": "criticism.compare",
    "Criticism": "criticism.criticism",
    "ErrorRules": "errors",
    "FilledTrack": "paths",
    "Fit": "inference.fit",
    "FitStatus": "inference.fit",
    "FixJudgement": "judgement",
    "Fixes": "fixes",
    "FixesError": "faults",
    "HoldOutTrial": "criticism.hidden_fixes",
    "Judged": "criticism.judged",
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
    "Verdict": "criticism.verdicts",
    "compare_models": "criticism.compare",
    "criticise_fits": "criticism.criticism",
    "fill_tracks": "analysis",
    "fit_tags": "analysis",
    "fix_judgements": "analysis",
    "hold_out": "criticism.hidden_fixes",
    "judge_fits": "criticism.judged",
    "parameter_table": "analysis",
    "preference_responses": "analysis",
    "prepare": "analysis",
    "read_fixes": "fixes",
    "read_results": "results",
    "read_study": "study",
    "to_geodataframe": "results",
    "to_pandas": "results",
    "to_xarray": "results",
    "verdicts_of": "criticism.verdicts",
    "write_results": "outputs",
}

__all__ = [
    "CLASS_SD_M",
    "Coast",
    "Compared",
    "Criticism",
    "ErrorRules",
    "FilledTrack",
    "Fit",
    "FitStatus",
    "FixJudgement",
    "Fixes",
    "FixesError",
    "HoldOutTrial",
    "Judged",
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
    "Verdict",
    "compare_models",
    "criticise_fits",
    "fill_tracks",
    "fit_tags",
    "fix_judgements",
    "hold_out",
    "judge_fits",
    "parameter_table",
    "preference_responses",
    "prepare",
    "read_fixes",
    "read_results",
    "read_study",
    "to_geodataframe",
    "to_pandas",
    "to_xarray",
    "verdicts_of",
    "write_results",
]


def __getattr__(name: str) -> Any:
    """Load the module that holds a public name, at its first use."""
    if name in _WHERE:
        return getattr(importlib.import_module(f"trackfit.{_WHERE[name]}"), name)
    raise AttributeError(f"module 'trackfit' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
