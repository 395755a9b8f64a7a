"""A technology file by path or by shipped name, read and checked, as a frozen value."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path

from latchscan.errors import TechnologyError
from latchscan.technology.check import validate
from latchscan.technology.document import MAX_BYTES, one_line
from latchscan.technology.model import Technology

SUFFIX = ".yaml"
_PACKAGE = Path(__file__).resolve().parent.parent
_SHIPPED_FOLDERS = (_PACKAGE / "shipped" / "techfiles", _PACKAGE.parent / "techfiles")
"""Inside an installed wheel, and beside the package in a clone or an editable install."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadedTechnology:
    """A technology and the file it came from.

    Attributes
    ----------
    technology
        The checked values.
    name_or_path
        What the user asked for.
    path
        The file that was read.
    sha256
        Checksum of the file's bytes, in hexadecimal.
    """

    technology: Technology
    name_or_path: str
    path: Path
    sha256: str


def shipped_technologies() -> tuple[str, ...]:
    """Names of the technologies that come with latchscan, sorted."""
    names = {file.stem for folder in _SHIPPED_FOLDERS for file in folder.glob(f"*{SUFFIX}")}
    return tuple(sorted(names))


def find_technology(path_or_name: str | Path) -> Path:
    """File of a technology given by path or, where no such path exists, by shipped name.

    Raises
    ------
    TechnologyError
        If neither exists; the hint names the shipped technologies.
    """
    asked = str(path_or_name)
    if not asked:
        raise TechnologyError("technology: expected a path or a shipped name, got nothing")
    given = Path(asked)
    try:
        if given.exists():
            return given
    except (OSError, ValueError) as error:
        shown = one_line(asked)
        raise TechnologyError(f"{shown}: not a usable path; expected a file") from error
    if asked in shipped_technologies():
        candidates = (folder / f"{asked}{SUFFIX}" for folder in _SHIPPED_FOLDERS)
        return next(file for file in candidates if file.exists())
    raise TechnologyError(
        f"{one_line(asked)}: no such technology file; expected a path or a shipped name",
        hint=f"shipped technologies: {', '.join(shipped_technologies()) or 'none'}",
    )


def read_technology_file(path_or_name: str | Path) -> tuple[Path, bytes]:
    """Path and bytes of a technology file, unchecked.

    Raises
    ------
    TechnologyError
        If there is no such file or it cannot be read.
    """
    path = find_technology(path_or_name)
    if path.is_dir():
        raise TechnologyError(f"{path}: is a directory; expected a technology file")
    if not path.is_file():
        raise TechnologyError(f"{path}: is not a regular file; expected a technology file")
    try:
        with path.open("rb") as stream:
            # One byte more than allowed is enough for the check to see that it is too large.
            return path, stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise TechnologyError(f"{path}: cannot be read: {error.strerror}") from error


def load_technology(path_or_name: str | Path) -> LoadedTechnology:
    """Technology read from a file, checked in full.

    Parameters
    ----------
    path_or_name
        An existing path, or the name of a shipped technology such as ``larch180``.

    Raises
    ------
    TechnologyError
        If the file is missing, unreadable or wrong; the message is the first problem with
        its place, and says how many more there are.
    """
    path, content = read_technology_file(path_or_name)
    technology, problems = validate(content, str(path))
    if technology is None:
        first, more = problems[0], len(problems) - 1
        rest = f" (and {more} more problem{'s' if more > 1 else ''})" if more else ""
        raise TechnologyError(
            f"{first}{rest}", hint=f"`latchscan tech check {path}` lists every problem"
        )
    return LoadedTechnology(
        technology=technology,
        name_or_path=str(path_or_name),
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
    )
