"""How many of a thing, in words: one fix is no "1 fixes"."""


def counted(count: int, one: str, many: str | None = None) -> str:
    """Return a number with its noun.

    Examples
    --------
    >>> counted(1, "row"), counted(3, "row"), counted(2, "fix", "fixes")
    ('1 row', '3 rows', '2 fixes')
    """
    return f"{count} {one if count == 1 else many or one + 's'}"
