"""In how many passes a GDSII file is read, and which layers each pass takes.

The reading library keeps an object for each shape, several times what the shape becomes in
the tables.  A file of very many shapes is therefore read more than once, some layers at a
time, so that only one pass's objects are held at once.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from latchscan.layout.file.tables import Pair

SHAPES_A_PASS = 1_500_000
"""Shapes that one pass may hold; about 250 bytes each."""
MOST_PASSES = 4
"""Each pass goes through the whole file, which takes time."""
SAMPLES = 64
SAMPLE_BYTES = 1 << 18
"""Places of the file that are looked at for each layer's share, and bytes at each."""
LAYER_AND_TYPE = re.compile(rb"\x00\x06\x0d\x02(..)\x00\x06[\x0e\x2e]\x02(..)", re.DOTALL)
"""The two records that give a shape its layer and its datatype or boxtype (GDSII manual)."""


def passes_over(path: Path, info: Mapping[str, Any], pairs: set[Pair]) -> list[set[Pair]]:
    """The layer/datatype pairs that each pass shall read, every pair in one pass.

    Parameters
    ----------
    path
        An unpacked GDSII file.
    info
        What the library told of the file: its numbers of polygons and paths.
    pairs
        All pairs that are wanted.
    """
    count = int(info.get("num_polygons", 0)) + int(info.get("num_paths", 0))
    if count <= SHAPES_A_PASS:
        return [pairs]
    shares = _shares(path)
    room = max(SHAPES_A_PASS / count, 1 / MOST_PASSES)
    passes: list[set[Pair]] = []
    loads: list[float] = []
    # the largest first, each where it still fits
    for pair in sorted(pairs, key=lambda pair: (-shares.get(pair, 0.0), pair)):
        share = shares.get(pair, 0.0)
        fitting = [one for one, load in enumerate(loads) if load + share <= room]
        if fitting:
            passes[fitting[0]].add(pair)
            loads[fitting[0]] += share
        else:
            passes.append({pair})
            loads.append(share)
    return passes


def _shares(path: Path) -> dict[Pair, float]:
    """About which part of the file's shapes each pair has; a wrong guess costs memory alone."""
    found: Counter[tuple[bytes, bytes]] = Counter()
    size = path.stat().st_size
    with path.open("rb") as stream:
        for sample in range(SAMPLES):
            stream.seek(size * sample // SAMPLES)
            found.update(LAYER_AND_TYPE.findall(stream.read(SAMPLE_BYTES)))
    total = max(1, found.total())
    return {
        (int.from_bytes(layer, "big"), int.from_bytes(datatype, "big")): count / total
        for (layer, datatype), count in found.items()
    }
