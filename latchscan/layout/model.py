"""The values that layout analysis passes on: regions, bodies, taps, emitters, distances.

All lengths are in um.  Many shapes are columns: one array per attribute, one row per shape.
Geometry columns are numpy object arrays of shapely polygons.  Arrays are read-only.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Geometries = NDArray[np.object_]
Box = tuple[float, float, float, float]
"""x0, y0, x1, y1 [um]."""

REGION_NAMES = (
    "nwell",
    "pwell",
    "well_tap",
    "substrate_tap",
    "p_diffusion_in_nwell",
    "n_diffusion_outside_nwell",
)
"""Regions in the order in which reports list them."""

P_IN_NWELL = 0
N_OUTSIDE_NWELL = 1
EMITTER_KINDS = ("p_in_nwell", "n_outside_nwell")
WELL_TAP = 0
SUBSTRATE_TAP = 1

BodyKind = Literal["nwell", "isolated_pwell", "substrate"]
SheetKind = Literal["nwell", "nwell_over_buried", "buried", "isolated_pwell", "pwell"]


def frozen(array: NDArray[Any]) -> NDArray[Any]:
    """Return the same array, marked read-only."""
    array.setflags(write=False)
    return array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Label:
    """A text of the layout at a point (x, y) [um]."""

    text: str
    layer: int
    texttype: int
    x_um: float
    y_um: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Regions:
    """Merged regions of the block, each a column of disjoint polygons sorted by (y0, x0).

    Attributes
    ----------
    bbox_um
        Box that was analysed: the top cell's bounding box or the window.
    shapes
        Region name -> polygons; the names of `REGION_NAMES` plus ``buried`` and ``injector``
        (both may be empty).  Two polygons of a region never touch along an edge.
    contact_box_um
        (n, 4) boxes of the contacts that lie on a tap, sorted by (y0, x0).
    labels
        Texts on the technology's label layers, sorted by (y, x, text).
    """

    bbox_um: Box
    shapes: Mapping[str, Geometries]
    contact_box_um: Floats
    labels: tuple[Label, ...]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Body:
    """One conducting body: a well (with all wells on one buried layer) or the substrate.

    Attributes
    ----------
    id
        ``nwell-3``, ``pwell-1`` (isolated) or ``substrate``; numbered by (y, x).
    polygons
        The drawn well polygons of the body; for the substrate the p-well outside every
        isolated p-well.
    sheets
        The conducting sheet in disjoint parts: (sheet kind, polygon) pairs that together
        cover the body; neighbours share edges.
    enclosing
        For an isolated p-well the index of the n-well body around it, else -1.
    """

    id: str
    kind: BodyKind
    polygons: Geometries
    sheets: tuple[tuple[SheetKind, Any], ...]
    enclosing: int = -1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Taps:
    """Taps, one row each, sorted by (kind, y0, x0).

    Attributes
    ----------
    polygons
        (t,) shapely polygons.
    kind
        (t,) `WELL_TAP` or `SUBSTRATE_TAP`.
    body
        (t,) index into the bodies.
    contact_count
        (t,) contacts on the tap; a tap without contacts does not count as a tap.
    contact_first
        (t + 1,) offsets into `contact_box_um`.
    contact_box_um
        (c, 4) boxes of the contacts, grouped by tap.
    """

    polygons: Geometries
    kind: Ints
    body: Ints
    contact_count: Ints
    contact_first: Ints
    contact_box_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Emitters:
    """Emitters (diffusion pieces after gates are cut out), sorted by (kind, y0, x0).

    Attributes
    ----------
    ids
        (n,) ``p-12`` or ``n-3``, numbered within their kind from 1.
    polygons
        (n,) shapely polygons.
    kind
        (n,) `P_IN_NWELL` or `N_OUTSIDE_NWELL`.
    body
        (n,) index of the body the emitter lies in.
    box_um
        (n, 4) bounding boxes x0, y0, x1, y1.
    area_um2
        (n,) areas.
    over_buried
        (n,) True where most of the emitter lies over the buried layer.
    injector
        (n,) name of the pin or marker that makes it an injector, "" where it is none.
    """

    ids: NDArray[np.str_]
    polygons: Geometries
    kind: Ints
    body: Ints
    box_um: Floats
    area_um2: Floats
    over_buried: NDArray[np.bool_]
    injector: NDArray[np.str_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Layout:
    """Everything known of the block before any field is solved."""

    regions: Regions
    bodies: tuple[Body, ...]
    taps: Taps
    emitters: Emitters


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Distances:
    """Measures of the layout, aligned with the emitters (n) and taps (t).

    Attributes
    ----------
    tap_distance_um
        (n,) distance of the emitter's farthest point from the nearest contacted tap of its
        own body; NaN where the body has none.
    farthest_um
        (n, 2) that farthest point (x, y).
    nearest_tap_um
        (n, 2) the point (x, y) of the tap that is nearest to it.
    tap_reach_um
        (t,) largest distance of any point of the tap from its nearest contact; NaN without.
    tap_reach_at_um
        (t, 2) the point (x, y) of that largest distance.
    """

    tap_distance_um: Floats
    farthest_um: Floats
    nearest_tap_um: Floats
    tap_reach_um: Floats
    tap_reach_at_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spacings:
    """Distance of every injector from the nearest opposite half of a thyristor.

    Attributes
    ----------
    emitter
        (m,) index of the injector among the emitters.
    body
        (m,) for an n+ injector the nearest n-well body, for a p+ injector the body of the
        nearest n+ emitter outside wells; -1 where the block has none.
    spacing_um
        (m,) distance, NaN where there is none.
    from_um, to_um
        (m, 2) the two end points (x, y).
    """

    emitter: Ints
    body: Ints
    spacing_um: Floats
    from_um: Floats
    to_um: Floats


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pairs:
    """Candidate thyristors: one anode in an n-well body, one cathode outside it.

    Attributes
    ----------
    anode
        (m,) index among the emitters (a p+ emitter), or ``n_emitters + b`` where body b is
        an isolated p-well that acts as anode of its enclosing n-well.
    cathode
        (m,) index among the emitters (an n+ emitter).
    well
        (m,) body index of the n-well (the PNP's base).
    base
        (m,) body index of the cathode's body (the NPN's base).
    spacing_um
        (m,) smallest anode-to-cathode distance.
    base_width_um
        (m,) smallest distance from the cathode to the n-well's edge.
    edge_um
        (m, 2) the point (x, y) of the n-well's edge nearest the cathode: the place where
        the cathode's electrons are collected.
    arrival_um
        (m, 2) the point (x, y) where the anode's holes enter the cathode's body: under the
        anode for the substrate, the nearest point of its edge for an isolated p-well.
    """

    anode: Ints
    cathode: Ints
    well: Ints
    base: Ints
    spacing_um: Floats
    base_width_um: Floats
    edge_um: Floats
    arrival_um: Floats
