"""The guarded reading child: a GDSII or OASIS file in, `Tables` in a file out.

gdstk can die by a signal on a damaged file, so it runs only here, in a process of its own:
``python -m latchscan.layout.file.reading JOB`` where JOB is a JSON file (see `main`).  Exit status
0 means the tables were written; 3 that the file was understood to be bad, with one line on
standard output; 4 that the tables could not be written; anything else that the process was
lost.
"""

from __future__ import annotations

import json
import math
import sys
import warnings
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import gdstk
import numpy as np

from latchscan.layout.file.outlines import BATCH, OutlineColumns, check_range, whole
from latchscan.layout.file.passes import passes_over
from latchscan.layout.file.tables import Pair, Tables, save_tables
from latchscan.layout.model import Floats

if sys.platform != "win32":
    import resource

LARGEST_EXPANSION = 20_000_000
"""Most copies that explicit repetitions may expand to in one file."""
SMALL_REPETITION = 16
"""Repetitions of shapes up to this size are expanded, larger ones become references."""
LARGEST_ARRAY = 1 << 40
"""Most instances of one array."""
LARGEST_TURN = 1e6
MAGNIFICATIONS = (1e-6, 1e6)
OASIS_END, OASIS_END_BYTES = b"\x02", 256
BAD_FILE = 3
NO_ROOM = 4
QUARTER_TURN_SLACK = 1e-9
SAID_PLAINLY = {
    "Error reading input file.": "it ends too early or a record has a wrong length",
    "Error in zlib library.": "a packed block is broken or unpacks to more than memory allows",
    "Unable to create cell name.": "a cell name is no UTF-8 text",
    "Unable to convert value to string.": "a cell name is no UTF-8 text",
    "Invalid or corrupted file.": "a record has no place where it stands",
}
"""gdstk's sentences in more helpful words."""


class UnreadableError(Exception):
    """The file was read but cannot be used; the text is one line for the user."""


@dataclass(slots=True, kw_only=True)
class _Columns:
    """Growing columns of the tables while the library is walked."""

    outlines: OutlineColumns
    units: float
    database_unit_um: float
    references: list[tuple[int, int]] = field(default_factory=list)
    placements: list[tuple[float, ...]] = field(default_factory=list)
    counts: list[tuple[int, int]] = field(default_factory=list)
    labels: list[tuple[int, int]] = field(default_factory=list)
    label_points: list[tuple[float, float]] = field(default_factory=list)
    label_texts: list[str] = field(default_factory=list)
    cell_names: list[str] = field(default_factory=list)
    missing: list[tuple[str, str]] = field(default_factory=list)
    file_pairs: set[Pair] = field(default_factory=set)
    file_text_pairs: set[Pair] = field(default_factory=set)
    expanded: int = 0
    absolute_width_in: str = ""
    is_magnified: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class _Take:
    """Numbers of the layer/datatype pairs of shapes and texts that are taken."""

    shapes: dict[Pair, int]
    texts: dict[Pair, int]


def main(arguments: list[str]) -> int:
    """Run one job: ``{"path", "kind", "shape_pairs", "text_pairs", "out"}``."""
    job = json.loads(Path(arguments[0]).read_text(encoding="utf-8"))
    _limit_memory(job["memory_bytes"])
    try:
        with warnings.catch_warnings(record=True) as cautions:
            warnings.simplefilter("always")
            tables = read_tables(
                job["path"],
                kind=job["kind"],
                shape_pairs=[(layer, datatype) for layer, datatype in job["shape_pairs"]],
                text_pairs=[(layer, texttype) for layer, texttype in job["text_pairs"]],
            )
        _refuse_damage([str(caution.message) for caution in cautions])
    except (UnreadableError, RuntimeError, OSError, ValueError, TypeError, MemoryError) as error:
        words = " ".join(str(error).split())
        print(SAID_PLAINLY.get(words, words) or "it needs more memory than it may take")
        return BAD_FILE
    try:
        save_tables(tables, Path(job["out"]))
    except OSError as error:
        print(error.strerror or error)
        return NO_ROOM
    return 0


def _refuse_damage(cautions: list[str]) -> None:
    """Stop where gdstk only warns of numbers that cannot have been meant."""
    for caution in cautions:
        if any(word in caution.lower() for word in ("overflow", "repetition")):
            raise UnreadableError(caution)


def _limit_memory(size_bytes: int) -> None:
    if sys.platform != "win32":
        hard = resource.getrlimit(resource.RLIMIT_AS)[1]
        size = size_bytes if hard == resource.RLIM_INFINITY else min(size_bytes, hard)
        resource.setrlimit(resource.RLIMIT_AS, (size, hard))


def read_tables(path: str, *, kind: str, shape_pairs: list[Pair], text_pairs: list[Pair]) -> Tables:
    """Read a layout file into tables.

    Parameters
    ----------
    path
        The unpacked file.
    kind
        ``gdsii`` or ``oasis``.
    shape_pairs, text_pairs
        The layer/datatype pairs of shapes and the layer/texttype pairs of texts to keep.
    """
    if kind == "oasis":
        _check_oasis_end(Path(path))
    info = gdstk.gds_info(path) if kind == "gdsii" else {}
    passes = passes_over(Path(path), info, set(shape_pairs)) if kind == "gdsii" else [None]
    pairs = tuple(sorted({*shape_pairs, *text_pairs}))
    take = _Take(
        shapes={pair: pairs.index(pair) for pair in shape_pairs},
        texts={pair: pairs.index(pair) for pair in text_pairs},
    )
    # cells, references and texts come with every pass and are taken from the first
    columns = _read_pass(path, passes[0], None, take)
    for one in passes[1:]:
        _read_pass(path, one, columns, take)
    # shapes that the filter left out are still worth a note
    columns.file_pairs.update(info.get("layers_and_datatypes", ()))
    columns.file_text_pairs.update(info.get("layers_and_texttypes", ()))
    if columns.absolute_width_in and columns.is_magnified:
        raise UnreadableError(
            f"cell {columns.absolute_width_in!r} has a path of absolute width and the file"
            " magnifies cells; expected plain widths or no magnification"
        )
    return _finish(columns, pairs)


def _read_pass(
    path: str, wanted: set[Pair] | None, columns: _Columns | None, take: _Take
) -> _Columns:
    """Read the file once, with some of its GDSII shapes or as a whole (None)."""
    library = gdstk.read_oas(path) if wanted is None else gdstk.read_gds(path, filter=wanted)
    if columns is not None:
        for index, cell in enumerate(library.cells):
            _take_shapes(cell, index, columns, take.shapes, plain=True)
        columns.outlines.flush()
        return columns
    if not (library.precision > 0 and library.unit > 0):
        raise UnreadableError("the database unit must be above 0")
    units = library.unit / library.precision
    columns = _Columns(
        outlines=OutlineColumns(units), units=units, database_unit_um=library.precision * 1e6
    )
    _walk_cells(library, columns, take, plain=wanted is not None)
    columns.outlines.flush()
    return columns


def _check_oasis_end(path: Path) -> None:
    """Refuse an OASIS file that is cut within its END record or fails its own checksum.

    SEMI P39 (OASIS) gives END a fixed length so that its place can be known from the end of
    the file; gdstk stops reading where it begins.
    """
    with path.open("rb") as stream:
        stream.seek(max(0, path.stat().st_size - OASIS_END_BYTES))
        if stream.read(1) != OASIS_END:
            raise UnreadableError("it does not close with a whole END record")
    if gdstk.oas_validate(str(path))[0] is False:
        raise UnreadableError("its checksum does not match its content")


def _walk_cells(library: Any, columns: _Columns, take: _Take, *, plain: bool) -> None:
    columns.cell_names.extend(cell.name for cell in library.cells)
    cell_index = {name: index for index, name in enumerate(columns.cell_names)}
    if len(cell_index) != len(columns.cell_names):
        raise UnreadableError("two cells have the same name")
    for index, cell in enumerate(library.cells):
        _take_shapes(cell, index, columns, take.shapes, plain=plain)
        _take_references(cell, index, columns, cell_index)
        _take_labels(cell, index, columns, take.texts)


def _take_shapes(
    cell: Any, index: int, columns: _Columns, number: dict[Pair, int], *, plain: bool
) -> None:
    """Polygons, boxes and paths of a cell; `plain` where only wanted shapes were read (GDSII)."""
    polygons = cell.polygons
    if not plain:
        for polygon in polygons:
            _take_polygon(cell, index, columns, number, polygon, polygon.repetition)
    else:
        # GDSII repeats no shapes
        for start in range(0, len(polygons), BATCH):
            part = polygons[start : start + BATCH]
            pairs = [number[polygon.layer, polygon.datatype] for polygon in part]
            columns.outlines.extend([polygon.points for polygon in part], index, pairs)
    for path in cell.paths:
        for polygon in path.to_polygons():
            if not path.scale_width and (polygon.layer, polygon.datatype) in number:
                columns.absolute_width_in = cell.name
            _take_polygon(cell, index, columns, number, polygon, path.repetition)


def _take_polygon(
    cell: Any,
    index: int,
    columns: _Columns,
    number: dict[Pair, int],
    polygon: Any,
    repetition: Any,
) -> None:
    pair = (polygon.layer, polygon.datatype)
    if pair not in number:
        columns.file_pairs.add(pair)
    elif repetition.size == 0 and repetition.columns is None:
        columns.outlines.add(polygon.points, index, number[pair])
    elif 0 < repetition.size <= SMALL_REPETITION:
        for offset in repetition.get_offsets():
            columns.outlines.add(polygon.points + offset, index, number[pair])
    else:
        # a cell of its own keeps a large array of shapes as cheap as an array of cells
        own = len(columns.cell_names)
        columns.cell_names.append(f"{cell.name} (repeated shape {own})")
        columns.outlines.add(polygon.points, own, number[pair])
        _place(columns, index, own, (1.0, 0.0, 0.0, 1.0), (0.0, 0.0), repetition)


def _take_references(cell: Any, index: int, columns: _Columns, cell_index: dict[str, int]) -> None:
    for reference in cell.references:
        child = reference.cell_name
        if child not in cell_index:
            columns.missing.append((cell.name, child))
            continue
        columns.is_magnified |= reference.magnification != 1
        matrix = _matrix(reference.rotation, reference.magnification, reference.x_reflection)
        _place(columns, index, cell_index[child], matrix, reference.origin, reference.repetition)


def _matrix(
    rotation: float, magnification: float, x_reflection: bool
) -> tuple[float, float, float, float]:
    """Mirror at the x axis, then magnify, then turn: the order of both file formats."""
    if not MAGNIFICATIONS[0] <= abs(magnification) <= MAGNIFICATIONS[1]:
        raise UnreadableError(f"a cell is magnified by {magnification:g}")
    quarters = rotation / (math.pi / 2)
    if not abs(quarters) <= LARGEST_TURN:
        raise UnreadableError(f"a cell is turned by {rotation:g} radians")
    turns = round(quarters)
    if abs(quarters - turns) < QUARTER_TURN_SLACK:
        cosine, sine = ((1.0, 0.0), (0.0, 1.0), (-1.0, 0.0), (0.0, -1.0))[turns % 4]
    else:
        cosine, sine = math.cos(rotation), math.sin(rotation)
    mirror = -1.0 if x_reflection else 1.0
    return (
        magnification * cosine,
        -magnification * sine * mirror,
        magnification * sine,
        magnification * cosine * mirror,
    )


def _place(
    columns: _Columns,
    parent: int,
    child: int,
    matrix: tuple[float, ...],
    origin: tuple[float, float],
    repetition: Any,
) -> None:
    """Add a reference: regular arrays as one row, explicit offsets as single rows."""
    x, y = origin[0] * columns.units, origin[1] * columns.units
    for count, vectors, offset in _arrays(columns, repetition):
        columns.references.append((parent, child))
        columns.placements.append((*matrix, x + offset[0], y + offset[1], *vectors))
        columns.counts.append(count)


def _arrays(
    columns: _Columns, repetition: Any
) -> Iterator[tuple[tuple[int, int], tuple[float, ...], tuple[float, float]]]:
    single = (1, 1), (0.0, 0.0, 0.0, 0.0)
    if repetition.columns is None:
        for offset in _explicit(columns, repetition) if repetition.size else [(0.0, 0.0)]:
            yield (*single, offset)
        return
    if not 1 <= repetition.columns * repetition.rows <= LARGEST_ARRAY:
        raise UnreadableError("an array has an impossible number of columns or rows")
    first, second = _vectors(repetition, columns.units)
    column_count = repetition.columns if any(first) else 1
    row_count = repetition.rows if any(second) else 1
    parallel = first[0] * second[1] == first[1] * second[0]
    if column_count > 1 and row_count > 1 and parallel:
        # two parallel vectors have no inverse: keep one as the array, spell the other out
        columns.expanded += row_count
        _check_expansion(columns)
        for row in range(row_count):
            yield (column_count, 1), (*first, 0.0, 0.0), (row * second[0], row * second[1])
        return
    yield (column_count, row_count), (*first, *second), (0.0, 0.0)


def _vectors(repetition: Any, units: float) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Column and row vector of a regular array [database units]."""
    spacing = repetition.spacing
    pair = repetition.v1, repetition.v2
    if spacing is not None:
        pair = (spacing[0], 0.0), (0.0, spacing[1])
    x0, y0, x1, y1 = _snapped(np.array(pair, dtype=np.float64).reshape(-1) * units).tolist()
    return (x0, y0), (x1, y1)


def _explicit(columns: _Columns, repetition: Any) -> list[tuple[float, float]]:
    columns.expanded += repetition.size
    _check_expansion(columns)
    scaled = np.array(repetition.get_offsets(), dtype=np.float64) * columns.units
    return [(x, y) for x, y in scaled.tolist()]


def _check_expansion(columns: _Columns) -> None:
    if columns.expanded > LARGEST_EXPANSION:
        raise UnreadableError(f"its repetitions expand to more than {LARGEST_EXPANSION} copies")


def _take_labels(cell: Any, index: int, columns: _Columns, number: dict[Pair, int]) -> None:
    for label in cell.labels:
        pair = (label.layer, label.texttype)
        columns.file_text_pairs.add(pair)
        if pair not in number:
            continue
        x, y = label.origin[0] * columns.units, label.origin[1] * columns.units
        offsets = [(0.0, 0.0)]
        if label.repetition.columns is not None or label.repetition.size > 0:
            offsets = _explicit(columns, label.repetition)
        words = _text(label)
        for dx, dy in offsets:
            columns.labels.append((index, number[pair]))
            columns.label_points.append((x + dx, y + dy))
            columns.label_texts.append(words)


def _text(label: Any) -> str:
    """The label's string; a replacement character where its bytes are no UTF-8."""
    try:
        return str(label.text)
    except TypeError:
        return "\ufffd"


def _finish(columns: _Columns, pairs: tuple[Pair, ...]) -> Tables:
    """Turn the columns into sorted tables of whole database units."""
    outlines = columns.outlines.finish()
    references = np.array(columns.references, dtype=np.int64).reshape(-1, 2)
    placements = np.array(columns.placements, dtype=np.float64).reshape(-1, 10)
    placements[:, 4:] = _snapped(placements[:, 4:])
    counts = np.array(columns.counts, dtype=np.int64).reshape(-1, 2)
    by_parent = np.argsort(references[:, 0], kind="stable")
    labels = np.array(columns.labels, dtype=np.int64).reshape(-1, 2)
    label_points = np.array(columns.label_points, dtype=np.float64).reshape(-1, 2)
    return Tables(
        database_unit_um=columns.database_unit_um,
        cell_names=tuple(columns.cell_names),
        pairs=pairs,
        file_pairs=tuple(
            sorted(
                columns.file_pairs.union(pairs[row] for row in np.unique(outlines.pair).tolist())
            )
        ),
        file_text_pairs=tuple(sorted(columns.file_text_pairs)),
        missing=tuple(columns.missing),
        dropped_count=columns.outlines.dropped_count,
        polygon_points=outlines.points,
        polygon_first=outlines.first,
        polygon_box=outlines.box,
        polygon_cell=outlines.cell,
        polygon_pair=outlines.pair,
        reference_parent=references[by_parent, 0],
        reference_child=references[by_parent, 1],
        reference_matrix=placements[by_parent, :4],
        reference_origin=placements[by_parent, 4:6],
        reference_counts=counts[by_parent],
        reference_vectors=placements[by_parent, 6:],
        label_cell=labels[:, 0],
        label_pair=labels[:, 1],
        label_points=whole(label_points),
        label_texts=tuple(columns.label_texts),
    )


def _snapped(values: Floats) -> Floats:
    """Positions on the grid made exact; vectors between grid points keep their fraction."""
    check_range(values)
    nearest = np.rint(values)
    return np.where(np.abs(values - nearest) < 1e-6 * (1 + np.abs(values) * 1e-6), nearest, values)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
