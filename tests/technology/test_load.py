"""Loading by path and by shipped name, and every way in which it can fail."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path

import pytest

from latchscan.errors import TechnologyError
from latchscan.technology import load
from latchscan.technology.load import load_technology, read_technology_file, shipped_technologies


@pytest.fixture
def larch_file(repository: Path) -> Path:
    return repository / "techfiles" / "larch180.yaml"


def test_by_path(larch_file: Path) -> None:
    loaded = load_technology(larch_file)
    assert loaded.technology.name == "larch180"
    assert loaded.name_or_path == str(larch_file)
    assert loaded.sha256 == hashlib.sha256(larch_file.read_bytes()).hexdigest()


def test_by_shipped_name(larch_file: Path) -> None:
    loaded = load_technology("larch180")
    assert loaded.technology == load_technology(larch_file).technology
    assert loaded.path == larch_file
    assert loaded.name_or_path == "larch180"


def test_a_path_goes_before_a_shipped_name(
    larch_file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    own = larch_file.read_text().replace("name: larch180", "name: own")
    (tmp_path / "larch180").write_text(own)
    monkeypatch.chdir(tmp_path)
    assert load_technology("larch180").technology.name == "own"


def test_shipped_names_come_from_the_installed_package_too(
    larch_file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An installed wheel carries the files inside the package and has no repository."""
    inside = tmp_path / "shipped" / "techfiles"
    inside.mkdir(parents=True)
    (inside / "larch180.yaml").write_bytes(larch_file.read_bytes())
    monkeypatch.setattr(load, "_SHIPPED_FOLDERS", (inside, tmp_path / "absent"))
    assert shipped_technologies() == ("larch180",)
    assert load_technology("larch180").path == inside / "larch180.yaml"


def test_shipped_names() -> None:
    assert shipped_technologies() == ("larch180", "open130")


def test_unknown_name_lists_the_shipped_ones() -> None:
    with pytest.raises(TechnologyError) as caught:
        load_technology("spruce90")
    assert caught.value.message.startswith("spruce90: no such technology file")
    assert caught.value.hint == "shipped technologies: larch180, open130"


def test_first_problem_and_how_many_more(larch_file: Path, tmp_path: Path) -> None:
    wrong = tmp_path / "wrong.yaml"
    text = larch_file.read_text()
    line = text[: text.index("supply_v: 1.8")].count("\n") + 1
    wrong.write_text(text.replace("supply_v: 1.8", "supply_v: 1e0"))
    with pytest.raises(TechnologyError) as one:
        load_technology(wrong)
    place = f"{wrong}:{line}:13"
    what = "loop.supply_v: 1e0 is text to a YAML parser, expected 1.0e+0"
    assert one.value.message == f"{place}: {what}"
    assert one.value.hint == f"`latchscan tech check {wrong}` lists every problem"
    wrong.write_text(wrong.read_text().replace("max_gain: 1.0", "max_gain: 0"))
    with pytest.raises(TechnologyError) as two:
        load_technology(wrong)
    assert two.value.message == f"{place}: {what} (and 1 more problem)"
    wrong.write_text(wrong.read_text().replace("max_um: 6.0", "max_um: 0"))
    with pytest.raises(TechnologyError, match=r"\(and 2 more problems\)"):
        load_technology(wrong)


@pytest.mark.parametrize("asked", ["", ".", "a\x00b", "x" * 5000])
def test_names_that_no_file_can_have(asked: str) -> None:
    with pytest.raises(TechnologyError) as caught:
        load_technology(asked)
    assert "\n" not in caught.value.message
    assert caught.value.message.isprintable()


def test_directory(tmp_path: Path) -> None:
    with pytest.raises(TechnologyError, match="is a directory"):
        load_technology(tmp_path)


def test_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(TechnologyError, match="not a regular file"):
        load_technology(tmp_path / "pipe")


def test_unreadable_file(larch_file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The refusal is raised here because a superuser may read every file."""

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.raises(TechnologyError, match="cannot be read: Permission denied"):
        load_technology(larch_file)


def test_large_file_is_not_read_whole(tmp_path: Path) -> None:
    large = tmp_path / "large.yaml"
    with large.open("wb") as stream:
        stream.truncate(10**9)
    assert len(read_technology_file(large)[1]) == 250_001
    with pytest.raises(TechnologyError, match="larger than 250000 bytes"):
        load_technology(large)
