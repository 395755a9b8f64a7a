"""Names and numbers from anywhere made fit for a report: plain text, bounded, printable."""

from __future__ import annotations

import math
import unicodedata

REPLACEMENT = "\ufffd"
_UNWANTED = {"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"}
"""Control, format (direction overrides among them), lone surrogate, private, unassigned and
line-breaking characters: none can be shown, and some change how their neighbours are shown."""


def plain_text(text: str, longest: int = 200) -> str:
    r"""Plain form of `text`: what cannot be shown is replaced, at most `longest` characters.

    Examples
    --------
    >>> plain_text("top\x00cell")
    'top\ufffdcell'
    >>> plain_text("abcdef", longest=4)
    'abc…'
    """
    cut = text if len(text) <= longest else text[: longest - 1] + "…"
    return "".join(
        REPLACEMENT if unicodedata.category(character) in _UNWANTED else character
        for character in cut
    )


def significant(value: float, digits: int) -> float | None:
    """`value` rounded to `digits` significant digits; None when it is not finite.

    Examples
    --------
    >>> significant(0.123456, 3), significant(float("inf"), 3)
    (0.123, None)
    """
    if not math.isfinite(value):
        return None
    # adding zero turns -0.0, which would print differently, into 0.0
    return float(f"{value:.{digits}g}") + 0.0


def measure(value: float, unit: str) -> str:
    """A measure with its unit in words for people; four significant digits.

    Examples
    --------
    >>> measure(1234.56, "ohm"), measure(0.51234, "1"), measure(float("nan"), "um")
    ('1235 ohm', '0.5123', 'not known')
    >>> measure(1.62, "V"), measure(-0.3, "V")
    ('1.62 V', '-0.3 V')
    """
    if math.isnan(value):
        return "not known"
    if math.isinf(value):
        return "unbounded"
    text = f"{value:.0f}" if 1e4 <= abs(value) < 1e9 else f"{value:.4g}"
    return text if unit == "1" else f"{text} {unit}"


def current(value_a: float) -> str:
    """A current in mA for people.

    Examples
    --------
    >>> current(0.00123456), current(float("nan"))
    ('1.235 mA', 'nothing fires it')
    """
    return f"{value_a * 1e3:.4g} mA" if math.isfinite(value_a) else "nothing fires it"
