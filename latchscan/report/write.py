"""Write several output files whole or not at all.

Every file is first written beside its target under another name and flushed to the disk; only
when all of them are complete do they take the targets' places.  When a file cannot take its
place the ones that already did are put back, so old and new results never mix.
"""

from __future__ import annotations

import contextlib
import os
import shutil
from collections.abc import Mapping
from pathlib import Path

from latchscan.errors import OptionError, OutputError


def require_directory(out_dir: Path) -> None:
    """Make sure that `out_dir` is, or can become, a directory that takes files.

    Nothing is created, so that a scan that fails leaves no trace.

    Raises
    ------
    OptionError
        A file has that name, or the place is not writable.
    """
    place = out_dir
    try:
        while not place.exists() and place != place.parent:
            if place.is_symlink():
                raise OptionError(f"{place}: is a link to nothing; expected a directory")
            place = place.parent
        is_directory = place.is_dir()
    except OSError as error:
        raise OptionError(f"{out_dir}: {_reason(error)}; expected a directory") from error
    if not is_directory:
        raise OptionError(
            f"{place}: is not a directory; expected a directory for the results",
            hint="give another --out",
        )
    if not os.access(place, os.W_OK | os.X_OK):
        raise OptionError(
            f"{place}: no permission to write there; expected a writable directory",
            hint="give another --out",
        )


def write_all(out_dir: Path, contents: Mapping[str, bytes]) -> tuple[Path, ...]:
    """Write every file of `contents` into `out_dir`, or none.

    Parameters
    ----------
    out_dir
        Made with its parents when absent.
    contents
        File name -> bytes.

    Returns
    -------
    tuple of Path
        The files, in the order of `contents`.

    Raises
    ------
    OutputError
        Disk full, no permission, a directory in the place of a file; whatever was there
        before is still there, whole.
    """
    targets = [out_dir / name for name in contents]
    parts = [_beside(target, "part") for target in targets]
    current = out_dir
    try:
        out_dir.mkdir(parents=True, exist_ok=True)
        for current, part, content in zip(targets, parts, contents.values(), strict=True):
            if current.is_dir():
                raise OutputError(f"{current}: is a directory; expected a file or nothing there")
            _write_part(part, content)
        _replace_all(parts, targets)
        _flush_directory(out_dir)
    except OSError as error:
        raise OutputError(f"{current}: cannot be written: {_reason(error)}") from error
    finally:
        for part in parts:
            with contextlib.suppress(OSError):
                part.unlink(missing_ok=True)
    return tuple(targets)


def _beside(target: Path, suffix: str) -> Path:
    """A name in the target's directory that no other process uses."""
    return target.with_name(f".{target.name}.{os.getpid()}.{suffix}")


def _write_part(part: Path, content: bytes) -> None:
    """Write and flush one temporary file; the user's umask decides who may read it."""
    part.unlink(missing_ok=True)
    with part.open("xb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def _replace_all(parts: list[Path], targets: list[Path]) -> None:
    """Move every part to its target; put the old files back when one cannot be moved."""
    # a second name for each old file: at no moment is a target without a whole file
    olds = [_second_name(target) for target in targets]
    done = 0
    try:
        for part, target in zip(parts, targets, strict=True):
            part.replace(target)
            done += 1
    except BaseException:
        for target, old in zip(targets[:done], olds[:done], strict=True):
            with contextlib.suppress(OSError):
                if old is None:
                    target.unlink(missing_ok=True)
                else:
                    old.replace(target)
        raise
    finally:
        for old in olds:
            if old is not None:
                with contextlib.suppress(OSError):
                    old.unlink(missing_ok=True)


def _second_name(target: Path) -> Path | None:
    """Another name, or where links are not to be had a copy, of an existing target."""
    if not target.exists():
        return None
    old = _beside(target, "old")
    old.unlink(missing_ok=True)
    try:
        os.link(target, old)
    except OSError:
        shutil.copy2(target, old)
    return old


def _flush_directory(directory: Path) -> None:
    """Make the new names survive a power cut where the system can flush a directory."""
    flags = getattr(os, "O_DIRECTORY", None)
    if flags is None:
        return
    handle = os.open(directory, os.O_RDONLY | flags)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _reason(error: OSError) -> str:
    """The system's words for what went wrong, without errno or path."""
    return (error.strerror or str(error)).lower()
