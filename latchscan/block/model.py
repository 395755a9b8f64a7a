"""The block file as typed values; docstrings of fields are what editors show.

Every name is a text of the layout, exact and case-sensitive.
"""

from __future__ import annotations

import math
from typing import Annotated, Literal, TypeAlias

from pydantic import (
    AfterValidator,
    BeforeValidator,
    Field,
    FiniteFloat,
    ValidationInfo,
    field_validator,
)
from pydantic_core import PydanticCustomError

from latchscan.technology.document import shown_text
from latchscan.technology.quantities import Strict

FORMAT = "latchscan-block"

TEST_SHARE_OF_HIGH_V = 1.5
"""Supply level of the over-voltage test per highest working voltage (JESD78, from memory)."""

BOX_NUMBERS = 4
LARGEST_UM = 1.0e7
"""Ten metres: no layout is larger."""


def name_fault(name: str) -> str:
    """Why a text cannot be a name in a block file, "" where it can.

    Examples
    --------
    >>> name_fault("VDD"), name_fault("")
    ('', 'empty, expected a name as the layout writes it')
    """
    if not name:
        return "empty, expected a name as the layout writes it"
    if any(character.isspace() for character in name):
        return f"{shown_text(name)} has white space in it, expected a name without any"
    if any("\ud800" <= character <= "\udfff" for character in name):
        return f"{shown_text(name)} holds half a character, expected whole ones"
    return ""


def _require_name(name: str) -> str:
    fault = name_fault(name)
    if fault:
        raise PydanticCustomError("net_name", "{fault}", {"fault": fault})
    return name


def _require_text(text: str) -> str:
    if not text.strip():
        raise PydanticCustomError("blank_text", "empty, expected some text")
    return text


def _require_four(value: object) -> object:
    if isinstance(value, (tuple, list)) and len(value) != BOX_NUMBERS:
        raise PydanticCustomError(
            "box_length",
            "got {count} numbers, expected four: [x0, y0, x1, y1]",
            {"count": len(value)},
        )
    return value


def _require_extent(box: tuple[float, float, float, float]) -> tuple[float, float, float, float]:
    x0, y0, x1, y1 = box
    if x0 >= x1 or y0 >= y1:
        raise PydanticCustomError(
            "box_order",
            "corners the wrong way round, expected x0 < x1 and y0 < y1, got {got}",
            {"got": ", ".join(f"{number:g}" for number in box)},
        )
    return box


NetName: TypeAlias = Annotated[str, AfterValidator(_require_name)]
Volts: TypeAlias = Annotated[FiniteFloat, Field(ge=0, le=1.0e3)]
Micrometres: TypeAlias = Annotated[FiniteFloat, Field(ge=-LARGEST_UM, le=LARGEST_UM)]
BoxUm: TypeAlias = Annotated[
    tuple[Micrometres, Micrometres, Micrometres, Micrometres],
    BeforeValidator(_require_four),
    AfterValidator(_require_extent),
    Field(strict=False),
]
PinKind: TypeAlias = Literal["signal", "supply", "ground", "internal", "not_bonded"]


class Supply(Strict):
    """Voltages of one supply."""

    low_v: Volts
    """Lowest voltage in normal work [V]."""
    typical_v: Volts
    """Usual voltage [V]."""
    high_v: Volts
    """Highest voltage in normal work [V]."""
    test_v: Volts | None = None
    """Voltage that the supply's over-voltage test forces [V]; 1.5 x `high_v` unless given."""

    @field_validator("typical_v")
    @classmethod
    def _not_below_low(cls, value: float, info: ValidationInfo) -> float:
        return _require_not_below(value, "typical_v", "low_v", info)

    @field_validator("high_v")
    @classmethod
    def _not_below_typical(cls, value: float, info: ValidationInfo) -> float:
        # Low and high given the wrong way round is one slip, told at `typical_v`: a value that
        # is wrong already is compared with nothing.
        return _require_not_below(value, "high_v", "typical_v", info)

    @field_validator("test_v")
    @classmethod
    def _above_high(cls, value: float | None, info: ValidationInfo) -> float | None:
        high = info.data.get("high_v")
        if value is not None and high is not None and value <= high:
            raise PydanticCustomError(
                "test_level",
                "test level not above the supply's range, expected more than high_v {high},"
                " got {got}",
                {"high": f"{high:g}", "got": f"{value:g}"},
            )
        return value

    @property
    def test_level_v(self) -> float:
        """Voltage of the over-voltage test [V], by the usual share where none is given."""
        return TEST_SHARE_OF_HIGH_V * self.high_v if self.test_v is None else self.test_v


def _require_not_below(value: float, key: str, other: str, info: ValidationInfo) -> float:
    least = info.data.get(other)
    if least is not None and math.isfinite(least) and value < least:
        raise PydanticCustomError(
            "voltage_order",
            "voltages the wrong way round, expected low_v <= typical_v <= high_v, got"
            " {other} {least} and {key} {value}",
            {"other": other, "least": f"{least:g}", "key": key, "value": f"{value:g}"},
        )
    return value


class BlockPin(Strict):
    """One pin of the block."""

    kind: PinKind
    """What the pin is: signal, supply, ground, internal or not_bonded.

    An internal pin is a net with no way outside; no wire leads to one that is not bonded."""
    supply: str | None = None
    """Supply that the pin's drivers and clamps work from."""
    test_current_a: Annotated[FiniteFloat, Field(gt=0, le=10)] = 0.1
    """Current that the test forces into the pin and out of it [A]."""


class LeftOut(Strict):
    """A part of the layout that is not to be looked at."""

    box_um: BoxUm
    """Its corners [x0, y0, x1, y1] [um]."""
    reason: Annotated[str, AfterValidator(_require_text)]
    """Why it is left out, as reports show it."""


class Block(Strict):
    """What the layout alone cannot say about a block."""

    top: Annotated[str, AfterValidator(_require_text)] | None = None
    """Top cell of the layout; needed only where the layout has several."""
    temperature_c: Annotated[FiniteFloat, Field(ge=-55, le=200)] | None = None
    """Temperature of a scan instead of the technology's [degrees Celsius]."""
    supplies: dict[NetName, Supply] = Field(default_factory=dict)
    """Supply nets by name, with their voltages."""
    grounds: tuple[NetName, ...] = Field(default=(), strict=False)
    """Names of the ground nets: [VSS]."""
    pins: dict[NetName, BlockPin] = Field(default_factory=dict)
    """Pins by name."""
    joined: tuple[tuple[NetName, ...], ...] = Field(default=(), strict=False)
    """Groups of names that are one net outside this layout: [[VSS, VSSIO]]."""
    leave_out: tuple[LeftOut, ...] = Field(default=(), strict=False)
    """Parts of the layout to leave out."""
    internal_injectors: bool = False
    """Whether diffusions on internal nodes and on foreign supplies count as injectors too."""


class BlockFile(Block):
    """A whole block file."""

    format: Literal["latchscan-block"]
    """`latchscan-block`, which says what the file is."""
    format_version: Literal[1]
    """1, the version of the file's own format."""
