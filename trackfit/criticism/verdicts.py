"""What a judged fit comes to, in plain words: typed findings first, then their sentences.

A finding needs both a small chance and a size that matters: on a long track trifles are
distinguishable, and on a short one nothing is.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from enum import Enum

import numpy as np

from trackfit.counted import counted
from trackfit.criticism.criticism import DRIFT, Criticism, Effect, ParameterPair
from trackfit.criticism.error_sizes import Basis
from trackfit.criticism.residuals import Beside
from trackfit.inference.estimates import NORMAL_95

SMALL_CHANCE = 0.005
"""Two statistics judge the motion; together they raise a false alarm at most once in a hundred."""

TAIL_CHANCE = 0.01
LEAST_AUTOCORRELATION = 0.05
LEAST_FACTOR = 1.1
"""Error sizes off by less than a tenth change no track."""

VAGUE = 4.0
"""An interval of a factor whose ends differ by more than this times says nothing."""

LEAST_FIXES = 10
"""Residuals of fewer fixes are not judged."""

HEAVY_KURTOSIS = 0.5
"""Kurtosis must exceed what is expected by so much."""

STRONG_CORRELATION = 0.95

MOTION_FIRST = " The motion may be behind it: mend that first."


class Finding(Enum):
    """What is found; the value stands in the tables."""

    NOT_FITTED = "not fitted"
    NOT_CONVERGED = "not converged"
    ERRORS_AS_STATED = "errors as stated"
    ERRORS_TOO_SMALL = "stated errors too small"
    ERRORS_TOO_LARGE = "stated errors too large"
    TAILS_AS_EXPECTED = "tails as expected"
    TAILS_TOO_HEAVY = "tails heavier than modelled"
    MOTION_FITS = "motion fits"
    MOTION_TOO_ROUGH = "motion too rough"
    MOTION_TOO_SMOOTH = "motion too smooth"
    UNTOLD = "cannot be told"
    EFFECT = "effect found"
    NO_EFFECT = "no effect distinguishable"
    CORRELATED = "parameters correlated"

    @property
    def concern(self) -> bool:
        """Whether the finding asks for something to be done."""
        return self in _CONCERNS


_CONCERNS = frozenset(
    {
        Finding.NOT_FITTED,
        Finding.NOT_CONVERGED,
        Finding.ERRORS_TOO_SMALL,
        Finding.ERRORS_TOO_LARGE,
        Finding.TAILS_TOO_HEAVY,
        Finding.MOTION_TOO_ROUGH,
        Finding.MOTION_TOO_SMOOTH,
        Finding.CORRELATED,
    }
)


@dataclass(frozen=True)
class Verdict:
    """One finding about one tag.

    Attributes
    ----------
    about
        fit, errors, tails, motion, `preference.NAME`, `current.drift`, or two parameters.
    value
        The number behind it: a factor, a kurtosis, an autocorrelation, a p-value, a correlation.
    sentence
        What the user reads.
    """

    tag: str
    about: str
    finding: Finding
    value: float
    sentence: str


def verdicts_of(criticism: Criticism) -> list[Verdict]:
    """Put a judged fit into words; a fit that failed gets one verdict, that it did."""
    tag = criticism.tag
    if criticism.residuals is None or not criticism.status.ok:
        finding = Finding.NOT_FITTED if criticism.residuals is None else Finding.NOT_CONVERGED
        return [Verdict(tag, "fit", finding, float("nan"), criticism.status.sentence)]
    residuals = (_errors, _tails, _motion) if _enough(criticism) else (_too_little,)
    parts = (*residuals, _effects, _correlations)
    return [
        Verdict(tag, about, finding, value, sentence)
        for part in parts
        for about, finding, value, sentence in part(criticism)
    ]


Findings = Iterator[tuple[str, Finding, float, str]]


def _enough(criticism: Criticism) -> bool:
    """Whether there is something to be judged: enough fixes, and not all at one place."""
    residuals = criticism.residuals
    assert residuals is not None
    return criticism.scores.fixes >= LEAST_FIXES and not np.isnan(residuals.kurtosis.value)


def _too_little(criticism: Criticism) -> Findings:
    fixes = criticism.scores.fixes
    few = f"{counted(fixes, 'fix is', 'fixes are')} too few"
    why = few if fixes < LEAST_FIXES else "all fixes are at one place"
    sentence = f"Errors, tails and motion cannot be judged: {why}."
    yield "residuals", Finding.UNTOLD, float("nan"), sentence


_STATED = {
    "GPS": "GPS sds",
    "ellipse": "error ellipses",
    "default": "default sd (errors.default_sd_m)",
}


def _stated(kinds: Sequence[str]) -> str:
    if len(kinds) > 1:
        return "stated errors"
    return _STATED.get(kinds[0], f"sd of {kinds[0]}")


def _errors(criticism: Criticism) -> Findings:
    size, residuals = criticism.error_size, criticism.residuals
    assert residuals is not None
    if size is None:
        return
    words = _stated(list(residuals.by_kind))
    many = _many(words)
    small = size.p_value >= TAIL_CHANCE
    if small and size.upper95 > VAGUE * size.lower95:
        sentence = f"Whether the {words} {'are' if many else 'is'} right cannot be told."
        yield "errors", Finding.UNTOLD, size.factor, sentence
    elif small or max(size.factor, 1.0 / size.factor) < LEAST_FACTOR:
        verb = "fit" if many else "fits"
        yield "errors", Finding.ERRORS_AS_STATED, size.factor, f"The {words} {verb} the track."
    else:
        yield _error_factor(criticism, words, "look" if many else "looks")
    if len(residuals.by_kind) > 1:
        yield from _kinds(criticism)


def _plain(factor: float) -> str:
    return f"{factor:.0f}" if factor >= 10.0 else f"{factor:.2g}"


def _many(words: str) -> bool:
    return not words.startswith(("sd ", "default sd "))


def _error_factor(criticism: Criticism, words: str, look: str) -> tuple[str, Finding, float, str]:
    size = criticism.error_size
    assert size is not None
    low = size.factor > 1.0
    finding = Finding.ERRORS_TOO_SMALL if low else Finding.ERRORS_TOO_LARGE
    times = size.factor if low else 1.0 / size.factor
    ends = sorted((size.lower95, size.upper95) if low else (1 / size.upper95, 1 / size.lower95))
    sentence = f"The {words} {look} too {'small' if low else 'large'} by a factor of about "
    sentence += f"{_plain(times)} (95 %: {_plain(ends[0])} to {_plain(ends[1])})"
    if size.basis is Basis.ESTIMATED:
        sentence += "; the fit has allowed for it."
    elif size.basis is Basis.ONE_STEP:
        sentence += ', a rough estimate; set errors.scale = "estimated".'
    else:
        sentence += '; set errors.scale = "estimated".'
    if low and _heavy(criticism):
        sentence += " Far-off fixes may be behind it: see the tails first."
    if not low and _motion_finding(criticism)[0] is Finding.MOTION_TOO_ROUGH:
        sentence += MOTION_FIRST
    return "errors", finding, size.factor, sentence


def _kinds(criticism: Criticism) -> Findings:
    """Kinds of fixes that are off by more or less than stated, one by one."""
    residuals = criticism.residuals
    assert residuals is not None
    for kind, of_kind in residuals.by_kind.items():
        factor, seen = criticism.kind_factors[kind], of_kind.mean_square
        if not seen.p_value < TAIL_CHANCE or np.isnan(factor):
            continue
        if max(factor, 1.0 / factor) < LEAST_FACTOR or (factor > 1.0) != seen.high:
            continue
        words = _stated([kind])
        look = "look" if _many(words) else "looks"
        times, size = (factor, "small") if factor > 1.0 else (1.0 / factor, "large")
        finding = Finding.ERRORS_TOO_SMALL if factor > 1.0 else Finding.ERRORS_TOO_LARGE
        yield (
            f"errors of {kind}",
            finding,
            factor,
            f"By its {counted(of_kind.fixes, 'fix', 'fixes')} of this kind alone, the {words} "
            f"{look} too {size} by a factor of about {_plain(times)}.",
        )


def _heavy(criticism: Criticism) -> bool:
    residuals = criticism.residuals
    assert residuals is not None
    seen = residuals.kurtosis
    return seen.p_value < TAIL_CHANCE and seen.value > seen.expected + HEAVY_KURTOSIS


def _tails(criticism: Criticism) -> Findings:
    residuals = criticism.residuals
    assert residuals is not None
    far, seen = residuals.share_far, residuals.kurtosis
    seen_far, expected_far = (f"{100.0 * share:.1f} %" for share in (far.value, far.expected))
    beyond = f"{seen_far} of residuals lie beyond 2 ({expected_far} expected)"
    if not _heavy(criticism):
        words = f"There are no more far-off fixes than there should be: {beyond}."
        if far.p_value < TAIL_CHANCE:
            words = f"Tails are as they should be for the spread of the residuals; {beyond}."
        yield "tails", Finding.TAILS_AS_EXPECTED, seen.value, words
        return
    advice = (
        "look at the fixes that are flagged"
        if criticism.heavy
        else 'set errors.tails = "heavy", or look at the fixes that are flagged'
    )
    yield (
        "tails",
        Finding.TAILS_TOO_HEAVY,
        seen.value,
        f"Some fixes are further off than the errors allow (kurtosis {seen.value:.1f}, "
        f"{seen.expected:.1f} expected; {beyond}): {advice}."
        + (MOTION_FIRST if _motion_finding(criticism)[0] is Finding.MOTION_TOO_ROUGH else ""),
    )


def _motion_finding(criticism: Criticism) -> tuple[Finding, float]:
    """The finding about the motion and the autocorrelation behind it."""
    first, early = criticism.first_lag, criticism.early_lags
    assert first is not None
    assert early is not None
    telling = [b.value for b in (first, early) if _matters(b)]
    if not telling:
        return Finding.MOTION_FITS, first.value
    largest = max(telling, key=abs)
    return (Finding.MOTION_TOO_ROUGH if largest > 0.0 else Finding.MOTION_TOO_SMOOTH), largest


def _matters(seen: Beside) -> bool:
    return seen.p_value < SMALL_CHANCE and abs(seen.value) > LEAST_AUTOCORRELATION


_ROUGH = {
    "diffusive": "the animal keeps its heading longer than diffusive motion knows; try "
    'motion.kind = "persistent"',
    "persistent": "movement lasts longer than persistent motion knows; its pace may vary, or "
    "something that it follows is missing from the model",
}


def _motion(criticism: Criticism) -> Findings:
    finding, value = _motion_finding(criticism)
    if finding is Finding.MOTION_FITS:
        yield "motion", finding, value, "Residuals are not autocorrelated: the motion fits."
        return
    if finding is Finding.MOTION_TOO_ROUGH:
        why = f"the motion is too rough: {_ROUGH[criticism.motion]}"
    else:
        why = (
            "the motion is too smooth, or takes errors for movement: many a step is undone by "
            "the next"
        )
    yield "motion", finding, value, f"Residuals are autocorrelated ({value:+.2f}): {why}."


def _effects(criticism: Criticism) -> Findings:
    for effect in criticism.effects:
        if effect.shape == "drift":
            yield _drift(effect)
            continue
        about = f"preference.{effect.term}"
        if not effect.found:
            yield (
                about,
                Finding.NO_EFFECT,
                effect.p_value,
                f"The preference for {effect.term} is not distinguishable from none "
                f"({_chance(effect)}).",
            )
            continue
        yield about, Finding.EFFECT, effect.p_value, f"{_preferred(effect)} ({_chance(effect)})."


def _chance(effect: Effect) -> str:
    chance = "p < 0.001" if effect.p_value < 0.001 else f"p = {effect.p_value:.2g}"
    return f"all tags together: {chance}" if effect.shared else chance


def _preferred(effect: Effect) -> str:
    last, sd = float(effect.amplitudes[-1]), float(effect.sd[-1])
    if effect.shape == "linear":
        return f"{'More' if last > 0.0 else 'Less'} {effect.term} is preferred"
    if effect.shape == "distance":
        away = "is kept away from" if last > 0.0 else "is drawn to"
        return f"The animal {away} {effect.term}, at {abs(last):.2g} km/h"
    if effect.shape == "humped" and abs(last) > NORMAL_95 * sd:
        what = "best" if last < 0.0 else "least"
        unit = f" {effect.unit}" if effect.unit not in ("", "1") else ""
        return f"Of {effect.term}, values near {effect.best:.3g}{unit} are liked {what}"
    return f"The preference for {effect.term} is distinguishable from none"


def _drift(effect: Effect) -> tuple[str, Finding, float, str]:
    value, sd = float(effect.amplitudes[0]), float(effect.sd[0])
    wholly = abs(value - 1.0) < NORMAL_95 * sd
    finding = Finding.EFFECT if effect.found else Finding.NO_EFFECT
    if not effect.found:
        words = "The current's carrying is not distinguishable from none"
        words += ", nor from being carried wholly" if wholly else ""
    elif wholly:
        words = "The animal is carried by the current, as far as can be told wholly"
    else:
        words = f"The animal takes on {value:.2g} of the current's velocity"
    return DRIFT, finding, effect.p_value, f"{words} ({_chance(effect)})."


def _correlations(criticism: Criticism) -> Findings:
    for pair in criticism.correlations:
        if abs(pair.correlation) >= STRONG_CORRELATION:
            yield _pair(pair)


def _pair(pair: ParameterPair) -> tuple[str, Finding, float, str]:
    both = f"{pair.first} and {pair.second}"
    instead = "what they do together is known better than either"
    if both == "speed and persistence":
        instead = "the long-run diffusion they make is known better than either"
    sentence = f"{both} are strongly correlated ({pair.correlation:.2f}): {instead}."
    return both, Finding.CORRELATED, pair.correlation, sentence
