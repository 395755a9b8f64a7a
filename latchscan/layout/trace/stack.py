"""The technology's conductors as numbered sorts of shapes, and which sorts touch to what end.

In: the technology.  Out: a `Stack`.  Sorts are numbered conductors first, from the silicon
upwards, then connections; a sort is *drawn* where plain layers (without the polygons of other
plain layers) are its shape, and derived by booleans otherwise.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from latchscan.layout.derive.derivation import derived_expressions, plain_layers
from latchscan.layout.file.tables import Pair
from latchscan.technology.conductors import WELL_CONDUCTOR, Conductors
from latchscan.technology.expressions import And, Expression, Name, Not, parse_expression
from latchscan.technology.model import Technology
from latchscan.technology.quantities import layer_numbers

PADS = "bond pads"
"""Name of the pads' polygons; no name of a technology has a space in it."""

Relation = tuple[int, int]
"""Two numbers of sorts, or of a probe and a sort."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Sort:
    """One conductor or connection.

    Attributes
    ----------
    name, kind
        Its name; ``metal``, ``poly``, ``diffusion`` or ``connection``.
    pairs, less
        Layer/datatype pairs of a drawn sort, and those whose polygons are cut out of it.
    expression
        Text of a derived sort's shape, "" for a drawn one.
    """

    name: str
    kind: str
    pairs: tuple[Pair, ...]
    less: tuple[Pair, ...]
    expression: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Probe:
    """Derived polygons that are asked what they touch but join nothing.

    Attributes
    ----------
    name
        ``body NAME`` of a resistor, or `PADS`.
    expression
        Text of the polygons' shape.
    sorts
        Sorts whose shapes are asked for.
    """

    name: str
    expression: str
    sorts: tuple[int, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Stack:
    """All sorts and what may join them.

    Attributes
    ----------
    sorts
        Conductors, then connections.
    conductor_count
        How many of them are conductors.
    joins
        Pairs of different sorts that become one where they touch.
    crossings
        Pairs (sort of kind poly, other sort) that touch without becoming one: the resistance
        of poly counts.
    probes
        Bodies of resistors in the technology's order, then the pads.
    """

    sorts: tuple[Sort, ...]
    conductor_count: int
    joins: tuple[Relation, ...]
    crossings: tuple[Relation, ...]
    probes: tuple[Probe, ...]

    def is_poly(self, sort: int) -> bool:
        """Whether a sort's resistance counts."""
        return self.sorts[sort].kind == "poly"

    def pairs(self) -> list[Pair]:
        """Layer/datatype pairs of all drawn sorts, sorted."""
        return sorted({pair for sort in self.sorts for pair in sort.pairs})


def build_stack(technology: Technology, conductors: Conductors) -> Stack:
    """Number the technology's conductors and connections."""
    layers, connections = conductors.layers, conductors.connections
    sorts = [
        *(_sort(technology, name, layer.kind, layer.shape) for name, layer in layers.items()),
        *(_sort(technology, name, "connection", c.shape) for name, c in connections.items()),
    ]
    number = {name: index for index, name in enumerate(layers)}
    touching: set[Relation] = set()
    for name, layer in layers.items():
        touching.update((number[name], number[other]) for other in layer.touches if other in number)
    for index, connection in enumerate(connections.values(), start=len(layers)):
        touching.update((number[other], index) for other in connection.joins)
    joins, crossings = set(), set()
    for one, other in touching:
        poly = [sorts[index].kind == "poly" for index in (one, other)]
        if one != other and poly[0] == poly[1]:
            joins.add((min(one, other), max(one, other)))
        elif one != other:
            crossings.add((one, other) if poly[0] else (other, one))
    return Stack(
        sorts=tuple(sorts),
        conductor_count=len(layers),
        joins=tuple(sorted(joins)),
        crossings=tuple(sorted(crossings)),
        probes=_probes(conductors, number),
    )


def _probes(conductors: Conductors, number: Mapping[str, int]) -> tuple[Probe, ...]:
    first = len(conductors.layers)
    found = []
    for name, device in conductors.resistors.items():
        sorts: list[int] = []
        if device.conductor != WELL_CONDUCTOR:
            sorts = [number[device.conductor]]
            sorts += [
                index
                for index, connection in enumerate(conductors.connections.values(), start=first)
                if device.conductor in connection.joins
            ]
        found.append(Probe(name=f"body {name}", expression=device.shape, sorts=tuple(sorts)))
    if conductors.pads is not None:
        pads = conductors.pads
        found.append(Probe(name=PADS, expression=pads.shape, sorts=(number[pads.on],)))
    return tuple(found)


def _sort(technology: Technology, name: str, kind: str, text: str) -> Sort:
    derived = derived_expressions(technology)
    drawn = _drawn(parse_expression(text), derived) if kind != "diffusion" else None
    if drawn is None:
        return Sort(name=name, kind=kind, pairs=(), less=(), expression=text)
    plain, less = (_pairs(technology, names) for names in drawn)
    return Sort(name=name, kind=kind, pairs=plain, less=less, expression="")


def _drawn(
    expression: Expression, derived: Mapping[str, Expression]
) -> tuple[tuple[str, ...], tuple[str, ...]] | None:
    """Layers that an expression is made of and layers that are cut out, or None."""
    while isinstance(expression, Name) and expression.name in derived:
        expression = derived[expression.name]
    plain = plain_layers(expression, derived)
    if plain:
        return plain, ()
    if not isinstance(expression, And):
        return None
    shapes = [item for item in expression.items if not isinstance(item, Not)]
    cuts = [plain_layers(i.item, derived) for i in expression.items if isinstance(i, Not)]
    if len(shapes) != 1 or not all(cuts) or not plain_layers(shapes[0], derived):
        return None
    return plain_layers(shapes[0], derived), tuple(name for cut in cuts for name in cut)


def _pairs(technology: Technology, names: tuple[str, ...]) -> tuple[Pair, ...]:
    found = {layer_numbers(pair) for name in names for pair in technology.layers[name].gds}
    return tuple(sorted(found))
