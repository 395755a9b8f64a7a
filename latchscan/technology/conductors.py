"""What conducts: wiring layers from the silicon upwards, what joins them, resistors, pads.

The whole section is optional.  Without it a scan knows wells and diffusions, but not what
they are connected to.
"""

from __future__ import annotations

from typing import Literal, TypeAlias

from pydantic import Field

from latchscan.technology.quantities import (
    ContactResistance,
    ExpressionText,
    LayerPair,
    Name,
    Strict,
    WiringSheetResistance,
)

ConductorKind: TypeAlias = Literal["diffusion", "poly", "metal"]
WELL_CONDUCTOR = "nwell"
"""What a resistor made of a well names as its conductor: the role, not one of the list."""


class Conductor(Strict):
    """One conductor: the wiring of one layer, or the diffusions."""

    shape: ExpressionText
    """What of the layers conducts, the bodies of resistors cut out."""
    kind: ConductorKind = "metal"
    """`metal` counts as a perfect conductor between its contacts, `poly` as a resistance;
    `diffusion` stands for the taps, emitters and collectors in the silicon."""
    sheet_resistance_ohm_sq: WiringSheetResistance
    """Sheet resistance [ohm/sq]."""
    texts: tuple[LayerPair, ...] = Field(default=(), strict=False)
    """Layer/texttype pairs of texts that name this conductor and no other: ["8/25"]."""
    touches: tuple[str, ...] = Field(default=(), strict=False)
    """Other conductors that this one joins wherever both overlap, as local interconnect does."""


class Connection(Strict):
    """Contacts or vias: shapes that join whichever of the listed conductors they touch."""

    shape: ExpressionText
    """Contacts or vias of this kind."""
    joins: tuple[str, ...] = Field(min_length=2, strict=False)
    """Conductors that they join, two or more: [diffusion, poly, metal1]."""
    resistance_ohm: ContactResistance
    """Resistance of one of them [ohm]."""


class ResistorDevice(Strict):
    """A resistor by intent: a body that parts the conductor at its two ends."""

    shape: ExpressionText
    """The resistive body between its heads."""
    conductor: str
    """Conductor it is drawn in, or `nwell` for a resistor made of a well."""
    sheet_resistance_ohm_sq: WiringSheetResistance
    """Sheet resistance of the body [ohm/sq]."""
    contact_resistance_ohm: ContactResistance
    """Resistance of one contact of its heads [ohm]."""


class Pads(Strict):
    """Bond pads."""

    shape: ExpressionText
    """The openings over bond pads."""
    on: str
    """Conductor that the bond wire or bump lands on."""


class Conductors(Strict):
    """Wiring, contacts, vias, resistors and pads."""

    layers: dict[Name, Conductor] = Field(min_length=1)
    """Conductors from the silicon upwards; the last is the uppermost."""
    connections: dict[Name, Connection] = Field(default_factory=dict)
    """Contacts and vias."""
    resistors: dict[Name, ResistorDevice] = Field(default_factory=dict)
    """Resistors by intent."""
    pads: Pads | None = None
    """Bond pads; without them only texts name pins."""
