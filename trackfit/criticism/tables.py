"""A judged fit, a comparison and a trial by hidden fixes as tables: what the CSV files hold."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

import pandas as pd

from trackfit.criticism.compare import Compared
from trackfit.criticism.criticism import Criticism
from trackfit.criticism.error_sizes import ErrorSize
from trackfit.criticism.hidden_fixes import HeldOut, HoldOutTrial
from trackfit.criticism.residuals import Autocorrelation, Beside, Residuals
from trackfit.criticism.verdicts import Verdict
from trackfit.paths import times_utc

Row = Mapping[str, Any]


def judged_tables(
    criticisms: Sequence[Criticism], verdicts: Sequence[Verdict]
) -> dict[str, pd.DataFrame]:
    """Tables by the name of their file: the verdicts, and below `fit/` the numbers behind them."""
    judged = [c for c in criticisms if c.residuals is not None]
    return {
        "verdicts.csv": verdict_table(verdicts),
        "fit/measures.csv": measure_table(criticisms),
        "fit/error_sizes.csv": _table(_ERROR_SIZE, (r for c in judged for r in _sizes(c))),
        "fit/effects.csv": _table(_EFFECT, (r for c in judged for r in _effects(c))),
        "fit/correlations.csv": _table(_PAIR, (r for c in judged for r in _pairs(c))),
        "fit/residuals.csv": _stacked(_RESIDUAL, [_residuals(c) for c in judged]),
        "fit/quantiles.csv": _stacked(_QUANTILE, [_quantiles(c) for c in judged]),
        "fit/autocorrelation.csv": _stacked(_LAG, [t for c in judged for t in _lags(c)]),
    }


def _table(columns: Sequence[str], rows: Iterable[Row]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=list(columns))


def _stacked(columns: Sequence[str], parts: Sequence[pd.DataFrame]) -> pd.DataFrame:
    if not parts:
        return pd.DataFrame(columns=list(columns))
    return pd.concat(parts, ignore_index=True)[list(columns)]


def verdict_table(verdicts: Sequence[Verdict]) -> pd.DataFrame:
    """One row a verdict: tag, about, finding, concern, value, sentence."""
    columns = ("tag", "about", "finding", "concern", "value", "sentence")
    return _table(
        columns,
        (
            dict(
                zip(
                    columns,
                    (v.tag, v.about, v.finding.value, v.finding.concern, v.value, v.sentence),
                    strict=True,
                )
            )
            for v in verdicts
        ),
    )


def measure_table(criticisms: Sequence[Criticism]) -> pd.DataFrame:
    """One row a tag and number: tag, measure, value, and what to expect of it if the model is true.

    Scores stand alone; expectations are of residuals only.
    """
    columns = ("tag", "measure", "value", "expected", "lower95", "upper95", "p_value")
    return _table(columns, (row for c in criticisms for row in _measures(c)))


def _measures(criticism: Criticism) -> Iterator[Row]:
    scores = criticism.scores
    alone = {
        "fixes": scores.fixes,
        "estimated_parameters": scores.estimated,
        "log_marginal": scores.log_marginal,
        "aic": scores.aic,
        "aicc": scores.aicc,
        "leave_one_out_score": scores.leave_one_out,
    }
    for name, value in alone.items():
        yield {"tag": criticism.tag, "measure": name, "value": float(value)}
    for name, seen in _seen(criticism):
        yield {"tag": criticism.tag, "measure": name, **_beside(seen)}


def _seen(criticism: Criticism) -> Iterator[tuple[str, Beside]]:
    residuals = criticism.residuals
    if residuals is None:
        return
    yield "mean_square", residuals.mean_square
    yield "share_beyond_2", residuals.share_far
    yield "kurtosis", residuals.kurtosis
    yield "autocorrelation_lag_1", residuals.first_lag
    yield "autocorrelation_lags_1_to_5", residuals.early_lags
    size = criticism.error_size
    if size is None or size.freed is None:
        return
    assert criticism.first_lag is not None
    assert criticism.early_lags is not None
    yield "autocorrelation_lag_1_errors_freed", criticism.first_lag
    yield "autocorrelation_lags_1_to_5_errors_freed", criticism.early_lags


def _beside(seen: Beside) -> Row:
    return {
        "value": seen.value,
        "expected": seen.expected,
        "lower95": seen.lower95,
        "upper95": seen.upper95,
        "p_value": seen.p_value,
    }


_ERROR_SIZE = (
    "tag", "kind", "fixes", "factor", "lower95", "upper95", "p_value", "basis",
    "mean_square", "mean_square_expected", "mean_square_p_value",
)  # fmt: skip
ALL_KINDS = "all"


def _sizes(criticism: Criticism) -> Iterator[Row]:
    residuals, size = _needed(criticism), criticism.error_size
    if size is not None:
        yield {"tag": criticism.tag, "kind": ALL_KINDS, **_size(size, residuals)}
    for kind, of_kind in residuals.by_kind.items():
        yield {
            "tag": criticism.tag,
            "kind": kind,
            "fixes": of_kind.fixes,
            "factor": criticism.kind_factors[kind],
            "basis": "leave-one-out predictions held",
            **_mean_square(of_kind.mean_square),
        }


def _size(size: ErrorSize, residuals: Residuals) -> Row:
    return {
        "fixes": len(residuals.hours),
        "factor": size.factor,
        "lower95": size.lower95,
        "upper95": size.upper95,
        "p_value": size.p_value,
        "basis": size.basis.value,
        **_mean_square(residuals.mean_square),
    }


def _mean_square(seen: Beside) -> Row:
    return {
        "mean_square": seen.value,
        "mean_square_expected": seen.expected,
        "mean_square_p_value": seen.p_value,
    }


def _needed(criticism: Criticism) -> Residuals:
    assert criticism.residuals is not None
    return criticism.residuals


_EFFECT = ("tag", "term", "shape", "statistic", "degrees_of_freedom", "p_value", "best", "unit")


def _effects(criticism: Criticism) -> Iterator[Row]:
    for effect in criticism.effects:
        yield {
            "tag": criticism.tag,
            "term": effect.term,
            "shape": effect.shape,
            "statistic": effect.statistic,
            "degrees_of_freedom": len(effect.amplitudes),
            "p_value": effect.p_value,
            "best": effect.best,
            "unit": effect.unit,
        }


_PAIR = ("tag", "first", "second", "correlation")


def _pairs(criticism: Criticism) -> Iterator[Row]:
    for pair in criticism.correlations:
        values = (criticism.tag, pair.first, pair.second, pair.correlation)
        yield dict(zip(_PAIR, values, strict=True))


_RESIDUAL = ("tag", "time", "left_out_x", "left_out_y", "log_density", "ahead_x", "ahead_y")


def _residuals(criticism: Criticism) -> pd.DataFrame:
    residuals = _needed(criticism)
    return pd.DataFrame(
        {
            "tag": criticism.tag,
            "time": times_utc(residuals.hours),
            "left_out_x": residuals.left_out.residual[:, 0],
            "left_out_y": residuals.left_out.residual[:, 1],
            "log_density": residuals.left_out.log_density,
            "ahead_x": residuals.ahead.residual[:, 0],
            "ahead_y": residuals.ahead.residual[:, 1],
        }
    )


_QUANTILE = (
    "tag", "normal", "residual", "lower95", "upper95", "lower95_all", "upper95_all",
)  # fmt: skip


def _quantiles(criticism: Criticism) -> pd.DataFrame:
    quantiles = _needed(criticism).quantiles
    columns = {name: getattr(quantiles, name) for name in _QUANTILE[1:]}
    return pd.DataFrame(columns).assign(tag=criticism.tag)


_LAG = ("tag", "residuals", "lag", "value", "expected", "lower95", "upper95")


def _lags(criticism: Criticism) -> Iterator[pd.DataFrame]:
    residuals = _needed(criticism)
    for words, of in (("left out", residuals.of_left_out), ("ahead", residuals.of_ahead)):
        yield _lag_rows(of).assign(tag=criticism.tag, residuals=words)


def _lag_rows(of: Autocorrelation) -> pd.DataFrame:
    return pd.DataFrame({name: getattr(of, name) for name in _LAG[2:]})


_COMPARED = (
    "tag", "model", "motion", "status", "outcome", "fixes", "estimated_parameters",
    "log_marginal", "aic", "aicc", "leave_one_out_score", "aic_difference",
    "leave_one_out_difference", "difference_sd", "sentence",
)  # fmt: skip


def comparison_table(rows: Sequence[Compared]) -> pd.DataFrame:
    """One row a tag and model, the study's own first; differences are from that one."""
    return _table(_COMPARED, (_compared(row) for row in rows))


def _compared(row: Compared) -> Row:
    scores = row.scores
    of_scores = {} if scores is None else {
        "fixes": scores.fixes,
        "estimated_parameters": scores.estimated,
        "log_marginal": scores.log_marginal,
        "aic": scores.aic,
        "aicc": scores.aicc,
        "leave_one_out_score": scores.leave_one_out,
    }  # fmt: skip
    return {
        "tag": row.tag,
        "model": row.model,
        "motion": row.motion,
        "status": row.status.name,
        "outcome": row.outcome.value,
        **of_scores,
        "aic_difference": row.aic_difference,
        "leave_one_out_difference": row.leave_one_out_difference,
        "difference_sd": row.difference_sd,
        "sentence": row.sentence,
    }


_HELD_OUT = (
    "tag", "status", "kept", "hidden", "inside50", "sd50", "inside95", "sd95",
    "error_median_km", "error_95_km", "linear_median_km", "linear_95_km", "sentence",
)  # fmt: skip


def hold_out_table(trial: HoldOutTrial) -> pd.DataFrame:
    """One row a tag, and all tags together at the end."""
    return _table(_HELD_OUT, (_held_out(row) for row in (*trial.tags, trial.pooled)))


def _held_out(row: HeldOut) -> Row:
    values = {name: getattr(row, name) for name in _HELD_OUT}
    return {**values, "status": "" if row.status is None else row.status.name}
