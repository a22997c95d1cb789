"""What can go wrong, in the words in which a person is told."""

from collections.abc import Sequence


class MonitordError(Exception):
    """Base of all errors that are reported in one line; `str()` is that line."""


class ConfigError(MonitordError):
    """The settings are wrong. Holds every problem found, one line each."""

    def __init__(self, problems: Sequence[str]) -> None:
        super().__init__("\n".join(problems))
        self.problems = tuple(problems)


class SourceLost(MonitordError):
    """A source cannot deliver (any more): what, where, and what would be right."""


class RecordingError(MonitordError):
    """A recording is missing, damaged or not what it says it is."""
