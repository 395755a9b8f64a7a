"""Broken, hostile and wrong layout files: one clear error or a normal result, never more."""

from __future__ import annotations

import gzip
import os
import random
import zlib
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import gdsii_records as gds
import gdstk
import pytest
from reference_layouts import technology_of

from latchscan.errors import LayoutError
from latchscan.layout.file import guard
from latchscan.layout.source import open_layout

PAIR = (1, 0)
SQUARE = gds.boundary(1, 0, 0, 0, 9, 0, 9, 9, 0, 9, 0, 0)


def complete(path: Path, error: LayoutError) -> str:
    """The error's line after checking that it is fit for a user."""
    assert error.exit_status == 2
    assert "\n" not in error.message
    assert "Traceback" not in error.message
    assert str(path) in error.message or "window" in error.message
    return error.message


def outcome(path: Path) -> str:
    """The error's one line, or "" after everything a scan asks of a layout went well."""
    try:
        source = open_layout(path, technology=technology_of(one="1/0", labels=("3/0",)))
        source.total_polygons([PAIR])
        source.repeat_pitch_dbu()
        x0, y0, x1, y1 = source.bbox_dbu
        middle = ((x0 + x1) // 2, (y0 + y1) // 2)
        source.window((middle[0], middle[1], middle[0] + 1_000, middle[1] + 1_000), [PAIR])
        source.labels([(3, 0)])
    except LayoutError as error:
        return complete(path, error)
    return ""


def written(path: Path, data: bytes) -> Path:
    path.write_bytes(data)
    return path


def sound(path: Path) -> bytes:
    """A small layout with every kind of element."""
    library = gdstk.Library()
    leaf = library.new_cell("leaf")
    for step in range(6):
        leaf.add(gdstk.rectangle((step, 0), (step + 0.5, 2), layer=1))
    leaf.add(gdstk.FlexPath([(0, 0), (5, 0), (5, 5)], 0.4, ends="extended", simple_path=True,
                            layer=1))  # fmt: skip
    leaf.add(gdstk.Label("pin", (1, 1), layer=3))
    top = library.new_cell("top")
    top.add(gdstk.Reference(leaf, (1, 2), rotation=0.3, columns=3, rows=4, spacing=(40, 20)))
    top.add(gdstk.Reference(leaf, (100, 2), magnification=2, x_reflection=True))
    (library.write_oas if path.suffix == ".oas" else library.write_gds)(str(path))
    return path.read_bytes()


def outcomes(folder: Path, suffix: str, cases: list[bytes]) -> list[str]:
    paths = [written(folder / f"case{i}{suffix}", data) for i, data in enumerate(cases)]
    with ThreadPoolExecutor(max_workers=2) as pool:
        return list(pool.map(outcome, paths))


@pytest.mark.parametrize("packed", [False, True])
def test_a_truncated_stream_is_always_refused(tmp_path, packed):
    data = sound(tmp_path / "sound.gds")
    data = gzip.compress(data) if packed else data
    cuts = [*range(1, len(data) - 1, len(data) // 8), len(data) - 1, len(data) - 4]
    # the last record has no data: without it the library has no end
    said = outcomes(tmp_path, ".gds", [data[:cut] for cut in cuts])
    assert all(said), [cut for cut, line in zip(cuts, said, strict=True) if not line]


@pytest.mark.parametrize(("suffix", "count"), [(".gds", 30), (".oas", 18)])
def test_random_damage_never_gets_further_than_an_error(tmp_path, suffix, count):
    data = sound(tmp_path / f"sound{suffix}")
    chance = random.Random(1)
    cases = []
    for _ in range(count):
        damaged = bytearray(data)
        for _ in range(chance.choice([1, 1, 2, 6])):
            damaged[chance.randrange(len(damaged))] = chance.randrange(256)
        cases.append(bytes(damaged))
    said = outcomes(tmp_path, suffix, cases)
    # some damage must be seen and some must be harmless, or the test tests nothing
    assert 0 < sum(bool(line) for line in said) < count


def test_a_reader_that_dies_by_a_signal_is_an_error(tmp_path, monkeypatch):
    path = written(tmp_path / "fatal.gds", gds.library(gds.cell("top", SQUARE)))
    real = guard.subprocess.run

    def run(command, **options):
        code = "import os, signal; os.kill(os.getpid(), signal.SIGSEGV)"
        return real([command[0], "-c", code], **options)

    monkeypatch.setattr(guard.subprocess, "run", run)
    assert "ended by SIGSEGV" in outcome(path)


def test_a_reader_that_never_ends_is_stopped(tmp_path, monkeypatch):
    path = written(tmp_path / "slow.gds", gds.library(gds.cell("top", SQUARE)))
    monkeypatch.setattr(guard, "SECONDS_BASE", 0.0)
    monkeypatch.setattr(guard, "SECONDS_PER_MEGABYTE", 0.0)
    assert "did not end" in outcome(path)


def test_cells_in_a_cycle_are_named(tmp_path):
    library = gds.library(
        gds.cell("top", SQUARE, gds.reference("alpha", 0, 0)),
        gds.cell("alpha", SQUARE, gds.reference("beta", 5, 5)),
        gds.cell("beta", SQUARE, gds.reference("alpha", 5, 5)),
    )
    line = outcome(written(tmp_path / "cycle.gds", library))
    assert "alpha > beta > alpha" in line or "beta > alpha > beta" in line


def test_a_cell_that_refers_to_itself(tmp_path):
    library = gds.library(gds.cell("self", SQUARE, gds.reference("self", 1, 1)))
    assert "self > self" in outcome(written(tmp_path / "self.gds", library))


def test_a_missing_cell_is_named_with_its_parent(tmp_path):
    library = gds.library(gds.cell("top", SQUARE, gds.reference("gone", 0, 0)))
    line = outcome(written(tmp_path / "missing.gds", library))
    assert "'top' refers to cell 'gone'" in line


def test_absolute_widths_are_refused_where_they_would_be_magnified(tmp_path):
    # GDSII manual, record WIDTH: a negative width is not affected by magnification
    leaf = gds.cell("leaf", gds.path(1, 0, 0, -10, (0, 0, 50, 0)))
    for magnification, wanted in ((1.0, ""), (2.0, "absolute width")):
        top = gds.cell("top", gds.reference("leaf", 0, 0, magnification=magnification))
        line = outcome(written(tmp_path / "wide.gds", gds.library(leaf, top)))
        assert wanted in line if wanted else line == ""


def test_a_pipe_is_refused(tmp_path):
    os.mkfifo(tmp_path / "pipe.gds")
    assert "not a regular file" in outcome(tmp_path / "pipe.gds")


def test_files_of_another_kind(tmp_path):
    assert "empty" in outcome(written(tmp_path / "empty.gds", b""))
    assert "neither a GDSII nor an OASIS" in outcome(written(tmp_path / "a.gds", b"name: x\n"))
    assert "neither" in outcome(written(tmp_path / "b.gds", gzip.compress(b"name: x\n")))
    assert "empty" in outcome(written(tmp_path / "c.gds", gzip.compress(b"")))
    twice = gzip.compress(gzip.compress(gds.library(gds.cell("top", SQUARE))))
    assert "gzipped twice" in outcome(written(tmp_path / "d.gds", twice))
    assert "directory" in outcome(tmp_path)
    assert "no such file" in outcome(tmp_path / "absent.gds")


def test_a_file_without_permission(tmp_path, monkeypatch):
    path = written(tmp_path / "locked.gds", gds.library(gds.cell("top", SQUARE)))
    # tests may run as root, whom no permission bits stop: the refusal itself is simulated
    real = Path.open

    def refuse(self, *arguments, **options):
        if self == path:
            raise PermissionError(13, "Permission denied", str(path))
        return real(self, *arguments, **options)

    monkeypatch.setattr(Path, "open", refuse)
    assert "no permission" in outcome(path)


def test_a_full_disk(tmp_path, monkeypatch):
    path = written(tmp_path / "z.gds", gzip.compress(gds.library(gds.cell("top", SQUARE))))
    real = Path.open

    def full(self, mode="r", *arguments, **options):
        if "w" in mode:
            raise OSError(28, "No space left on device", str(self))
        return real(self, mode, *arguments, **options)

    monkeypatch.setattr(Path, "open", full)
    assert "No space left on device" in outcome(path)


def test_a_bomb_of_zeros_is_refused_before_it_unfolds(tmp_path):
    path = written(tmp_path / "zeros.gds", gzip.compress(bytes(60_000_000), compresslevel=9))
    assert path.stat().st_size < 70_000
    assert "neither" in outcome(path)


def test_a_bomb_behind_a_good_header_meets_the_limit(tmp_path, monkeypatch):
    monkeypatch.setattr(guard, "LARGEST_UNPACKED_BYTES", 8_000_000)
    packed = gzip.compress(gds.library(gds.cell("top", SQUARE)) + bytes(40_000_000))
    line = outcome(written(tmp_path / "bomb.gds", packed))
    assert "unpacks to more than" in line


def test_damaged_gzip(tmp_path):
    packed = bytearray(gzip.compress(sound(tmp_path / "sound.gds")))
    packed[-6] ^= 0xFF
    assert "gzip data is damaged" in outcome(written(tmp_path / "crc.gds", bytes(packed)))
    assert "gzip data is damaged" in outcome(written(tmp_path / "cut.gds", bytes(packed[:60])))


def test_coordinates_beyond_exact_sums_are_refused(tmp_path):
    cells = [gds.cell("level0", SQUARE)]
    for level in range(1, 4):
        name = f"level{level - 1}"
        cells.append(
            gds.cell(f"level{level}", gds.reference(name, 2**30, -(2**30), magnification=9e5))
        )
    line = outcome(written(tmp_path / "huge.gds", gds.library(*cells)))
    assert "database units" in line


def test_the_largest_coordinates_of_the_format_are_taken(tmp_path):
    far = gds.boundary(1, 0, 2**31 - 9, -(2**31), 2**31 - 1, -(2**31), 2**31 - 1, 0, 2**31 - 9, 0)
    path = written(tmp_path / "far.gds", gds.library(gds.cell("top", far, SQUARE)))
    source = open_layout(path, technology=technology_of(one="1/0"))
    assert source.bbox_dbu == (0, -(2**31), 2**31 - 1, 9)


def test_nested_arrays_beyond_any_memory_open_at_once(tmp_path):
    cells = [gds.cell("level0", SQUARE)]
    span = 10
    for level in range(1, 4):
        count = 1_000
        corners = (0, 0, span * count, 0, 0, span * count)
        cells.append(
            gds.cell(f"level{level}", gds.array(f"level{level - 1}", count, count, corners))
        )
        span *= 100
    path = written(tmp_path / "nested.gds", gds.library(*cells))
    source = open_layout(path, technology=technology_of(one="1/0"))
    assert source.total_polygons([PAIR]) == 10**18
    assert source.repeat_pitch_dbu() is None
    with pytest.raises(LayoutError, match="more than"):
        source.window(source.bbox_dbu, [PAIR])


@pytest.mark.parametrize(
    ("element", "wanted"),
    [
        (gds.array("leaf", 0, 5, (0, 0, 100, 0, 0, 100)), "an array has"),
        (gds.array("leaf", -3, 5, (0, 0, 100, 0, 0, 100)), "an array has"),
        (gds.array("leaf", 5, 5, (0, 0, 0, 0, 0, 0)), ""),
        (gds.array("leaf", 5, 5, (0, 0, 50, 50, 100, 100)), ""),
        (gds.reference("leaf", 0, 0, magnification=0.0), "magnified"),
        (gds.reference("leaf", 0, 0, magnification=1e60), "magnified"),
        (gds.boundary(1, 0, 5, 5), ""),
        (gds.boundary(1, 0), "damaged"),
        (gds.path(1, 0, 7, 10, (0, 0, 50, 0)), ""),
        (gds.path(1, 0, 0, 10, (0, 0)), ""),
        (gds.path(1, 0, 0, -10, (0, 0, 50, 0)), ""),
    ],
    ids=range(11),
)
def test_odd_elements(tmp_path, element, wanted):
    top = gds.cell("top", SQUARE, gds.reference("leaf", 50, 0), element)
    library = gds.library(gds.cell("leaf", SQUARE), top)
    line = outcome(written(tmp_path / "odd.gds", library))
    assert wanted in line if wanted else line == ""


@pytest.mark.parametrize("unit_um", [0.0, -0.001])
def test_database_units_that_are_none(tmp_path, unit_um):
    library = gds.library(gds.cell("top", SQUARE), database_unit_um=unit_um)
    assert outcome(written(tmp_path / "unit.gds", library))


def test_names_that_are_no_text(tmp_path):
    # older files hold texts in other encodings: a text is read, a cell name must be known
    label = gds.element(
        0x0C00,
        3,
        0x1602,
        0,
        gds.record(0x1003, gds.longs(1, 2)),
        gds.record(0x1906, gds.text(b"5 \xb5A")),
    )
    path = written(tmp_path / "text.gds", gds.library(gds.cell("top", SQUARE, label)))
    source = open_layout(path, technology=technology_of(one="1/0", labels=("3/0",)))
    assert [text.text for text in source.labels([(3, 0)])] == ["\ufffd"]
    library = gds.library(gds.cell(b"\xff\xfe\x80\x81", SQUARE))
    assert "no UTF-8" in outcome(written(tmp_path / "name.gds", library))


@pytest.mark.parametrize("cut", [1, 100, 255, 256])
def test_an_oasis_file_cut_within_its_last_record(tmp_path, cut):
    # END is 256 bytes long (SEMI P39, section 14), whatever it holds
    library = gdstk.Library()
    library.new_cell("one").add(gdstk.rectangle((0, 0), (1, 1), layer=1))
    path = tmp_path / "one.oas"
    library.write_oas(path)
    assert outcome(path) == ""
    assert outcome(written(path, path.read_bytes()[:-cut]))


def test_a_reader_that_cannot_be_started_is_not_the_file_s_fault(tmp_path, monkeypatch):
    path = tmp_path / "sound.gds"
    path.write_bytes(gds.library(gds.cell(b"top", SQUARE)))
    monkeypatch.setattr("sys.executable", str(tmp_path))
    assert "its reader could not be started" in outcome(path)


def test_a_bomb_inside_an_oasis_block_is_stopped(tmp_path, monkeypatch):
    # OASIS packs records into deflated blocks (SEMI P39, record CBLOCK = 34)
    packer = zlib.compressobj(9, zlib.DEFLATED, -15)
    piece = packer.compress(bytes(1 << 20)) + packer.flush(zlib.Z_FULL_FLUSH)
    block = piece * 2_000 + packer.flush()
    size = 2_000 << 20

    def varint(value: int) -> bytes:
        out = bytearray()
        while value >= 128:
            out.append(value & 127 | 128)
            value >>= 7
        return bytes([*out, value])

    start = b"%SEMI-OASIS\r\n" + bytes([1, 3]) + b"1.0" + b"\x00" + varint(1000) + b"\x01"
    packed = bytes([34, 0]) + varint(size) + varint(len(block)) + block
    end = (b"\x02" + bytes(12)).ljust(255, b"\x80") + b"\x00"
    path = written(tmp_path / "bomb.oas", start + packed + end)
    monkeypatch.setattr(guard, "MEMORY_BASE_BYTES", 1 << 30)
    assert "unpacks to more than memory allows" in outcome(path)
