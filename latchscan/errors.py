"""Every error latchscan raises on purpose, and the exit status each one means.

Messages follow one pattern: ``<where>: <what is wrong>; expected ..., got ...`` plus an
optional hint, so that the command line can print them as they are.
"""

from __future__ import annotations


class LatchscanError(Exception):
    """Base of all errors with a message for the user.

    Parameters
    ----------
    message
        One line: where, what is wrong, what was expected.
    hint
        One line saying what the user can do about it; may be empty.
    """

    exit_status = 2

    def __init__(self, message: str, *, hint: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.hint = hint

    def __reduce__(self) -> tuple[object, ...]:
        """Keep the hint when an error travels back from a worker process."""
        return (_rebuild, (type(self), self.message, self.hint))


def _rebuild(kind: type[LatchscanError], message: str, hint: str) -> LatchscanError:
    return kind(message, hint=hint)


class InputError(LatchscanError):
    """Something the user gave is wrong and the user can mend it (exit status 2)."""


class LayoutError(InputError):
    """The layout file cannot be read or does not hold what the technology needs."""


class TechnologyError(InputError):
    """The technology file is wrong."""


class BlockError(InputError):
    """The block file is wrong."""


class OptionError(InputError):
    """A command-line option is wrong or contradicts the layout."""


class OutputError(LatchscanError):
    """A result could not be written (exit status 2)."""


class AnalysisError(LatchscanError):
    """No trustworthy answer could be computed (exit status 3)."""

    exit_status = 3


class GeometryError(AnalysisError):
    """Geometry that the measures or the solver cannot take."""


class ResolutionError(AnalysisError):
    """The discretisation cannot resolve what was asked."""


class ConvergenceError(AnalysisError):
    """A solution failed its own residual or balance check."""
