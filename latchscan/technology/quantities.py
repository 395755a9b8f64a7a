"""Building blocks of a technology's values: text forms, numbers with a range, their limits.

Ranges are those outside which a number is a slip of the pen or of the unit, not a rare
process.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Any, Self, TypeAlias

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

LARGEST_LAYER = 65535
"""GDSII stores layer and datatype numbers in two bytes."""


def _require_two_bytes(pair: str) -> str:
    if max(layer_numbers(pair)) > LARGEST_LAYER:
        raise PydanticCustomError(
            "layer_outside",
            "number out of range, expected 0 to {largest}",
            {"largest": LARGEST_LAYER},
        )
    return pair


def layer_numbers(pair: str) -> tuple[int, int]:
    """Layer and datatype (or texttype) of a pair.

    Examples
    --------
    >>> layer_numbers("31/0")
    (31, 0)
    """
    layer, datatype = pair.split("/")
    return int(layer), int(datatype)


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


class Strict(BaseModel):
    """Base of every part of the file: frozen, no unknown keys, no quiet conversions."""

    model_config = ConfigDict(
        frozen=True, extra="forbid", strict=True, use_attribute_docstrings=True
    )


MEMBERS = ("low", "typical", "high")


class Quantity(Strict):
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
WiringSheetResistance: TypeAlias = Annotated[Quantity, Within(1.0e-4, 1.0e6)]
ContactResistance: TypeAlias = Annotated[Quantity, Within(0.0, 1.0e5)]
Doping: TypeAlias = Annotated[Quantity, Within(1.0e11, 1.0e21)]
Gain: TypeAlias = Annotated[Quantity, Within(1.0e-3, 1.0e4)]
SaturationDensity: TypeAlias = Annotated[Quantity, Within(1.0e-24, 1.0e-9)]
KneeDensity: TypeAlias = Annotated[Quantity, Within(1.0e-9, 1.0)]
Exponent: TypeAlias = Annotated[Quantity, Within(0.0, 10.0)]
Share: TypeAlias = Annotated[Quantity, Within(1.0e-6, 1.0)]
Distance: TypeAlias = Annotated[FiniteFloat, Field(gt=0, le=1.0e4)]
DistanceOrZero: TypeAlias = Annotated[FiniteFloat, Field(ge=0, le=1.0e4)]
Fraction: TypeAlias = Annotated[FiniteFloat, Field(gt=0, le=1)]
