"""The one family of errors that a user of trackfit can meet.

A message names the thing, where it stands (file, line or key), the rule and the value, and what to
do next. The command line turns each class into an exit code; nothing else may reach a user.
"""


class TrackfitError(Exception):
    """Something in the study or its data breaks a rule; the message says what and where."""


class StudyError(TrackfitError):
    """The study file asks for something unknown, impossible or contradictory."""


class FixesError(TrackfitError):
    """A table of fixes cannot be read or used."""


class LayerError(TrackfitError):
    """A layer or a coast cannot be read, or does not cover what the study needs of it."""


class ResultsError(TrackfitError):
    """Results cannot be written or read back."""
