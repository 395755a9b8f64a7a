"""The bands' colours: order kept in grey and in every colour blindness, text readable.

The simulation of colour blindness is F. Viénot, H. Brettel, J. D. Mollon, "Digital video
colourmaps for checking the legibility of displays by dichromats", Color Research and
Application 24, 243, 1999 (matrices on linear sRGB, from memory, rounded).
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from latchscan.report import palette

DICHROMATS = {
    "protan": [[0.11238, 0.88762, 0.0], [0.11238, 0.88762, 0.0], [0.00401, -0.00401, 1.0]],
    "deutan": [[0.29275, 0.70725, 0.0], [0.29275, 0.70725, 0.0], [-0.02234, 0.02234, 1.0]],
}


def linear(colour: palette.Rgb) -> np.ndarray:
    """Linear light of an sRGB colour (IEC 61966-2-1)."""
    share = np.array(colour) / 255
    return np.where(share <= 0.04045, share / 12.92, ((share + 0.055) / 1.055) ** 2.4)


def test_luminance_falls_from_band_to_band() -> None:
    luminance = [palette.relative_luminance(colour) for colour in palette.band_colours()]
    steps = [(light + 0.05) / (dark + 0.05) for light, dark in itertools.pairwise(luminance)]
    assert min(steps) > 1.25, "neighbours must differ in grey print"


@pytest.mark.parametrize("kind", DICHROMATS)
def test_order_survives_colour_blindness(kind: str) -> None:
    seen = [
        float(np.array([0.2126, 0.7152, 0.0722]) @ np.array(DICHROMATS[kind]) @ linear(colour))
        for colour in palette.band_colours()
    ]
    assert all(light > 1.15 * dark for light, dark in itertools.pairwise(seen))


def oklab(light: np.ndarray) -> np.ndarray:
    """OKLab of linear light (B. Ottosson, 2020, the published matrices)."""
    cones = np.array(
        [
            [0.4122214708, 0.5363325363, 0.0514459929],
            [0.2119034982, 0.6806995451, 0.1073969566],
            [0.0883024619, 0.2817188376, 0.6299787005],
        ]
    )
    opponent = np.array(
        [
            [0.2104542553, 0.7936177850, -0.0040720468],
            [1.9779984951, -2.4285922050, 0.4505937099],
            [0.0259040371, 0.7827717662, -0.8086757660],
        ]
    )
    return opponent @ np.cbrt(np.clip(cones @ light, 0.0, None))


@pytest.mark.parametrize("kind", ["all colours", *DICHROMATS])
def test_inks_of_the_marks_can_be_told_apart(kind: str) -> None:
    seen = np.array(DICHROMATS.get(kind, np.eye(3)))
    inks = [
        oklab(seen @ linear(palette.parse_hex(ink)))
        for ink in (
            palette.INK,
            palette.INJECTOR_INK,
            palette.RING_INK,
            palette.PIN_INK,
            palette.HIGHLIGHT,
        )
    ]
    # 0.02 is a just noticeable difference in OKLab (from memory); thin lines need several
    nearest = min(float(np.linalg.norm(a - b)) for a, b in itertools.combinations(inks, 2))
    assert nearest > 0.1


@pytest.mark.parametrize(
    ("ink", "ground"),
    [
        (palette.INK, palette.PAPER),
        (palette.FAINT_INK, palette.PAPER),
        (palette.FAINT_INK, palette.WELL_FILL),
        (palette.INJECTOR_INK, palette.PAPER),
        (palette.RING_INK, palette.PAPER),
        (palette.PIN_INK, palette.PAPER),
        (palette.WATCH_INK, palette.PAPER),
        (palette.PAPER, palette.FAIL_INK),
    ],
)
def test_text_stands_out(ink: str, ground: str) -> None:
    assert palette.contrast(palette.parse_hex(ink), palette.parse_hex(ground)) >= 4.5


def test_bands_meet_at_one() -> None:
    lows = [band.low for band in palette.BANDS]
    assert lows == sorted(lows)
    assert palette.BANDS[palette.CAN_LATCH_BAND].low == 1.0
    assert len(set(palette.band_colours())) == len(palette.BANDS)


def test_hex_round_trip() -> None:
    assert palette.to_hex(palette.parse_hex("#1b1f24")) == "#1b1f24"
