"""One thing that is wrong with a technology file."""

from __future__ import annotations

from dataclasses import dataclass

from latchscan.technology.document import Path, Place, one_line


@dataclass(frozen=True, slots=True, kw_only=True, order=True)
class Problem:
    """Something wrong, where it stands and what was expected.

    Attributes
    ----------
    file_name
        Name of the file as the user gave it.
    line, column
        Place in the file, both from 1.
    key
        Keys from the top of the file, joined by dots; a list's entries count from 0.
    message
        What is wrong and what was expected.
    """

    file_name: str
    line: int
    column: int
    key: str
    message: str

    def __str__(self) -> str:
        """Return the problem as one line: ``file:line:column: key: message``."""
        where = f"{self.file_name}:{self.line}:{self.column}: "
        return f"{where}{self.key}: {self.message}" if self.key else f"{where}{self.message}"


def problem_at(place: Place, path: Path, message: str, file_name: str) -> Problem:
    """Problem of the value at a path."""
    return Problem(
        file_name=file_name,
        line=place.line,
        column=place.column,
        key=dotted(path),
        message=message,
    )


def dotted(path: Path) -> str:
    """Path as one word.

    Examples
    --------
    >>> dotted(("substrate", "layers", 0, "thickness_um"))
    'substrate.layers[0].thickness_um'
    """
    parts = [f"[{part}]" if isinstance(part, int) else f".{one_line(part)}" for part in path]
    return "".join(parts).removeprefix(".")
