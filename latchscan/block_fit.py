"""A block file against the layout it speaks of: the top cell, the names, the boxes left out.

In: a loaded block, the opened layout and its nets.  Out: problems with their places in the
block file, as the check of the file alone gives them.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from latchscan.block.load import LoadedBlock
from latchscan.block.model import Block
from latchscan.block.names import Nearest
from latchscan.errors import BlockError, LayoutError
from latchscan.layout import source as layouts
from latchscan.layout.connections import Nets
from latchscan.layout.model import Box, Label
from latchscan.layout.source import LayoutSource
from latchscan.technology import document
from latchscan.technology.document import Place, one_line, shown_text
from latchscan.technology.model import Technology
from latchscan.technology.problem import Problem, problem_at


def open_block_layout(
    path: Path, *, technology: Technology, top: str | None, loaded: LoadedBlock | None
) -> LayoutSource:
    """Open a layout at the top cell asked for, else at the one that its block file names.

    Parameters
    ----------
    path
        The layout file.
    technology
        Names the layers to read.
    top
        Top cell by option; it wins over the block file.
    loaded
        The block file, None where there is none.

    Raises
    ------
    BlockError
        The layout has no such cell as the block file names.
    LayoutError
        As `latchscan.layout.source.open_layout` does.
    """
    named = None if loaded is None else loaded.block.top
    if top is not None or loaded is None or named is None:
        return layouts.open_layout(path, technology=technology, top=top)
    try:
        return layouts.open_layout(path, technology=technology, top=named)
    except LayoutError as error:
        if _lacks_cell(error, named):
            raise BlockError(
                f"{loaded.where('top')}: top: {error.message}", hint=error.hint
            ) from error
        raise


def _lacks_cell(error: LayoutError, cell: str) -> bool:
    return error.message.endswith(f"there is no cell {cell!r}")


def problems_with_layout(
    loaded: LoadedBlock, *, nets: Nets | None, labels: tuple[Label, ...], box_um: Box
) -> list[Problem]:
    """Everything in a block file that the layout contradicts; empty where nothing does.

    Parameters
    ----------
    loaded
        The block file.
    nets
        The layout's nets; None where the technology names no conductors, so that no text is
        known to lie on a shape.
    labels
        The layout's texts, of which those of `nets` are taken where it is given.
    box_um
        Box around the layout (x0, y0, x1, y1) [um].
    """
    found = [
        *_absent_names(loaded, nets, labels),
        *_boxes_outside(loaded, box_um),
    ]
    return sorted(
        problem_at(loaded.places.get(path, Place(1, 1)), path, message, str(loaded.path))
        for path, message in found
    )


def _names(block: Block) -> dict[str, document.Path]:
    """Every name of a block file and the first key it stands under; joined ones are among them."""
    found: dict[str, document.Path] = {}
    for name in block.supplies:
        found.setdefault(name, ("supplies", name))
    for index, name in enumerate(block.grounds):
        found.setdefault(name, ("grounds", index))
    for name in block.pins:
        found.setdefault(name, ("pins", name))
    return found


def _absent_names(
    loaded: LoadedBlock, nets: Nets | None, labels: tuple[Label, ...]
) -> Iterator[tuple[document.Path, str]]:
    texts = labels if nets is None else nets.labels
    nodes = [0] * len(texts) if nets is None else nets.label_node.tolist()
    on_shape = {label.text for label, node in zip(texts, nodes, strict=True) if node >= 0}
    loose: dict[str, Label] = {}
    for label in texts:
        if label.text not in on_shape:
            loose.setdefault(label.text, label)
    nearest = Nearest(on_shape)
    for name, path in _names(loaded.block).items():
        if name in on_shape:
            continue
        if name in loose:
            at = f"({loose[name].x_um:g}, {loose[name].y_um:g}) um"
            yield path, f"the text {shown_text(name)} lies on no shape, first at {at}"
            continue
        expected = nearest.to(name) or _some(sorted(on_shape))
        yield path, f"no text of the layout is {shown_text(name)}, expected {expected}"


def _some(names: list[str], most: int = 5) -> str:
    if not names:
        return "texts on conductors; the layout has none"
    shown = ", ".join(shown_text(name) for name in names[:most])
    more = f" or {len(names) - most} more" if len(names) > most else ""
    return f"one of {shown}{more}" if len(names) > 1 else shown


def _boxes_outside(loaded: LoadedBlock, box_um: Box) -> Iterator[tuple[document.Path, str]]:
    x0, y0, x1, y1 = box_um
    for index, part in enumerate(loaded.block.leave_out):
        left, low, right, high = part.box_um
        if left >= x1 or right <= x0 or low >= y1 or high <= y0:
            block_box = ", ".join(f"{number:g}" for number in box_um)
            message = f"lies outside the block, expected some of its box [{one_line(block_box)}] um"
            yield ("leave_out", index, "box_um"), message
