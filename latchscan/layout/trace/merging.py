"""Components of all tiles joined into those of the block.

Elements that reach a tile's border come from every tile that they reach; equal ones join the
components they are in.  Nothing here knows what a component is for.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from latchscan.layout.components import connected
from latchscan.layout.model import Ints
from latchscan.layout.trace.drawn import Shapes
from latchscan.layout.trace.stack import Stack
from latchscan.layout.trace.tiles import Hits, TileNets


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Components:
    """Components of the block (k), and what touches across them.

    The attributes are those of `TileNets`, with components of the whole block.  A component
    is all poly or holds no poly at all; contacts that join nothing but poly belong to it.
    Components are numbered by their first elements, whatever the tiles.
    """

    count: Ints
    box: Ints
    first: Ints
    crossing: Ints
    crossing_box: Ints
    piece: Ints
    piece_component: Ints
    label: Ints
    label_sort: Ints
    label_component: Ints
    hits: Hits
    shapes: Shapes

    def sort(self) -> Ints:
        """(k,) least sort of each component's shapes."""
        return self.first[:, 0] // 2


def merge_tiles(tiles: list[TileNets], stack: Stack) -> Components:
    """The block's components."""
    sizes = [len(tile.box) for tile in tiles]
    start = np.concatenate([[0], np.cumsum(sizes)])
    border = np.concatenate([tile.border for tile in tiles])
    member = _shifted([tile.border_component for tile in tiles], start)
    one, other = _equal_rows(border, member)
    name = connected(int(start[-1]), one, other)
    hits = [tile.hits for tile in tiles]
    whole = _grouped(
        Components(
            count=np.concatenate([tile.count for tile in tiles]),
            box=np.concatenate([tile.box for tile in tiles]),
            first=np.concatenate([tile.first for tile in tiles]),
            crossing=_shifted([tile.crossing for tile in tiles], start),
            crossing_box=np.concatenate([tile.crossing_box for tile in tiles]),
            piece=np.concatenate([tile.piece for tile in tiles]),
            piece_component=_shifted([tile.piece_component for tile in tiles], start),
            label=np.concatenate([tile.label for tile in tiles]),
            label_sort=np.concatenate([tile.label_sort for tile in tiles]),
            label_component=_shifted([tile.label_component for tile in tiles], start),
            hits=Hits(
                probe=np.concatenate([h.probe for h in hits]),
                number=np.concatenate([h.number for h in hits]),
                sort=np.concatenate([h.sort for h in hits]),
                component=_shifted([h.component for h in hits], start),
                box=np.concatenate([h.box for h in hits]),
                polygon=np.concatenate([h.polygon for h in hits]),
            ),
            shapes=_drawn([tile.shapes for tile in tiles], start),
        ),
        name,
    )
    return _without_bare_contacts(whole, stack)


def _drawn(shapes: list[Shapes], start: Ints) -> Shapes:
    """The shapes of all tiles, with components numbered through."""
    return Shapes(
        box=np.concatenate([one.box for one in shapes]),
        box_component=_shifted([one.box_component for one in shapes], start),
        box_sort=np.concatenate([one.box_sort for one in shapes]),
        polygon=np.concatenate([one.polygon for one in shapes]),
        polygon_component=_shifted([one.polygon_component for one in shapes], start),
        polygon_sort=np.concatenate([one.polygon_sort for one in shapes]),
    )


def _without_bare_contacts(whole: Components, stack: Stack) -> Components:
    """Contacts that touch no conductor but poly become part of it."""
    bare = whole.sort() >= stack.conductor_count
    rows = bare[whole.crossing[:, 1]]
    if not rows.any():
        return whole
    one, other = whole.crossing[rows].T
    return _grouped(whole, connected(len(whole.box), one, other))


def _shifted(columns: list[Ints], start: Ints) -> Ints:
    return np.concatenate(
        [column + first for column, first in zip(columns, start.tolist(), strict=False)]
    )


def _equal_rows(rows: Ints, member: Ints) -> tuple[Ints, Ints]:
    """Members of neighbours among equal rows."""
    order = np.lexsort(rows.T)
    ranked = rows[order]
    same = np.flatnonzero((ranked[1:] == ranked[:-1]).all(axis=1))
    return member[order[same]], member[order[same + 1]]


def _grouped(parts: Components, name: Ints) -> Components:
    """Components joined to those that `name`, (k,), gives them, numbered by first elements."""
    total = int(name.max(initial=-1)) + 1
    # by group, and in each the least first element foremost
    order = np.lexsort((*parts.first.T[::-1], name))
    starts = np.searchsorted(name[order], np.arange(total))
    count, box, first = parts.count, parts.box, parts.first
    if total:
        count = np.add.reduceat(count[order], starts, axis=0)
        low = np.minimum.reduceat(box[order, :2], starts)
        box = np.hstack([low, np.maximum.reduceat(box[order, 2:], starts)])
        first = first[order[starts]]
    rank = np.empty(total, dtype=np.int64)
    rank[np.lexsort((*box.T, *first.T[::-1]))] = np.arange(total)
    by_rank = np.argsort(rank)
    count, box, first, name = count[by_rank], box[by_rank], first[by_rank], rank[name]
    crossing = name[parts.crossing]
    apart = crossing[:, 0] != crossing[:, 1]
    rows = np.hstack([crossing[apart], parts.crossing_box[apart]])
    rows = np.unique(rows, axis=0) if len(rows) else rows
    hits = parts.hits
    return Components(
        count=count,
        box=box,
        first=first,
        crossing=rows[:, :2],
        crossing_box=rows[:, 2:],
        piece=parts.piece,
        piece_component=name[parts.piece_component],
        label=parts.label,
        label_sort=parts.label_sort,
        label_component=name[parts.label_component],
        hits=Hits(
            probe=hits.probe,
            number=hits.number,
            sort=hits.sort,
            component=name[hits.component],
            box=hits.box,
            polygon=hits.polygon,
        ),
        shapes=replace(
            parts.shapes,
            box_component=name[parts.shapes.box_component],
            polygon_component=name[parts.shapes.polygon_component],
        ),
    )
