"""Colours of the map: what each band of loop gain looks like, and the quiet drawing below it.

The bands' colours are computed here: lightness falls evenly from band to band while the hue
turns from straw over orange and red to plum, so that the order survives grey print and every
kind of colour blindness.  Colour space: B. Ottosson, "A perceptual color space for image
processing", 2020 (OKLab); contrast: W3C, *Web Content Accessibility Guidelines 2.1*, 2018,
"relative luminance" and "contrast ratio".
"""

from __future__ import annotations

import math
from dataclasses import dataclass

Rgb = tuple[int, int, int]

INK = "#1b1f24"
"""Text and outlines."""
FAINT_INK = "#515963"
"""Axis labels and other lesser text; still 4.5:1 and more on the paper and on a well."""
PAPER = "#ffffff"
WELL_FILL = "#e9edf1"
WELL_EDGE = "#9aa5b1"
TAP_FILL = "#2f7fb5"
P_FILL = "#b9bfc7"
N_FILL = "#d5d0c6"
INJECTOR_INK = "#0a5c3a"
RING_INK = "#1546c8"
PIN_INK = "#a8326f"
HIGHLIGHT = "#00b8d4"
"""Shapes of the net that is pointed at; no band comes near this hue."""
FAIL_INK = "#1b1f24"
WATCH_INK = "#515963"


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """One band of loop gain.

    Attributes
    ----------
    low
        Smallest loop gain of the band; the next band's `low` is its end.
    label
        The range in numbers.
    words
        What it means to a person.
    """

    low: float
    label: str
    words: str


BANDS: tuple[Band, ...] = (
    Band(low=0.0, label="below 0.01", words="very far from latching"),
    Band(low=0.01, label="0.01 to 0.1", words="far from latching"),
    Band(low=0.1, label="0.1 to 0.3", words="some way from latching"),
    Band(low=0.3, label="0.3 to 0.6", words="within reach of latching"),
    Band(low=0.6, label="0.6 to 1", words="close to latching"),
    Band(low=1.0, label="1 to 2", words="can latch"),
    Band(low=2.0, label="2 and above", words="can latch readily"),
)
"""Bands from weakest to strongest; the range of a band grows with the gain (log scale)."""

CAN_LATCH_BAND = 5
"""First band at which a site can latch."""

_LIGHTEST, _DARKEST = 0.93, 0.28
_FIRST_HUE_DEG, _LAST_HUE_DEG = 105.0, -25.0
_CHROMA = 0.155


def band_colours() -> tuple[Rgb, ...]:
    """Colour of every band, lightest first."""
    last = len(BANDS) - 1
    return tuple(_band_colour(index / last) for index in range(len(BANDS)))


def _band_colour(share: float) -> Rgb:
    """Colour at `share` (0 weakest, 1 strongest) of the way through the bands."""
    lightness = _LIGHTEST + share * (_DARKEST - _LIGHTEST)
    hue = math.radians(_FIRST_HUE_DEG + share * (_LAST_HUE_DEG - _FIRST_HUE_DEG))
    # little colour at both ends, where the gamut is narrow
    chroma = _CHROMA * (0.55 + 0.45 * math.sin(math.pi * share))
    while True:
        linear = oklab_to_linear(lightness, chroma * math.cos(hue), chroma * math.sin(hue))
        if all(0.0 <= value <= 1.0 for value in linear):
            return (_encoded(linear[0]), _encoded(linear[1]), _encoded(linear[2]))
        chroma *= 0.98


def oklab_to_linear(lightness: float, a: float, b: float) -> tuple[float, float, float]:
    """Linear red, green and blue (0 to 1 inside the gamut) of an OKLab colour.

    Examples
    --------
    >>> [round(value, 3) for value in oklab_to_linear(1.0, 0.0, 0.0)]
    [1.0, 1.0, 1.0]
    """
    long = (lightness + 0.3963377774 * a + 0.2158037573 * b) ** 3
    medium = (lightness - 0.1055613458 * a - 0.0638541728 * b) ** 3
    short = (lightness - 0.0894841775 * a - 1.2914855480 * b) ** 3
    return (
        4.0767416621 * long - 3.3077115913 * medium + 0.2309699292 * short,
        -1.2684380046 * long + 2.6097574011 * medium - 0.3413193965 * short,
        -0.0041960863 * long - 0.7034186147 * medium + 1.7076147010 * short,
    )


def _encoded(linear: float) -> int:
    """8-bit sRGB value (IEC 61966-2-1) of a linear share of light."""
    if linear <= 0.0031308:
        return round(255 * 12.92 * linear)
    return round(255 * (1.055 * math.pow(linear, 1 / 2.4) - 0.055))


def relative_luminance(colour: Rgb) -> float:
    """Relative luminance, 0 for black and 1 for white.

    Examples
    --------
    >>> round(relative_luminance((255, 255, 255)), 6)
    1.0
    """
    linear = [
        value / 255 / 12.92 if value / 255 <= 0.04045 else ((value / 255 + 0.055) / 1.055) ** 2.4
        for value in colour
    ]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: Rgb, other: Rgb) -> float:
    """Contrast ratio of two colours, 1 to 21.

    Examples
    --------
    >>> round(contrast((0, 0, 0), (255, 255, 255)), 3)
    21.0
    """
    low, high = sorted((relative_luminance(one), relative_luminance(other)))
    return (high + 0.05) / (low + 0.05)


def parse_hex(text: str) -> Rgb:
    """Red, green, blue of ``#rrggbb``."""
    return (int(text[1:3], 16), int(text[3:5], 16), int(text[5:7], 16))


def to_hex(colour: Rgb) -> str:
    """``#rrggbb`` of a colour."""
    return "#" + "".join(f"{value:02x}" for value in colour)
