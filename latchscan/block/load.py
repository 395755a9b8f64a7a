"""A block file, read and checked, as a frozen value; and where one is looked for."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from latchscan.block.check import BLOCK_FILE, validate_block
from latchscan.block.model import FORMAT, Block
from latchscan.errors import BlockError
from latchscan.technology import document
from latchscan.technology.document import Place, one_line, read_document, shown_text

SUFFIX = ".yaml"
TELLING_KEYS = frozenset({"supplies", "grounds", "pins", "joined", "leave_out"})
"""Keys of which any shows that a block file was meant."""
_ZIPPED = ".gz"


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadedBlock:
    """A block and the file it came from.

    Attributes
    ----------
    block
        The checked values.
    path
        The file that was read.
    sha256
        Checksum of the file's bytes, in hexadecimal.
    places
        Place of every key, and of every entry of a list, by its path.
    """

    block: Block
    path: Path
    sha256: str
    places: Mapping[document.Path, Place] = field(repr=False)

    def where(self, *key_path: str | int) -> str:
        """Place of a key as ``file:line:column``; of the nearest key above where it is absent.

        Parameters
        ----------
        key_path
            Keys, and numbers of list entries from 0, from the top of the file:
            ``where("pins", "OUT1", "supply")``.
        """
        path = key_path
        while path and path not in self.places:
            path = path[:-1]
        place = self.places.get(path, Place(1, 1))
        return f"{self.path}:{place.line}:{place.column}"


def find_block(layout_path: Path | str) -> Path | None:
    """Block file that stands beside a layout, None where there is none.

    Beside ``a/BLOCK.gds``, ``a/BLOCK.gds.gz``, ``a/BLOCK.oas`` and ``a/BLOCK.oas.gz`` that is
    ``a/BLOCK.yaml``.
    """
    layout = Path(layout_path)
    if layout.suffix.lower() == _ZIPPED:
        layout = layout.with_suffix("")
    if not layout.name:
        return None
    beside = layout.with_name(f"{layout.stem}{SUFFIX}")
    try:
        # A link that leads nowhere was meant; its reader says what is wrong with it.
        there = beside.exists() or beside.is_symlink()
    except (OSError, ValueError):
        return None
    return beside if there and beside != Path(layout_path) else None


def read_block_file(path: Path | str) -> tuple[Path, bytes]:
    """Path and bytes of a block file, unchecked.

    Raises
    ------
    BlockError
        If there is no such file or it cannot be read.
    """
    if not str(path):
        raise BlockError("block: expected a path, got nothing")
    given = Path(path)
    shown = one_line(str(path), 200)
    try:
        if not given.exists():
            raise BlockError(f"{shown}: no such block file; expected a path")
        if given.is_dir():
            raise BlockError(f"{shown}: is a directory; expected a block file")
        if not given.is_file():
            raise BlockError(f"{shown}: is not a regular file; expected a block file")
        with given.open("rb") as stream:
            # One byte more than allowed is enough for the check to see that it is too large.
            return given, stream.read(BLOCK_FILE.most_bytes + 1)
    except OSError as error:
        raise BlockError(f"{shown}: cannot be read: {error.strerror}") from error
    except ValueError as error:
        raise BlockError(f"{shown}: not a usable path; expected a file") from error


def load_block(path: Path | str) -> LoadedBlock:
    """Block read from a file, checked in full.

    Raises
    ------
    BlockError
        If the file is missing, unreadable or wrong; the message is the first problem with
        its place, and says how many more there are.
    """
    given, content = read_block_file(path)
    return _loaded(given, content)


def load_block_beside(layout_path: Path | str) -> LoadedBlock | None:
    """Block of the file that stands beside a layout, None where there is none.

    Raises
    ------
    BlockError
        If the file is wrong, or does not say that it is a block file but has keys of one:
        passing over it in silence would lose what it says.

    Notes
    -----
    A file without any key of a block file, such as a technology that bears the layout's name,
    is something else and is passed over.
    """
    found = find_block(layout_path)
    if found is None:
        return None
    path, content = read_block_file(found)
    data = read_document(content, BLOCK_FILE).data
    if isinstance(data, dict) and data.get("format") != FORMAT:
        if not TELLING_KEYS.intersection(data):
            return None
        kind = data.get("format")
        got = shown_text(kind) if isinstance(kind, str) else "none"
        raise BlockError(
            f"{path}: stands beside the layout but is no block file; expected the format"
            f" {FORMAT}, got {got}",
            hint="rename it, or give the block file with --block",
        )
    return _loaded(path, content)


def _loaded(path: Path, content: bytes) -> LoadedBlock:
    text, block, problems = validate_block(content, str(path))
    if block is None:
        first, more = problems[0], len(problems) - 1
        rest = f" (and {more} more problem{'s' if more > 1 else ''})" if more else ""
        raise BlockError(
            f"{first}{rest}", hint=f"`latchscan block check {path}` lists every problem"
        )
    return LoadedBlock(
        block=block,
        path=path,
        sha256=hashlib.sha256(content).hexdigest(),
        places={**text.values, **text.keys},
    )
