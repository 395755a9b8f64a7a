"""The same block drawn in another way gives the same findings and the same values.

Source of the expectation: Euclidean and hierarchical invariance of the geometry; the field
values may differ by their own stated error estimates, nothing else.
"""

from __future__ import annotations

from pathlib import Path

import gdstk
import numpy as np
import pytest
from layouts import Block, fractured, rows_block, turned

from latchscan.layout.source import open_layout
from latchscan.scan import Scan, ScanOptions, scan
from latchscan.tasks import Workers
from latchscan.technology.load import load_technology

TAP_DISTANCE_UM = 1e-4
SEEDS = (1, 2)


def scanned(drawn: Block, path: Path) -> Scan:
    """Scan a block as the command does."""
    loaded = load_technology("larch180")
    source = open_layout(drawn.write(path), technology=loaded.technology, top=None)
    return scan(source, loaded, ScanOptions(), Workers())


def centres(result: Scan) -> np.ndarray:
    """(n, 2) box centres of the emitters [um]."""
    box = result.evidence.layout.emitters.box_um
    return (box[:, :2] + box[:, 2:]) / 2


def matched(first: Scan, second: Scan, places: np.ndarray) -> np.ndarray:
    """For every emitter of `first`, moved to `places`, the row of the same one in `second`."""
    gaps = np.linalg.norm(places[:, None, :] - centres(second)[None, :, :], axis=2)
    kinds = first.evidence.layout.emitters.kind[:, None] == second.evidence.layout.emitters.kind
    gaps = np.where(kinds, gaps, np.inf)
    assert np.all(gaps.min(axis=1) < 2e-3)
    rows: np.ndarray = gaps.argmin(axis=1)
    assert len(set(rows.tolist())) == len(rows)
    return rows


def assert_same(first: Scan, second: Scan, places: np.ndarray) -> None:
    """Compare two scans of one block emitter by emitter and finding by finding."""
    assert len(places) == len(centres(second)) > 0
    rows = matched(first, second, places)
    a, b = first.evidence, second.evidence
    np.testing.assert_allclose(
        a.distances.tap_distance_um, b.distances.tap_distance_um[rows], atol=TAP_DISTANCE_UM
    )
    np.testing.assert_allclose(
        a.layout.emitters.area_um2, b.layout.emitters.area_um2[rows], rtol=1e-9
    )
    for name in ("mean_ohm", "patch_ohm"):
        mine = getattr(a.resistances, name)[: len(rows)]
        other = getattr(b.resistances, name)[rows]
        error = a.resistances.relative_error[: len(rows)] + b.resistances.relative_error[rows]
        assert np.all(np.abs(mine - other) <= (error + 1e-6) * np.abs(mine)), name
    assert sorted((f.rule, f.severity, f.count, f.unit) for f in first.findings) == sorted(
        (f.rule, f.severity, f.count, f.unit) for f in second.findings
    )


@pytest.fixture(scope="module", params=SEEDS)
def plain(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Scan:
    """Scan of the block as drawn."""
    return scanned(rows_block(request.param), tmp_path_factory.mktemp("plain") / "block.gds")


@pytest.fixture
def drawn(plain: Scan, request: pytest.FixtureRequest) -> Block:
    """A fresh drawing of the block that `plain` scanned."""
    return rows_block(request.node.callspec.params["plain"])


@pytest.mark.parametrize(
    ("quarter_turns", "mirrored", "move"),
    [
        (0, False, (1234.567, -89.1)),
        (0, True, (0.0, 0.0)),
        (1, False, (0.0, 0.0)),
        (3, True, (7, 5)),
    ],
)
def test_moved_mirrored_turned(
    plain: Scan,
    drawn: Block,
    quarter_turns: int,
    mirrored: bool,
    move: tuple[float, float],
    tmp_path: Path,
) -> None:
    other = scanned(
        turned(drawn, quarter_turns=quarter_turns, mirrored=mirrored, move=move),
        tmp_path / "turned.gds",
    )
    angle = quarter_turns * np.pi / 2
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    mirror = np.diag([1.0, -1.0 if mirrored else 1.0])
    assert_same(plain, other, centres(plain) @ (turn @ mirror).T + np.asarray(move))


def test_fractured(plain: Scan, drawn: Block, tmp_path: Path) -> None:
    assert_same(plain, scanned(fractured(drawn, 5), tmp_path / "cut.gds"), centres(plain))


def test_flattened(plain: Scan, drawn: Block, tmp_path: Path) -> None:
    nested = turned(
        turned(drawn, quarter_turns=0, mirrored=False, move=(3, 4)),
        quarter_turns=0,
        mirrored=False,
        move=(-3, -4),
    )
    nested.cell.flatten()
    nested.library = gdstk.Library("flat", unit=1e-6, precision=1e-9)
    nested.library.add(nested.cell)
    assert_same(plain, scanned(nested, tmp_path / "flat.gds"), centres(plain))


def test_array_instead_of_copies(drawn: Block, tmp_path: Path) -> None:
    arrayed, copied = Block("arrayed"), Block("copied")
    arrayed.library.add(drawn.cell)
    copied.library.add(drawn.cell)
    arrayed.cell.add(gdstk.Reference(drawn.cell, columns=2, rows=2, spacing=(80, 60)))
    for x in (0, 80):
        for y in (0, 60):
            copied.cell.add(gdstk.Reference(drawn.cell, (x, y)))
    first = scanned(arrayed, tmp_path / "arrayed.gds")
    second = scanned(copied, tmp_path / "copied.gds")
    assert_same(first, second, centres(first))
