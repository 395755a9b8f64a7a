"""The technology: every number and name of a process, typed, with its unit in its name.

These classes are both the validator of the YAML file and the frozen value that the rest of
the program reads.  Keys of the file are exactly the field names below.  Lengths are in um
and resistances in ohm; the two customary exceptions (``_ohm_cm``, ``_cm3``) are converted
by properties here and nowhere else.

The text under a field is what editors show for its key, by way of the JSON Schema.  Ranges
are those outside which a number is a slip of the pen or of the unit, not a rare process.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, Any, Literal, Self, TypeAlias

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    FiniteFloat,
    GetCoreSchemaHandler,
    GetJsonSchemaHandler,
    StringConstraints,
    model_validator,
)
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

UM_PER_CM = 1.0e4
LARGEST_LAYER = 65535
"""GDSII stores layer and datatype numbers in two bytes."""


def _require_two_bytes(pair: str) -> str:
    if any(int(number) > LARGEST_LAYER for number in pair.split("/")):
        raise PydanticCustomError(
            "layer_outside",
            "number out of range, expected 0 to {largest}",
            {"largest": LARGEST_LAYER},
        )
    return pair


LayerPair: TypeAlias = Annotated[
    str,
    StringConstraints(pattern=r"^(0|[1-9][0-9]{0,4})/(0|[1-9][0-9]{0,4})$"),
    AfterValidator(_require_two_bytes),
]
Name: TypeAlias = Annotated[str, StringConstraints(pattern=r"^[a-z][a-z0-9_]*$")]
ExpressionText: TypeAlias = Annotated[
    str,
    Field(examples=["active and pplus and not poly", "grow(wider(nwell, 3.0), 1.0)"]),
]
Severity: TypeAlias = Literal["fail", "watch", "off"]


class _Strict(BaseModel):
    model_config = ConfigDict(
        frozen=True, extra="forbid", strict=True, use_attribute_docstrings=True
    )


MEMBERS = ("low", "typical", "high")


class Quantity(_Strict):
    """A physical number with an optional range and its origin.

    In the file it is either a bare number or a mapping with ``typical`` and, when known,
    ``low``, ``high``, ``source`` (where the value is published) or ``assumption: true``.
    """

    typical: FiniteFloat
    """The value that a scan uses."""
    low: FiniteFloat | None = None
    """Smallest value to be expected."""
    high: FiniteFloat | None = None
    """Largest value to be expected."""
    source: str | None = None
    """Where the value is published: document, revision, section."""
    assumption: bool = False
    """True where nothing is published; `low` and `high` are then needed."""

    @model_validator(mode="before")
    @classmethod
    def _accept_bare_number(cls, value: Any) -> Any:
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            return {"typical": value}
        return value

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        low = self.typical if self.low is None else self.low
        high = self.typical if self.high is None else self.high
        wrong = [
            m for m, bad in (("low", low > self.typical), ("high", high < self.typical)) if bad
        ]
        if wrong:
            raise PydanticCustomError(
                "quantity_order",
                "out of order, expected low <= typical <= high, got {low}, {typical}, {high}",
                {
                    "members": ["low" if low > self.typical else "high"],
                    "low": f"{low:g}",
                    "typical": f"{self.typical:g}",
                    "high": f"{high:g}",
                },
            )
        if self.assumption and (self.low is None or self.high is None):
            raise PydanticCustomError(
                "quantity_range",
                "an assumption without its range, expected `low` and `high` beside `typical`",
            )
        return self


@dataclass(frozen=True, slots=True)
class Within:
    """Range that every member of a quantity must keep, ends included."""

    smallest: float
    largest: float

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> CoreSchema:
        return core_schema.no_info_after_validator_function(self._kept, handler(source))

    def __get_pydantic_json_schema__(
        self, schema: CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        number = {"type": "number", "minimum": self.smallest, "maximum": self.largest}
        whole = dict(handler.resolve_ref_schema(handler(schema)))
        members = {
            key: {**number, "description": member["description"]} if key in MEMBERS else member
            for key, member in whole["properties"].items()
        }
        return {"anyOf": [number, {**whole, "properties": members}]}

    def _kept(self, value: Quantity) -> Quantity:
        wrong = [
            member
            for member in MEMBERS
            if (number := getattr(value, member)) is not None
            and not self.smallest <= number <= self.largest
        ]
        if wrong:
            raise PydanticCustomError(
                "quantity_outside",
                "out of range, expected {smallest} to {largest}, got {got}",
                {
                    "members": wrong,
                    "smallest": f"{self.smallest:g}",
                    "largest": f"{self.largest:g}",
                    "got": ", ".join(f"{getattr(value, member):g}" for member in wrong),
                },
            )
        return value


SheetResistance: TypeAlias = Annotated[Quantity, Within(0.1, 1.0e6)]
ContactResistance: TypeAlias = Annotated[Quantity, Within(0.0, 1.0e5)]
Doping: TypeAlias = Annotated[Quantity, Within(1.0e11, 1.0e21)]
Gain: TypeAlias = Annotated[Quantity, Within(1.0e-3, 1.0e4)]
SaturationDensity: TypeAlias = Annotated[Quantity, Within(1.0e-24, 1.0e-9)]
KneeDensity: TypeAlias = Annotated[Quantity, Within(1.0e-9, 1.0)]
Exponent: TypeAlias = Annotated[Quantity, Within(0.0, 10.0)]
Share: TypeAlias = Annotated[Quantity, Within(1.0e-6, 1.0)]
Distance: TypeAlias = Annotated[FiniteFloat, Field(gt=0, le=1.0e4)]


class Layer(_Strict):
    """One drawn layer: its layer/datatype pairs and whether a layout must have it."""

    gds: tuple[LayerPair, ...] = Field(min_length=1, strict=False)
    """Pairs as text, layer before datatype: ["31/0"]."""
    required: bool = False
    """True where a layout without this layer is refused."""


class Roles(_Strict):
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


class Labels(_Strict):
    """Text layers whose strings name the shape beneath them, and which names are supplies."""

    layers: tuple[LayerPair, ...] = Field(default=(), strict=False)
    """Layer/texttype pairs of the texts."""
    power_names: tuple[str, ...] = Field(default=(), strict=False)
    """Names of the positive supplies."""
    ground_names: tuple[str, ...] = Field(default=(), strict=False)
    """Names of the grounds."""


class Wells(_Strict):
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


class SubstrateLayer(_Strict):
    """One horizontal layer of the substrate, listed from the surface downwards."""

    resistivity_ohm_cm: Annotated[Quantity, Within(1.0e-4, 1.0e5)]
    """Resistivity [ohm cm]."""
    thickness_um: Annotated[Quantity, Within(1.0e-2, 5.0e3)]
    """Thickness [um]."""

    @property
    def resistivity_ohm_um(self) -> float:
        """Typical resistivity [ohm um]."""
        return self.resistivity_ohm_cm.typical * UM_PER_CM


class Substrate(_Strict):
    """The stack under the wells, and the p-well sheet on top of it."""

    layers: tuple[SubstrateLayer, ...] = Field(min_length=1, strict=False)
    """Layers from the surface downwards."""
    back_side: Literal["contacted", "floating"]
    """Whether the wafer's back is tied to ground."""
    pwell_sheet_resistance_ohm_sq: SheetResistance | None = None
    """p-well outside n-wells, parallel to the stack beneath it [ohm/sq]."""
    substrate_tap_contact_resistance_ohm: ContactResistance
    """Resistance of one contact of a substrate tap [ohm]."""


class VerticalPnp(_Strict):
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


class LateralNpn(_Strict):
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


class Transistors(_Strict):
    """The two parasitic transistors."""

    vertical_pnp: VerticalPnp
    lateral_npn: LateralNpn


class Loop(_Strict):
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


class _Rule(_Strict):
    source: str = ""
    """Where the limit is published or why it was chosen."""


class TapDistanceRule(_Rule):
    """Limits of the rule ``tap-distance``: any point of a diffusion to its body's tap."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    p_diffusion_max_um: Distance
    """p+ in an n-well to the nearest well tap [um]."""
    n_diffusion_max_um: Distance
    """n+ outside n-wells to the nearest substrate tap [um]."""


class UntiedBodyRule(_Rule):
    """Severity of the rule ``untied-body``: a well or substrate without a contacted tap."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class UncontactedTapRule(_Rule):
    """Severity of the rule ``uncontacted-tap``: a tap without a contact."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""


class TapReachRule(_Rule):
    """Limit of the rule ``tap-reach``: tap area beyond its last contact."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_um: Distance
    """Farthest point of a tap from its nearest contact [um]."""


class InjectorSpacingRule(_Rule):
    """Limit of the rule ``injector-spacing``: from an injector to the nearest foreign well."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    min_um: Distance
    """Smallest spacing allowed [um]."""


class WellResistanceRule(_Rule):
    """Limit of the rule ``well-resistance``: patch resistance of an emitter's well."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    max_ohm: Annotated[FiniteFloat, Field(gt=0, le=1.0e9)]
    """Largest patch resistance allowed [ohm]."""


class LoopGainRule(_Rule):
    """Limit of the rule ``loop-gain`` at the probe current."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_gain: Annotated[FiniteFloat, Field(gt=0, le=1.0e6)]
    """Largest loop gain allowed; a loop of gain 1 or more regenerates."""


class Rules(_Strict):
    """Limits and severities, one block a rule; the key is the rule's name."""

    tap_distance: TapDistanceRule = Field(alias="tap-distance")
    untied_body: UntiedBodyRule = Field(alias="untied-body", default_factory=UntiedBodyRule)
    uncontacted_tap: UncontactedTapRule = Field(
        alias="uncontacted-tap", default_factory=UncontactedTapRule
    )
    tap_reach: TapReachRule = Field(alias="tap-reach")
    injector_spacing: InjectorSpacingRule = Field(alias="injector-spacing")
    well_resistance: WellResistanceRule = Field(alias="well-resistance")
    loop_gain: LoopGainRule = Field(alias="loop-gain")


class Technology(_Strict):
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
    derived: dict[Name, ExpressionText] = {}
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
    rules: Rules
    """Limits of the rules."""

    def quantities(self) -> tuple[tuple[str, Quantity], ...]:
        """Every quantity with its key, such as ``substrate.layers[0].thickness_um``."""
        return tuple(_quantities(self, ""))


def _quantities(part: object, key: str) -> Iterator[tuple[str, Quantity]]:
    if isinstance(part, Quantity):
        yield key, part
    elif isinstance(part, BaseModel):
        for name in type(part).model_fields:
            yield from _quantities(getattr(part, name), f"{key}.{name}".removeprefix("."))
    elif isinstance(part, tuple):
        for index, item in enumerate(part):
            yield from _quantities(item, f"{key}[{index}]")
