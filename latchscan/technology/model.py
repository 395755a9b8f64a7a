"""The technology: every number and name of a process, typed, with its unit in its name.

These classes are both the validator of the YAML file and the frozen value that the rest of
the program reads.  Keys of the file are exactly the field names below.  Lengths are in um
and resistances in ohm; the two customary exceptions (``_ohm_cm``, ``_cm3``) are converted
by properties here and nowhere else.  Numbers and their ranges are in `quantities`, wiring is
in `conductors` and the limits of the rules are in `limits`; what others need of them is
importable from here.

The text under a field is what editors show for its key, by way of the JSON Schema.  Ranges
are those outside which a number is a slip of the pen or of the unit, not a rare process.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import BaseModel, Field, FiniteFloat

from latchscan.technology.conductors import (
    Conductor,
    ConductorKind,
    Conductors,
    Connection,
    Pads,
    ResistorDevice,
)
from latchscan.technology.limits import (
    DoubleRingRule,
    ForwardBiasRule,
    InjectorSpacingRule,
    IsolationGapRule,
    LoopGainRule,
    NetNamesRule,
    RingContactsRule,
    RingGapRule,
    RingKind,
    RingMissingRule,
    RingNetRule,
    RingWidthRule,
    Rules,
    Severity,
    TapDistanceRule,
    TapReachRule,
    TieConflictRule,
    TieNetRule,
    TieResistanceRule,
    UncontactedTapRule,
    UntiedBodyRule,
    WellResistanceRule,
    WellSpacingRule,
)
from latchscan.technology.quantities import (
    ContactResistance,
    Distance,
    Doping,
    Exponent,
    ExpressionText,
    Fraction,
    Gain,
    KneeDensity,
    LayerPair,
    Name,
    Quantity,
    SaturationDensity,
    Share,
    SheetResistance,
    Strict,
    Within,
)

__all__ = [
    "UM_PER_CM",
    "Conductor",
    "ConductorKind",
    "Conductors",
    "Connection",
    "DoubleRingRule",
    "ForwardBiasRule",
    "InjectorSpacingRule",
    "IsolationGapRule",
    "Labels",
    "LateralNpn",
    "Layer",
    "Loop",
    "LoopGainRule",
    "NetNamesRule",
    "Pads",
    "Quantity",
    "ResistorDevice",
    "RingContactsRule",
    "RingGapRule",
    "RingKind",
    "RingMissingRule",
    "RingNetRule",
    "RingSearch",
    "RingWidthRule",
    "Roles",
    "Rules",
    "Severity",
    "Substrate",
    "SubstrateLayer",
    "TapDistanceRule",
    "TapReachRule",
    "Technology",
    "TieConflictRule",
    "TieNetRule",
    "TieResistanceRule",
    "Transistors",
    "UncontactedTapRule",
    "UntiedBodyRule",
    "VerticalPnp",
    "WellResistanceRule",
    "WellSpacingRule",
    "Wells",
]

UM_PER_CM = 1.0e4


class Layer(Strict):
    """One drawn layer: its layer/datatype pairs and whether a layout must have it."""

    gds: tuple[LayerPair, ...] = Field(min_length=1, strict=False)
    """Pairs as text, layer before datatype: ["31/0"]."""
    required: bool = False
    """True where a layout without this layer is refused."""


class Roles(Strict):
    """Expressions that derive each role from the layers and from ``derived`` names."""

    nwell: ExpressionText
    """The n-wells."""
    pwell: ExpressionText
    """Everything that is p-type at the surface, isolated p-wells included."""
    well_tap: ExpressionText
    """n+ diffusion that ties an n-well to its rail."""
    substrate_tap: ExpressionText
    """p+ diffusion that ties the p-well to its rail."""
    p_diffusion_in_nwell: ExpressionText
    """p+ emitters in n-wells, gates cut out."""
    n_diffusion_outside_nwell: ExpressionText
    """n+ emitters outside n-wells, gates cut out."""
    contact: ExpressionText
    """Contacts; those on a tap count."""
    buried: ExpressionText | None = None
    """Buried or deep n layer under n-wells and isolated p-wells."""
    injector: ExpressionText | None = None
    """Marker over diffusions that something outside can force beyond the rails."""


class Labels(Strict):
    """Text layers whose strings name the shape beneath them, and which names are supplies."""

    layers: tuple[LayerPair, ...] = Field(default=(), strict=False)
    """Layer/texttype pairs of the texts."""
    power_names: tuple[str, ...] = Field(default=(), strict=False)
    """Names of the positive supplies."""
    ground_names: tuple[str, ...] = Field(default=(), strict=False)
    """Names of the grounds."""
    remark_names: tuple[str, ...] = Field(default=(), strict=False)
    """Texts that name no net, such as device names and parameters."""


class Wells(Strict):
    """Sheet resistances of the wells by region and the resistance of their tap contacts."""

    nwell_sheet_resistance_ohm_sq: SheetResistance
    """n-well without a buried layer [ohm/sq]."""
    nwell_over_buried_sheet_resistance_ohm_sq: SheetResistance | None = None
    """n-well and buried layer together, where both lie over each other [ohm/sq]."""
    buried_sheet_resistance_ohm_sq: SheetResistance | None = None
    """Buried layer where no n-well lies over it [ohm/sq]."""
    isolated_pwell_sheet_resistance_ohm_sq: SheetResistance | None = None
    """p-well above a buried layer [ohm/sq]."""
    nwell_doping_cm3: Doping
    """Donors in the n-well, for its mobility's temperature law [1/cm3]."""
    well_tap_contact_resistance_ohm: ContactResistance
    """Resistance of one contact of a well tap [ohm]."""


class SubstrateLayer(Strict):
    """One horizontal layer of the substrate, listed from the surface downwards."""

    resistivity_ohm_cm: Annotated[Quantity, Within(1.0e-4, 1.0e5)]
    """Resistivity [ohm cm]."""
    thickness_um: Annotated[Quantity, Within(1.0e-2, 5.0e3)]
    """Thickness [um]."""

    @property
    def resistivity_ohm_um(self) -> float:
        """Typical resistivity [ohm um]."""
        return self.resistivity_ohm_cm.typical * UM_PER_CM


class Substrate(Strict):
    """The stack under the wells, and the p-well sheet on top of it."""

    layers: tuple[SubstrateLayer, ...] = Field(min_length=1, strict=False)
    """Layers from the surface downwards."""
    back_side: Literal["contacted", "floating"]
    """Whether the wafer's back is tied to ground."""
    pwell_sheet_resistance_ohm_sq: SheetResistance | None = None
    """p-well outside n-wells, parallel to the stack beneath it [ohm/sq]."""
    substrate_tap_contact_resistance_ohm: ContactResistance
    """Resistance of one contact of a substrate tap [ohm]."""


class VerticalPnp(Strict):
    """The p+ / n-well / substrate transistor."""

    beta: Gain
    """Current gain at 27 C, low injection."""
    beta_over_buried: Gain | None = None
    """Current gain over a buried layer."""
    saturation_current_density_a_um2: SaturationDensity
    """Saturation current per emitter area at 27 C [A/um2]."""
    knee_current_density_a_um2: KneeDensity
    """Collector current per emitter area above which the gain falls [A/um2]."""
    beta_temperature_exponent: Exponent
    """m in beta ~ (T/T0)^m, T in kelvin."""


class LateralNpn(Strict):
    """The n+ / substrate / n-well transistor, its gain in closed form of the spacing."""

    electron_diffusion_length_um: Annotated[Quantity, Within(0.1, 1.0e4)]
    """Diffusion length of electrons under the wells [um]."""
    emitter_efficiency: Share
    """Share of the emitter's current that electrons carry."""
    lateral_share: Share
    """Share of the injected electrons that head for the well rather than downwards."""
    calibration: Annotated[Quantity, Within(1.0e-3, 1.0e3)]
    """Measured gain divided by computed gain; 1 where nothing is measured."""
    saturation_current_density_a_um2: SaturationDensity
    """Saturation current per emitter area at 27 C [A/um2]."""
    knee_current_density_a_um2: KneeDensity
    """Collector current per emitter area above which the gain falls [A/um2]."""
    beta_temperature_exponent: Exponent
    """m in beta ~ (T/T0)^m, T in kelvin."""


class Transistors(Strict):
    """The two parasitic transistors."""

    vertical_pnp: VerticalPnp
    lateral_npn: LateralNpn


class Loop(Strict):
    """Conditions at which the thyristor's loop is evaluated."""

    supply_v: Annotated[FiniteFloat, Field(ge=0.1, le=1.0e3)]
    """Supply between the rails [V]."""
    probe_current_a: Annotated[FiniteFloat, Field(ge=1.0e-9, le=10.0)]
    """Collector current in each transistor at which the loop gain is stated [A]."""
    pair_reach_um: Annotated[FiniteFloat, Field(gt=0, le=1.0e3)] = 60.0
    """Anodes and cathodes farther apart than this are not paired [um]."""
    patch_radius_um: Annotated[FiniteFloat, Field(gt=0, le=1.0e3)] = 10.0
    """Emitters of one body this near are driven together for the patch value [um]."""
    source: str = ""
    """Where the conditions are published or why they were chosen."""


class RingSearch(Strict):
    """What counts as a guard ring and how far around an injector one is looked for."""

    reach_um: Distance = 30.0
    """Farthest strip from an injector that may belong to its ring [um]."""
    least_coverage: Fraction = 0.5
    """Share of the shortest closed curve around an injector that must run inside strips; what
    covers less of it is no ring."""
    contact_reach_um: Distance = 2.0
    """Distance from a contact up to which a strip's area counts as contacted [um]."""


class Technology(Strict):
    """A whole technology file."""

    format: Literal["latchscan-technology"]
    """Says what the file is."""
    format_version: Literal[1]
    """Version of the file's own format, not of the process."""
    name: Name
    """Short name of the process, as reports show it."""
    description: str = ""
    """One line for people."""
    temperature_c: Annotated[FiniteFloat, Field(ge=-55, le=200)] = 125.0
    """Temperature of a scan unless the command line gives another [degrees Celsius]."""
    layers: dict[Name, Layer] = Field(min_length=1)
    """Drawn layers by the names that expressions use."""
    derived: dict[Name, ExpressionText] = Field(default_factory=dict)
    """Names for intermediate results, in any order."""
    roles: Roles
    """What each role is drawn as."""
    labels: Labels = Labels()
    """Texts that name shapes."""
    wells: Wells
    """Resistances of the wells."""
    substrate: Substrate
    """Resistances of the substrate."""
    transistors: Transistors
    """Numbers of the parasitic transistors."""
    loop: Loop
    """Conditions of the loop's evaluation."""
    conductors: Conductors | None = None
    """What is connected to what; without it pins, ties and rings are not traced."""
    rings: RingSearch = RingSearch()
    """How guard rings are recognised."""
    rules: Rules
    """Limits of the rules."""

    def text_layers(self) -> tuple[LayerPair, ...]:
        """Layer/texttype pairs of all texts that can name a net, general ones first."""
        own = self.conductors.layers.values() if self.conductors is not None else ()
        return (*self.labels.layers, *(pair for layer in own for pair in layer.texts))

    def quantities(self) -> tuple[tuple[str, Quantity], ...]:
        """Every quantity with its key, such as ``substrate.layers[0].thickness_um``."""
        return tuple(_quantities(self, ""))


def _quantities(part: object, key: str) -> Iterator[tuple[str, Quantity]]:
    if isinstance(part, Quantity):
        yield key, part
    elif isinstance(part, BaseModel):
        for name in type(part).model_fields:
            yield from _quantities(getattr(part, name), f"{key}.{name}".removeprefix("."))
    elif isinstance(part, dict):
        for name, item in part.items():
            yield from _quantities(item, f"{key}.{name}")
    elif isinstance(part, tuple):
        for index, item in enumerate(part):
            yield from _quantities(item, f"{key}[{index}]")
