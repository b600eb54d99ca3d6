"""Models of the same fixes compared: the study's own, the other motion, and it less each term.

Two scores, for they can differ: Akaike's criterion from the marginal likelihood, and the sum of the
leave-one-out log predictive densities. Every model is fitted to the same fixes with the same
errors, so that both can be set side by side.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from enum import Enum

import numpy as np
from jaxtyping import Float

from trackfit.analysis import Prepared, TagProgress, fit_tags, used_layers
from trackfit.criticism.criticism import Scores, scores_of
from trackfit.inference.fit import Fit, FitStatus
from trackfit.inference.leave_one_out import leave_one_out
from trackfit.model import MOTIONS, build_model
from trackfit.study import Study

ALIKE_AIC = 2.0
"""Models whose criteria differ by less have both substantial support (Burnham & Anderson 2002,
section 2.6)."""

ALIKE_SD = 2.0
"""Leave-one-out scores that differ by fewer standard deviations are not told apart."""


class Outcome(Enum):
    """How a model does beside the study's own."""

    OWN = "the study's own"
    BETTER = "better"
    WORSE = "worse"
    ALIKE = "not told apart"
    DIVIDED = "the scores disagree"
    NOT_FITTED = "not fitted"


@dataclass(frozen=True)
class Compared:
    """One model of one tag beside the study's own.

    Attributes
    ----------
    model
        "as in the study", "persistent motion", "without depth" and the like.
    scores
        None where the fit failed.
    aic_difference
        Criterion less that of the study's own model: below zero speaks for this one.
    leave_one_out_difference, difference_sd
        Score less that of the study's own model, above zero speaks for this one; its standard
        deviation by the scatter of the differences from fix to fix.
    """

    tag: str
    model: str
    motion: str
    status: FitStatus
    outcome: Outcome
    scores: Scores | None
    aic_difference: float
    leave_one_out_difference: float
    difference_sd: float
    sentence: str


@dataclass(frozen=True)
class Variant:
    """A model to try: its name, how its sentence begins, and the study that asks for it."""

    model: str
    words: str
    study: Study


OWN_MODEL = "as in the study"


def variants(study: Study, *, motions: bool, terms: bool) -> Iterator[Variant]:
    """The models to try beside the study's own."""
    if motions:
        for kind in MOTIONS:
            if kind != study.motion.kind:
                motion = study.motion.model_copy(update={"kind": kind})
                other = study.model_copy(update={"motion": motion})
                yield Variant(f"{kind} motion", f"With {kind} motion", other)
    if terms:
        for term in study.preference:
            rest = tuple(p for p in study.preference if p is not term)
            less = study.model_copy(update={"preference": rest})
            yield Variant(f"without {term.term}", f"Without {term.term}", less)
        if study.current is not None:
            less = study.model_copy(update={"current": None})
            yield Variant("without the current", "Without the current", less)


def compare_models(
    prepared: Prepared,
    fits: Sequence[Fit],
    *,
    motions: bool = True,
    terms: bool = False,
    progress: TagProgress = lambda tag, done, message: None,
) -> list[Compared]:
    """Fit other models to every tag and compare them with the study's own.

    Parameters
    ----------
    fits
        The study's own, of all its tags (`fit_tags`).
    motions, terms
        Try the other motion; leave out every term in turn.

    Raises
    ------
    LayerError
        A fitted path leaves the area of a layer that its model uses.
    """
    rows = {fit.tag: [_own(fit)] for fit in fits}
    for variant in variants(prepared.study, motions=motions, terms=terms):
        for own, fit in zip(fits, _fitted(prepared, variant, progress), strict=True):
            rows[own.tag].append(_beside(own, fit, variant))
    return [row for fit in fits for row in rows[fit.tag]]


def _fitted(prepared: Prepared, variant: Variant, progress: TagProgress) -> list[Fit]:
    """Fit a variant; scores rest on the mode, so no weighted points are laid."""
    plain = variant.study.fit.model_copy(update={"points": 0, "step_check": False})
    study = variant.study.model_copy(update={"fit": plain})
    layers = used_layers(study, prepared.layers)
    changed = replace(prepared, study=study, model=build_model(study, layers, prepared.plane))

    def tell(tag: str, done: float, message: str) -> None:
        progress(f"{tag}, {variant.model}", done, message)

    return fit_tags(changed, tell)


def _own(fit: Fit) -> Compared:
    nan = float("nan")
    zero = nan if fit.states is None else 0.0
    sentence = "The study's own model." if fit.status.ok else fit.status.sentence
    return Compared(
        tag=fit.tag,
        model=OWN_MODEL,
        motion=fit.model.motion.name,
        status=fit.status,
        outcome=Outcome.OWN,
        scores=_scores(fit),
        aic_difference=zero,
        leave_one_out_difference=zero,
        difference_sd=zero,
        sentence=sentence,
    )


def _densities(fit: Fit) -> Float[np.ndarray, " fixes"]:
    assert fit.states is not None
    return leave_one_out(fit.states.approximation).log_density


def _scores(fit: Fit) -> Scores | None:
    return None if fit.states is None else scores_of(fit, float(_densities(fit).sum()))


def _beside(own: Fit, fit: Fit, variant: Variant) -> Compared:
    mine, others = _scores(own), _scores(fit)
    aic = gain = sd = float("nan")
    outcome = Outcome.NOT_FITTED
    if mine is not None and others is not None:
        difference = _densities(fit) - _densities(own)
        aic, gain, sd = others.aic - mine.aic, float(difference.sum()), sum_sd(difference)
        if own.status.ok and fit.status.ok:
            outcome = _outcome(aic, gain, sd)
    return Compared(
        tag=fit.tag,
        model=variant.model,
        motion=fit.model.motion.name,
        status=fit.status,
        outcome=outcome,
        scores=others,
        aic_difference=aic,
        leave_one_out_difference=gain,
        difference_sd=sd,
        sentence=_sentence(variant, own, fit, outcome, aic, gain, sd),
    )


def _outcome(aic: float, gain: float, sd: float) -> Outcome:
    """Both scores have a say: one that is silent leaves it to the other."""
    by_aic = 0 if abs(aic) < ALIKE_AIC else -int(np.sign(aic))
    by_gain = 0 if abs(gain) <= ALIKE_SD * sd else int(np.sign(gain))
    if by_aic * by_gain < 0:
        return Outcome.DIVIDED
    return {0: Outcome.ALIKE, 1: Outcome.BETTER, -1: Outcome.WORSE}[by_aic or by_gain]


_WORDS = {
    Outcome.BETTER: "the track is described better",
    Outcome.WORSE: "the track is described worse",
    Outcome.ALIKE: "the track is described as well: the two are not told apart",
    Outcome.DIVIDED: "the scores disagree: the two are not told apart for sure",
}


def _sentence(
    variant: Variant, own: Fit, fit: Fit, outcome: Outcome, aic: float, gain: float, sd: float
) -> str:
    if outcome is Outcome.NOT_FITTED:
        failed = fit if own.status.ok else own
        return f"{variant.words}: no comparison. {failed.status.sentence}"
    return (
        f"{variant.words} {_WORDS[outcome]} (AIC {_signed(aic, 'higher', 'lower')}, "
        f"leave-one-out score {_signed(gain, 'higher', 'lower')}, give or take {sd:.1f})."
    )


def _signed(value: float, above: str, below: str) -> str:
    return f"{abs(value):.1f} {above if value >= 0.0 else below}"


def sum_sd(values: Float[np.ndarray, " n"]) -> float:
    """Standard deviation of the sum of a series whose neighbours are not independent.

    n [c_0 + 2 sum_l (1 - l/(L + 1)) c_l] with autocovariances c_l up to L = 4 (n/100)^(2/9) (Newey
    & West 1987, Econometrica 55:703; 1994, Rev. Econ. Stud. 61:631).
    """
    n = len(values)
    apart = values - values.mean()
    lags = min(int(4.0 * (n / 100.0) ** (2.0 / 9.0)), n - 1)
    total = float(apart @ apart)
    for lag in range(1, lags + 1):
        total += 2.0 * (1.0 - lag / (lags + 1.0)) * float(apart[lag:] @ apart[:-lag])
    return float(np.sqrt(max(total, 0.0)))
