"""How a command can end."""

from enum import IntEnum


class ExitCode(IntEnum):
    """Exit codes of every command, with what each means."""

    meaning: str

    def __new__(cls, code: int, meaning: str) -> "ExitCode":
        """Join a number and its meaning."""
        member = int.__new__(cls, code)
        member._value_ = code
        member.meaning = meaning
        return member

    DONE = 0, "done"
    WRONG = 1, "the data or the study is wrong"
    USAGE = 2, "the command was not understood"
    NOT_CONVERGED = 3, "a fit did not converge"
    INTERRUPTED = 130, "interrupted"


EXIT_CODES = "\b\nExit codes:\n" + "\n".join(f"  {code:>3}  {code.meaning}" for code in ExitCode)
"""The list as the help shows it; the leading mark keeps click from filling the lines."""
