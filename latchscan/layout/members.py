"""Taps and emitters: each piece of a region with the body it lies in.

In: `Regions` and the wells (`Members`).  Out: `Taps` and `Emitters`.  A piece that spans two
bodies is cut and belongs to each with its part; what lies in no body of its kind is dropped.
"""

from __future__ import annotations

import fnmatch
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray

from latchscan.layout.derive.slabs import upright_parts
from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    SUBSTRATE_TAP,
    WELL_TAP,
    Emitters,
    Floats,
    Geometries,
    Ints,
    Regions,
    Taps,
    frozen,
)
from latchscan.technology.model import Technology

MARKED = "marker"
"""Name of an injector that only a marker layer declares."""
LEAST_AREA_UM2 = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Members:
    """Polygons that decide to which body a shape belongs.

    Attributes
    ----------
    nwell, isolated
        N-well and isolated p-well polygons.
    nwell_body, isolated_body
        The body of each.
    substrate_body
        The body of everything else outside n-wells.
    """

    nwell: Geometries
    nwell_body: Ints
    isolated: Geometries
    isolated_body: Ints
    substrate_body: int


def gather_taps(regions: Regions, members: Members) -> Taps:
    """Taps with their bodies and contacts."""
    in_well, well_body = _inside(regions.shapes["well_tap"], members.nwell, members.nwell_body)
    outside, outside_body = _outside(regions.shapes["substrate_tap"], members)
    polygons = np.concatenate([in_well, outside])
    kind = np.repeat([WELL_TAP, SUBSTRATE_TAP], [len(in_well), len(outside)])
    body = np.concatenate([well_body, outside_body])
    order = _by_place(polygons, kind, body)
    polygons = polygons[order]
    tap, contact = _contacts_on(polygons, regions.contact_box_um)
    count = np.bincount(tap, minlength=len(polygons)).astype(np.int64)
    return Taps(
        polygons=frozen(polygons),
        kind=frozen(kind[order].astype(np.int64)),
        body=frozen(body[order]),
        contact_count=frozen(count),
        contact_first=frozen(np.concatenate([[0], np.cumsum(count)]).astype(np.int64)),
        contact_box_um=frozen(regions.contact_box_um[contact]),
    )


def gather_emitters(regions: Regions, technology: Technology, members: Members) -> Emitters:
    """Emitters with their bodies and, where they are injectors, the name of the reason."""
    in_well, well_body = _inside(
        regions.shapes["p_diffusion_in_nwell"], members.nwell, members.nwell_body
    )
    outside, outside_body = _outside(regions.shapes["n_diffusion_outside_nwell"], members)
    polygons = np.concatenate([in_well, outside])
    kind = np.repeat([P_IN_NWELL, N_OUTSIDE_NWELL], [len(in_well), len(outside)])
    body = np.concatenate([well_body, outside_body])
    order = _by_place(polygons, kind, body)
    polygons = polygons[order]
    numbers = [f"p-{i}" for i in range(1, len(in_well) + 1)]
    numbers += [f"n-{i}" for i in range(1, len(outside) + 1)]
    return Emitters(
        ids=_texts(numbers),
        polygons=frozen(polygons),
        kind=frozen(kind[order].astype(np.int64)),
        body=frozen(body[order]),
        box_um=frozen(shapely.bounds(polygons).reshape(-1, 4)),
        area_um2=frozen(shapely.area(polygons)),
        over_buried=frozen(
            _covered_area(polygons, regions.shapes["buried"]) > 0.5 * shapely.area(polygons)
        ),
        injector=_injectors(regions, technology, polygons),
    )


def _texts(texts: list[str]) -> NDArray[np.str_]:
    found: NDArray[np.str_] = np.array(texts, dtype=np.str_)
    found.setflags(write=False)
    return found


def _by_place(polygons: Geometries, kind: Ints, body: Ints) -> Ints:
    """Order by kind and (y0, x0); ties by the rest of the box, the area and the body."""
    x0, y0, x1, y1 = shapely.bounds(polygons).reshape(-1, 4).T
    return np.lexsort((body, shapely.area(polygons), x1, y1, x0, y0, kind))


def _inside(shapes: Geometries, wells: Geometries, bodies: Ints) -> tuple[Geometries, Ints]:
    """The parts of shapes inside wells, and the body of each part."""
    owner = _whole_owner(shapes, wells)
    whole = owner >= 0
    rest = np.flatnonzero(~whole)
    parts, well = _cut(shapes[rest], wells)
    return (
        np.concatenate([shapes[whole], parts]),
        np.concatenate([bodies[owner[whole]], bodies[well]]),
    )


def _outside(shapes: Geometries, members: Members) -> tuple[Geometries, Ints]:
    """Shapes outside n-wells: their parts in isolated p-wells, and the rest."""
    inside, inside_body = _inside(shapes, members.isolated, members.isolated_body)
    owner = _whole_owner(shapes, members.isolated)
    rest = shapes[owner < 0]
    row, well = _meeting(rest, members.isolated)
    touched = np.unique(row)
    cut = [
        part
        for piece in touched.tolist()
        for part in _polygons(
            shapely.difference(rest[piece], shapely.union_all(members.isolated[well[row == piece]]))
        )
    ]
    remainder = np.empty(len(cut), dtype=np.object_)
    remainder[:] = cut
    apart = np.concatenate([np.delete(rest, touched), remainder])
    return (
        np.concatenate([inside, apart]),
        np.concatenate([inside_body, np.full(len(apart), members.substrate_body)]),
    )


def _whole_owner(shapes: Geometries, wells: Geometries) -> Ints:
    """(n,) the well that covers a whole shape, or -1."""
    owner = np.full(len(shapes), -1, dtype=np.int64)
    if len(shapes) and len(wells):
        # the wells are the prepared side: a large one is indexed once for all its shapes
        well, shape = shapely.STRtree(shapes).query(wells, predicate="covers")
        owner[shape] = well
    return owner


def _meeting(shapes: Geometries, wells: Geometries) -> tuple[Ints, Ints]:
    """(shape, well) pairs that overlap with area, sorted."""
    if not len(shapes) or not len(wells):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
    well, shape = shapely.STRtree(shapes).query(wells, predicate="intersects")
    area = shapely.area(shapely.intersection(shapes[shape], wells[well]))
    kept = area > LEAST_AREA_UM2
    shape, well = shape[kept], well[kept]
    order = np.lexsort((well, shape))
    return shape[order], well[order]


def _cut(shapes: Geometries, wells: Geometries) -> tuple[Geometries, Ints]:
    """Parts of shapes inside wells; a shape inside but for rounding stays as it is."""
    shape, well = _meeting(shapes, wells)
    found: list[object] = []
    owner: list[int] = []
    for row, under in zip(shape.tolist(), well.tolist(), strict=True):
        overlap = shapely.intersection(shapes[row], wells[under])
        whole = shapely.area(shapes[row]) - shapely.area(overlap) <= LEAST_AREA_UM2
        parts = [shapes[row]] if whole else _polygons(overlap)
        found += parts
        owner += [under] * len(parts)
    polygons = np.empty(len(found), dtype=np.object_)
    polygons[:] = found
    return polygons, np.array(owner, dtype=np.int64)


def _polygons(geometry: object) -> list[object]:
    """Polygons of an overlay's result that have a real area."""
    parts = shapely.get_parts(geometry)
    real = (shapely.get_type_id(parts) == 3) & (shapely.area(parts) > LEAST_AREA_UM2)
    return list(parts[real])


def _contacts_on(taps: Geometries, contact_box_um: Floats) -> tuple[Ints, Ints]:
    """(tap, contact) pairs that overlap with area, grouped by tap."""
    if not len(taps) or not len(contact_box_um):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64)
    tree = shapely.STRtree(shapely.box(*contact_box_um.T))
    parts, owner, others = upright_parts(taps)
    part, on_part = tree.query(shapely.box(*parts.T))
    box, side = contact_box_um[on_part], parts[part]
    shared = ((box[:, :2] < side[:, 2:]) & (side[:, :2] < box[:, 2:])).all(axis=1)
    row, on_other = tree.query(taps[others], predicate="intersects")
    area = shapely.area(shapely.intersection(taps[others[row]], tree.geometries[on_other]))
    tap = np.concatenate([owner[part[shared]], others[row[area > 0.0]]])
    contact = np.concatenate([on_part[shared], on_other[area > 0.0]])
    order = np.lexsort((contact, tap))
    tap, contact = tap[order], contact[order]
    # a contact may lie on two rectangles of one tap
    fresh = np.ones(len(tap), dtype=np.bool_)
    fresh[1:] = (tap[1:] != tap[:-1]) | (contact[1:] != contact[:-1])
    return tap[fresh], contact[fresh]


def _covered_area(polygons: Geometries, cover: Geometries) -> Floats:
    """(n,) area of each polygon that lies on the cover [um2]."""
    area = np.zeros(len(polygons))
    if not len(polygons) or not len(cover):
        return area
    owner = _whole_owner(polygons, cover)
    whole = owner >= 0
    area[whole] = shapely.area(polygons[whole])
    rest = np.flatnonzero(~whole)
    over, row = shapely.STRtree(polygons[rest]).query(cover, predicate="intersects")
    shared = shapely.area(shapely.intersection(polygons[rest[row]], cover[over]))
    np.add.at(area, rest[row], shared)
    return area


def _injectors(regions: Regions, technology: Technology, polygons: Geometries) -> NDArray[np.str_]:
    """(n,) why an emitter is an injector: a pin's name or `MARKED`, "" where it is none.

    Where the technology names its conductors, pins are followed through their nets later and
    a label above an emitter means nothing.
    """
    labels = technology.labels
    names = [""] * len(polygons)
    marked = _covered_area(polygons, regions.shapes["injector"]) > LEAST_AREA_UM2
    for row in np.flatnonzero(marked).tolist():
        names[row] = MARKED
    if technology.conductors is not None:
        return _texts(names)
    no_pins = (*labels.power_names, *labels.ground_names, *labels.remark_names)
    patterns = [pattern.lower() for pattern in no_pins]
    pins = [
        label
        for label in regions.labels
        if label.text
        and not any(fnmatch.fnmatchcase(label.text.lower(), pattern) for pattern in patterns)
    ]
    if pins and len(polygons):
        points = shapely.points([(label.x_um, label.y_um) for label in pins])
        pin, row = shapely.STRtree(polygons).query(points, predicate="intersects")
        # the first name in the alphabet wins, whatever the order of the labels
        for emitter, text in sorted(
            ((int(r), pins[p].text) for p, r in zip(pin, row, strict=True)), reverse=True
        ):
            names[emitter] = text
    return _texts(names)
