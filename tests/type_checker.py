"""How annotations are checked at run time: a whole number will do where a float is asked."""

from collections.abc import Callable
from typing import Any

from beartype import BeartypeConf, beartype
from beartype.roar import BeartypeDecorHintPep673Exception

_check = beartype(conf=BeartypeConf(is_pep484_tower=True))


def checked(function: Callable[..., Any]) -> Callable[..., Any]:
    """Check calls of a function; methods that return `Self` need a whole class and go unchecked."""
    try:
        return _check(function)
    except BeartypeDecorHintPep673Exception:
        return function
