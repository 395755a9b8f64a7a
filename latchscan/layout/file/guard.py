"""Open any file as a layout and survive it: unpacking, the reading child, its deaths.

The parent never touches the file with a layout library.  It looks at the first bytes,
unpacks gzip within a stated limit, starts `latchscan.layout.file.reading` in a process of its own
and turns whatever becomes of that process into tables or one clear error.
"""

from __future__ import annotations

import errno
import gzip
import hashlib
import json
import os
import signal
import stat
import subprocess
import sys
import tempfile
import zlib
from pathlib import Path
from typing import IO

from latchscan.errors import LayoutError
from latchscan.layout.file.tables import Pair, TablesFolder

LARGEST_UNPACKED_BYTES = 4 << 30
"""Largest size a gzipped layout may unpack to."""
MEMORY_BASE_BYTES = 3 << 30
MEMORY_PER_FILE_BYTE = 60
"""Memory the reading child may take: a base and so much for each byte of the file."""
SECONDS_BASE = 60.0
SECONDS_PER_MEGABYTE = 2.0
"""Time the reading child may take."""
PIECE_BYTES = 1 << 20
GZIP_MAGIC = b"\x1f\x8b"
OASIS_MAGIC = b"%SEMI-OASIS\r\n"
GDSII_HEADER = b"\x00\x06\x00\x02"
NO_ROOM_ERRORS = (errno.ENOSPC, errno.EFBIG, errno.EDQUOT)
HINT = "latchscan reads GDSII and OASIS files, either of them gzipped"


def file_sha256(path: Path) -> str:
    """SHA-256 of a file's bytes; a `LayoutError` where the file cannot be read."""
    digest = hashlib.sha256()
    try:
        # a pipe or a device may never end
        if not stat.S_ISREG(path.stat().st_mode) and not path.is_dir():
            raise LayoutError(f"{path}: this is not a regular file", hint=HINT)
        with path.open("rb") as stream:
            while piece := stream.read(PIECE_BYTES):
                digest.update(piece)
    except OSError as error:
        raise LayoutError(f"{path}: {_reason(error)}", hint=HINT) from None
    return digest.hexdigest()


def _reason(error: OSError) -> str:
    if isinstance(error, FileNotFoundError):
        return "there is no such file"
    if isinstance(error, IsADirectoryError):
        return "this is a directory; expected a layout file"
    if isinstance(error, PermissionError):
        return "no permission to read this file"
    if error.errno in NO_ROOM_ERRORS:
        return f"no room to work on it in {tempfile.gettempdir()}: {error.strerror}"
    return f"cannot be read: {error.strerror or error}"


def read_layout(path: Path, *, shape_pairs: list[Pair], text_pairs: list[Pair]) -> TablesFolder:
    """Read a GDSII or OASIS file, gzipped or not, in a guarded child process.

    The tables are left in a folder of their own, see `load_tables`.

    Parameters
    ----------
    path
        The file.
    shape_pairs, text_pairs
        The layer/datatype pairs of shapes and layer/texttype pairs of texts to keep.

    Raises
    ------
    LayoutError
        If the file cannot be read, is of another kind, damaged, or too large unpacked.
    """
    try:
        with tempfile.TemporaryDirectory(prefix="latchscan-") as folder:
            plain = _unpacked(path, Path(folder))
            job: dict[str, object] = {
                "path": str(plain.resolve()),
                "kind": _kind(path, plain),
                "shape_pairs": shape_pairs,
                "text_pairs": text_pairs,
            }
            return _read_in_child(path, job, Path(folder), plain.stat().st_size)
    except OSError as error:
        raise LayoutError(f"{path}: {_reason(error)}", hint=HINT) from None


def _unpacked(path: Path, folder: Path) -> Path:
    with path.open("rb") as stream:
        if stream.read(2) != GZIP_MAGIC:
            return path
    target = folder / "layout"
    try:
        with gzip.open(path, "rb") as packed, target.open("wb") as plain:
            _copy_limited(path, packed, plain)
    except (EOFError, zlib.error, gzip.BadGzipFile) as error:
        raise LayoutError(f"{path}: the gzip data is damaged or cut short ({error})") from None
    return target


def _copy_limited(path: Path, packed: gzip.GzipFile, plain: IO[bytes]) -> None:
    size = 0
    while piece := packed.read(PIECE_BYTES):
        if size == 0:
            # a bomb of anything else than a layout is refused before it unfolds
            _kind_of_bytes(path, piece)
        size += len(piece)
        if size > LARGEST_UNPACKED_BYTES:
            raise LayoutError(
                f"{path}: the gzip data unpacks to more than"
                f" {LARGEST_UNPACKED_BYTES / (1 << 30):.3g} GiB",
                hint="unpack the file yourself if it is meant to be that large",
            )
        plain.write(piece)


def _kind(path: Path, plain: Path) -> str:
    with plain.open("rb") as stream:
        return _kind_of_bytes(path, stream.read(len(OASIS_MAGIC)))


def _kind_of_bytes(path: Path, start: bytes) -> str:
    if not start:
        raise LayoutError(f"{path}: the file is empty", hint=HINT)
    if start.startswith(OASIS_MAGIC):
        return "oasis"
    if start.startswith(GDSII_HEADER):
        return "gdsii"
    if start[:2] == GZIP_MAGIC:
        raise LayoutError(f"{path}: this is gzipped twice; expected a layout inside", hint=HINT)
    raise LayoutError(f"{path}: this is neither a GDSII nor an OASIS file", hint=HINT)


def _read_in_child(path: Path, job: dict[str, object], folder: Path, size: int) -> TablesFolder:
    out = TablesFolder()
    try:
        job["out"] = str(out.path)
        job["memory_bytes"] = MEMORY_BASE_BYTES + MEMORY_PER_FILE_BYTE * size
        _run_child(path, job, folder, SECONDS_BASE + SECONDS_PER_MEGABYTE * size / 1e6)
    except BaseException:
        out.remove()
        raise
    return out


def _run_child(path: Path, job: dict[str, object], folder: Path, seconds: float) -> None:
    order = folder / "job.json"
    order.write_text(json.dumps(job), encoding="utf-8")
    try:
        done = subprocess.run(
            [sys.executable, "-P", "-m", "latchscan.layout.file.reading", str(order)],
            stdin=subprocess.DEVNULL,
            capture_output=True,
            env={
                **os.environ,
                "PYTHONPATH": os.pathsep.join(_import_paths()),
                # no linear algebra there: starting its threads would be most of the start
                "OPENBLAS_NUM_THREADS": "1",
            },
            timeout=seconds,
            check=False,
        )
    except subprocess.TimeoutExpired:
        raise LayoutError(f"{path}: reading did not end within {seconds:.0f} s") from None
    except OSError as error:
        # about this program, not about the file
        raise LayoutError(f"{path}: its reader could not be started: {error.strerror}") from None
    if done.returncode != 0:
        raise LayoutError(f"{path}: {_death(done)}", hint=HINT)


def _import_paths() -> list[str]:
    """Where the child finds this package and what it needs, however they were found here."""
    return [str(Path(entry or ".").resolve()) for entry in sys.path]


def _death(done: subprocess.CompletedProcess[bytes]) -> str:
    said = done.stdout.decode("utf-8", "replace").strip()
    if done.returncode == 3 and said:
        return f"the file is damaged or not as the format wants it: {said}"
    if done.returncode == 4:
        return f"no room for what was read in {tempfile.gettempdir()}: {said}"
    if done.returncode < 0:
        name = signal.Signals(-done.returncode).name
        return f"the file is damaged: the reader was ended by {name}"
    lines = done.stderr.decode("utf-8", "replace").strip().splitlines()
    reason = lines[-1] if lines else f"status {done.returncode}"
    return f"the file cannot be read: {reason}"
