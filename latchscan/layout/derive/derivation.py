"""The technology's role expressions as one list of steps, each wanted result once.

In: the technology.  Out: a frozen `Program` that any window can run.  Derived names are
replaced by what they stand for; equal parts of different roles become one step.

Two ideas keep the steps cheap.  A complement is never drawn: every step is known to hold
either a region or what the region leaves over, and ``a and not b`` is a difference.  And a
step is *wide* only where an offset needs its surroundings: all other steps see the window
without any margin.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from latchscan.layout.model import REGION_NAMES
from latchscan.technology.expressions import (
    And,
    Expression,
    Grow,
    Name,
    Not,
    Or,
    Shrink,
    Wider,
    parse_expression,
)
from latchscan.technology.model import Technology

StepKind = Literal["layer", "not", "and", "or", "grow", "shrink", "wider"]
OFFSET_KINDS: Mapping[type, StepKind] = {Grow: "grow", Shrink: "shrink", Wider: "wider"}
TAPS = ("well_tap", "substrate_tap")
DRAWN_REGIONS = (*REGION_NAMES, "buried", "injector")
MITRE_LIMIT = 3
"""Longest corner of an offset in multiples of the offset: a 45 degree corner needs 2.61."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """One partial result.

    Attributes
    ----------
    kind
        What is done.
    items
        Steps that it is done to, before it in the program.
    complemented
        True where the result is what the drawn polygons leave uncovered.
    wide
        True where the result must also hold in the window's margin.
    layer
        Name of the layer of a ``layer`` step.
    um
        Length of an offset [um].
    """

    kind: StepKind
    items: tuple[int, ...] = ()
    complemented: bool = False
    wide: bool = False
    layer: str = ""
    um: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Program:
    """The steps in an order in which each comes after its items.

    Attributes
    ----------
    steps
        All steps.
    regions
        Region name -> step.
    contact
        The step of the contacts, -1 where they are plain layers or not asked for.
    contact_layers
        Layers whose shapes are the contacts, where the expression is no more than that.
    margin_um
        Margin that the wide steps need around a window [um].
    """

    steps: tuple[Step, ...]
    regions: tuple[tuple[str, int], ...]
    contact: int
    contact_layers: tuple[str, ...]
    margin_um: float

    def layers(self, *, wide: bool) -> tuple[str, ...]:
        """Layers that are needed with (`wide`) or without the margin, sorted."""
        found = {s.layer for s in self.steps if s.kind == "layer" and s.wide == wide}
        return tuple(sorted(found))


@dataclass(slots=True)
class _Builder:
    """Collects steps; equal ones are kept once."""

    derived: Mapping[str, Expression]
    steps: list[Step] = field(default_factory=list)
    known: dict[Step, int] = field(default_factory=dict)

    def add(self, expression: Expression, *, wide: bool) -> int:
        """Index of the step that holds the expression."""
        match expression:
            case Name(name) if name in self.derived:
                return self.add(self.derived[name], wide=wide)
            case Name(name):
                return self.keep(Step(kind="layer", layer=name, wide=wide))
            case Not(item):
                return self.negate(self.add(item, wide=wide))
            case And(items) | Or(items):
                parts = [self.add(item, wide=wide) for item in items]
                return self.combine("and" if isinstance(expression, And) else "or", parts, wide)
            case Grow(item, um) | Shrink(item, um) | Wider(item, um):
                inner = self.add(item, wide=True)
                kind = OFFSET_KINDS[type(expression)]
                return self.keep(Step(kind=kind, items=(inner,), um=um, wide=wide))

    def keep(self, step: Step) -> int:
        """Index of a step, new or known."""
        if step not in self.known:
            self.known[step] = len(self.steps)
            self.steps.append(step)
        return self.known[step]

    def negate(self, item: int) -> int:
        """The complement of a step: the same polygons, read the other way round."""
        step = self.steps[item]
        if step.kind == "not":
            return step.items[0]
        flag = not step.complemented
        return self.keep(Step(kind="not", items=(item,), complemented=flag, wide=step.wide))

    def combine(self, kind: StepKind, items: list[int], wide: bool) -> int:
        """Conjunction or disjunction of steps."""
        if kind == "and":
            items = [part for item in items for part in self.conjuncts(item)]
        # single layers first, they are the cheapest
        unique = sorted(set(items), key=lambda i: (self.steps[i].kind != "layer", i))
        plain = [item for item in unique if not self.steps[item].complemented]
        if kind == "and" and plain:
            # two by two, so that roles that begin alike share their beginnings
            shared = plain[0]
            for item in plain[1:]:
                shared = self.keep(Step(kind="and", items=(shared, item), wide=wide))
            unique = [shared, *(item for item in unique if self.steps[item].complemented)]
        if len(unique) == 1:
            return unique[0]
        flags = [self.steps[i].complemented for i in unique]
        complemented = all(flags) if kind == "and" else any(flags)
        return self.keep(Step(kind=kind, items=tuple(unique), complemented=complemented, wide=wide))

    def conjuncts(self, item: int) -> tuple[int, ...]:
        """The items of a conjunction, nested ones taken apart; any other step alone."""
        step = self.steps[item]
        if step.kind != "and" or step.complemented:
            return (item,)
        return tuple(part for inner in step.items for part in self.conjuncts(inner))


def compile_program(technology: Technology) -> Program:
    """The steps of all roles of a technology.

    Raises
    ------
    TechnologyError
        If an expression cannot be read (a checked technology has none).
    """
    roles = {name: getattr(technology.roles, name) for name in DRAWN_REGIONS}
    return _compiled(
        technology,
        {name: text for name, text in roles.items() if text is not None},
        technology.roles.contact,
    )


def compile_expressions(technology: Technology, expressions: Mapping[str, str]) -> Program:
    """The steps of any expressions by name, without contacts.

    Raises
    ------
    TechnologyError
        If an expression cannot be read (a checked technology has none).
    """
    return _compiled(technology, expressions, None)


def _compiled(
    technology: Technology, expressions: Mapping[str, str], contact_text: str | None
) -> Program:
    derived = derived_expressions(technology)
    builder = _Builder(derived)
    regions = tuple(
        (name, builder.add(parse_expression(text), wide=False))
        for name, text in expressions.items()
    )
    contact_layers: tuple[str, ...] = ()
    index = -1
    if contact_text is not None:
        contact = parse_expression(contact_text)
        contact_layers = plain_layers(contact, derived)
        index = builder.add(contact, wide=True) if not contact_layers else -1
    steps = tuple(builder.steps)
    return Program(
        steps=steps,
        regions=regions,
        contact=index,
        contact_layers=contact_layers,
        margin_um=max((_reach_um(steps, i) for i in range(len(steps))), default=0.0),
    )


def derived_expressions(technology: Technology) -> dict[str, Expression]:
    """The technology's derived names and what they stand for."""
    return {name: parse_expression(text) for name, text in technology.derived.items()}


def plain_layers(expression: Expression, derived: Mapping[str, Expression]) -> tuple[str, ...]:
    """Layers of an expression that is one layer or an ``or`` of layers, else none."""
    match expression:
        case Name(name) if name in derived:
            return plain_layers(derived[name], derived)
        case Name(name):
            return (name,)
        case Or(items):
            parts = [plain_layers(item, derived) for item in items]
            return tuple(sorted({n for part in parts for n in part})) if all(parts) else ()
        case _:
            return ()


def _reach_um(steps: tuple[Step, ...], index: int) -> float:
    """Distance over which the surroundings decide on a step, corners included [um]."""
    step = steps[index]
    own = step.um * MITRE_LIMIT
    return own + max((_reach_um(steps, item) for item in step.items), default=0.0)
