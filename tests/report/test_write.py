"""Files appear whole or not at all, whatever the system refuses."""

from __future__ import annotations

import errno
import os
import resource
from pathlib import Path

import pytest

from latchscan.errors import OptionError, OutputError
from latchscan.report.write import require_directory, write_all

OLD = {"a.txt": b"old a", "b.txt": b"old b"}
NEW = {"a.txt": b"new a" * 10_000, "b.txt": b"new b", "c.txt": b"new c"}


def contents(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.is_file()}


@pytest.fixture(name="folder")
def _folder(tmp_path: Path) -> Path:
    folder = tmp_path / "deep" / "out"
    assert write_all(folder, OLD) == (folder / "a.txt", folder / "b.txt")
    return folder


def test_new_files_replace_old_ones_and_nothing_else_is_left(folder: Path) -> None:
    write_all(folder, NEW)
    assert contents(folder) == NEW


def test_files_obey_the_umask(tmp_path: Path) -> None:
    before = os.umask(0o027)
    try:
        (path,) = write_all(tmp_path, {"a.txt": b""})
    finally:
        os.umask(before)
    assert path.stat().st_mode & 0o777 == 0o640


def test_a_full_disk_leaves_the_old_files(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    calls = []

    def full(handle: int) -> None:
        calls.append(handle)
        if len(calls) == 2:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OutputError, match=r"b\.txt: cannot be written: no space left"):
        write_all(folder, NEW)
    assert contents(folder) == OLD


def test_a_file_that_cannot_take_its_place_puts_the_others_back(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = Path.replace

    def refuse(self: Path, target: Path) -> Path:
        if target.name == "c.txt":
            raise OSError(errno.EACCES, os.strerror(errno.EACCES))
        return real(self, target)

    monkeypatch.setattr(Path, "replace", refuse)
    with pytest.raises(OutputError, match="permission denied"):
        write_all(folder, NEW)
    assert contents(folder) == OLD


def test_a_directory_in_the_place_of_a_file_is_reported(folder: Path) -> None:
    (folder / "c.txt").mkdir()
    with pytest.raises(OutputError, match="is a directory"):
        write_all(folder, NEW)
    assert contents(folder) == OLD


def test_a_file_size_limit_of_the_system_leaves_the_old_files(folder: Path) -> None:
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (1000, hard))
    try:
        with pytest.raises(OutputError, match=r"a\.txt: cannot be written: file too large"):
            write_all(folder, NEW)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert contents(folder) == OLD


def test_a_place_where_nothing_can_be_made_is_one_clear_error() -> None:
    # a directory of the kernel where no file can be made, for root either
    with pytest.raises(OutputError, match="cannot be written"):
        write_all(Path("/proc/self/out"), NEW)


def test_a_place_for_results_is_checked_without_making_it(tmp_path: Path) -> None:
    require_directory(tmp_path / "not" / "yet" / "there")
    assert list(tmp_path.iterdir()) == []
    occupied = tmp_path / "file"
    occupied.write_text("")
    for place in (occupied, occupied / "below"):
        with pytest.raises(OptionError, match="not a directory"):
            require_directory(place)
    link = tmp_path / "link"
    link.symlink_to(tmp_path / "nowhere")
    with pytest.raises(OptionError, match="link to nothing"):
        require_directory(link)
    with pytest.raises(OptionError, match="too long"):
        require_directory(tmp_path / ("x" * 5000))
