"""What a study file may say about trying its model: the tables ``[compare]`` and ``[hold_out]``."""

from trackfit.study_table import Table
from trackfit.study_values import setting


class Compare(Table):
    """Fit other models beside the study's own, and compare how well they foretell the fixes.

    Without this table nothing is compared by `fit` and `run`; `trackfit compare` compares in any
    case. The table is `comparison.csv`.
    """

    motions: bool = setting(
        True, "Fit the other kind of motion too: diffusive beside persistent, or the reverse."
    )
    terms: bool = setting(
        False,
        "Fit the study's model once more without each term of the preference, and without the "
        "current.",
    )


class HoldOut(Table):
    """Hide some fixes, fit without them, and see whether the filled track holds them.

    Without this table nothing is hidden. The results of the study itself are not touched: the
    trial is a fit of its own. Which fixes are hidden depends on `study.seed` and the tag's name.
    First and last fixes are never hidden. Tables are `hold_out.csv` and `hold_out_fixes.csv`.
    """

    share: float = setting(0.1, "Share of each tag's fixes to hide.", gt=0, le=0.5)
    block_hours: float | None = setting(
        None,
        "Hide all fixes within stretches of this length, to see how gaps are filled. Stretches "
        "begin at a fix chosen at random, and at least one fix is kept between two.",
        unit="hours",
        shown="single fixes, each at random",
        gt=0,
    )
