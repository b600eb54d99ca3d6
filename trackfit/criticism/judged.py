"""All that is found out about a study's fits: criticism, verdicts, comparison, hidden fixes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass

from trackfit.analysis import Prepared, TagProgress
from trackfit.criticism.compare import Compared, compare_models
from trackfit.criticism.criticism import Criticism, criticise_fits
from trackfit.criticism.hidden_fixes import HoldOutTrial, hold_out
from trackfit.criticism.verdicts import Verdict, verdicts_of
from trackfit.inference.fit import Fit
from trackfit.study_trials import Compare


@dataclass(frozen=True)
class Judged:
    """What is found out about the fits of a study.

    Attributes
    ----------
    criticisms, verdicts
        Of every tag: numbers, and what they come to in words.
    comparison
        Other models beside the study's own; empty where none was asked for.
    trial
        Hidden fixes foretold; None where none were hidden.
    """

    criticisms: tuple[Criticism, ...]
    verdicts: tuple[Verdict, ...]
    comparison: tuple[Compared, ...] = ()
    trial: HoldOutTrial | None = None

    def of(self, tag: str) -> list[Verdict]:
        """The verdicts on one tag."""
        return [verdict for verdict in self.verdicts if verdict.tag == tag]

    def for_record(self) -> dict[str, object]:
        """The findings as the record of a run holds them."""
        found: dict[str, object] = {
            "tags": {
                c.tag: {
                    "scores": asdict(c.scores),
                    "verdicts": [
                        {"about": v.about, "finding": v.finding, "value": v.value,
                         "sentence": v.sentence}
                        for v in self.of(c.tag)
                    ],
                }
                for c in self.criticisms
            }
        }  # fmt: skip
        if self.comparison:
            found["comparison"] = [asdict(row) for row in self.comparison]
        if self.trial is not None:
            found["hold_out"] = {
                "tags": {row.tag: asdict(row) for row in self.trial.tags},
                "all_tags": asdict(self.trial.pooled),
            }
        return found


def judge_fits(
    prepared: Prepared,
    fits: Sequence[Fit],
    *,
    compare: Compare | None = None,
    progress: TagProgress = lambda tag, done, message: None,
) -> Judged:
    """Criticise every fit, and do what the study asks in `[compare]` and `[hold_out]`.

    Parameters
    ----------
    fits
        Of all tags of the study (`fit_tags`).
    compare
        What to compare, in place of the study's own table.

    Raises
    ------
    LayerError
        A path fitted for the comparison leaves the area of a layer that its model uses.
    """
    wanted, hidden = compare or prepared.study.compare, prepared.study.hold_out
    criticisms = criticise_fits(prepared, fits)
    comparison: list[Compared] = []
    if wanted is not None:
        comparison = compare_models(
            prepared, fits, motions=wanted.motions, terms=wanted.terms, progress=progress
        )
    trial = None
    if hidden is not None:
        trial = hold_out(
            prepared, share=hidden.share, block_hours=hidden.block_hours, progress=progress
        )
    return Judged(
        criticisms=tuple(criticisms),
        verdicts=tuple(v for c in criticisms for v in verdicts_of(c)),
        comparison=tuple(comparison),
        trial=trial,
    )
