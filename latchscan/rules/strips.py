"""Guard rings and injectors, in words and boxes that several rules of rings share."""

from __future__ import annotations

import numpy as np
import shapely

from latchscan.layout.connections import RING_KINDS
from latchscan.layout.model import N_OUTSIDE_NWELL, Floats, Ints
from latchscan.rules.model import Evidence
from latchscan.rules.rails import short_name

MATERIAL_WORDS = {
    "substrate_tap": "substrate taps",
    "well_tap": "well taps",
    "nwell": "n-well",
    "n_strip": "n+ strips",
    "p_strip": "p+ strips",
}


def ring_title(evidence: Evidence, ring: int) -> str:
    """A ring in words: its kind, id and material."""
    rings = evidence.connections.rings
    kind = RING_KINDS[int(rings.kind[ring])]
    material = str(rings.material[ring])
    return f"{kind} ring {rings.ids[ring]} of {MATERIAL_WORDS.get(material, material)}"


def ring_boxes(evidence: Evidence, rows: Ints) -> Floats:
    """(k, 4) bounding boxes of rings [um]."""
    polygons = evidence.connections.rings.polygons[rows]
    return np.asarray(shapely.bounds(polygons), dtype=np.float64).reshape(-1, 4)


def guarded(evidence: Evidence, ring: int) -> str:
    """The injectors inside a ring in words: the first one and how many more."""
    rings = evidence.connections.rings
    first, last = int(rings.member_first[ring]), int(rings.member_first[ring + 1])
    if first == last:
        return "no injector"
    words = injector_title(evidence, int(rings.member_injector[first]))
    more = len({injector_id(evidence, int(i)) for i in rings.member_injector[first:last]}) - 1
    return words if more == 0 else f"{words} and {more} more"


def injector_id(evidence: Evidence, injector: int) -> str:
    """Id of the emitter that injects, or of the body where a whole well does."""
    injectors = evidence.connections.injectors
    emitter = int(injectors.emitter[injector])
    if emitter >= 0:
        return str(evidence.layout.emitters.ids[emitter])
    return evidence.layout.bodies[int(injectors.body[injector])].id


def injector_title(evidence: Evidence, injector: int) -> str:
    """An injector in words: its id and the pin that drives it."""
    connections = evidence.connections
    pin = int(connections.injectors.pin[injector])
    title = f"injector {injector_id(evidence, injector)}"
    return f"{title} ({short_name(str(connections.pins.names[pin]))})" if pin >= 0 else title


def injector_boxes(evidence: Evidence, rows: Ints) -> Floats:
    """(k, 4) bounding boxes of injectors [um]."""
    injectors, layout = evidence.connections.injectors, evidence.layout
    boxes = np.empty((len(rows), 4))
    for row, injector in enumerate(rows.tolist()):
        emitter = int(injectors.emitter[injector])
        boxes[row] = (
            layout.emitters.box_um[emitter]
            if emitter >= 0
            else shapely.total_bounds(layout.bodies[int(injectors.body[injector])].polygons)
        )
    return boxes


def emits_electrons(evidence: Evidence, rows: Ints) -> Ints:
    """(k,) 1 where an injector is n-type (an n+ emitter or an n-well), else 0."""
    injectors, layout = evidence.connections.injectors, evidence.layout
    emitter = injectors.emitter[rows]
    whole = np.array(
        [layout.bodies[row].kind == "nwell" for row in injectors.body[rows].tolist()],
        dtype=np.bool_,
    )
    # One more at the end for -1, so that a layout without emitters can be asked too.
    n_type = np.append(layout.emitters.kind == N_OUTSIDE_NWELL, False)
    return np.where(emitter >= 0, n_type[emitter], whole).astype(np.int64)
