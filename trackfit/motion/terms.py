"""What the terms of a preference are called, in tables and figures."""

from typing import NamedTuple


class TermName(NamedTuple):
    """The words for one term: its name, its layer (or "distance"), and the unit of its values."""

    term: str
    layer: str
    unit: str
