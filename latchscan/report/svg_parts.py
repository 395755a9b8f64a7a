"""Small pieces of SVG, built as elements so that every text is escaped."""

from __future__ import annotations

from xml.etree.ElementTree import Element, SubElement

from latchscan.report.palette import INK, PAPER
from latchscan.report.plain import plain_text

LONGEST_TOOLTIP = 1200
GLYPH_WIDTH = 0.56
"""Mean advance of a sans-serif glyph as a share of the font size; generous for figures."""


def number(value: float) -> str:
    """A page coordinate with at most two decimals.

    Examples
    --------
    >>> number(12.0), number(-0.001), number(3.14159)
    ('12', '0', '3.14')
    """
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def add(parent: Element, tag: str, **attributes: str | float) -> Element:
    """Append an element; ``_`` in attribute names stands for ``-``, a trailing one is dropped."""
    return SubElement(
        parent,
        tag,
        {
            name.rstrip("_").replace("_", "-"): value if isinstance(value, str) else number(value)
            for name, value in attributes.items()
        },
    )


def add_text(
    parent: Element, x: float, y: float, words: str, *, size: float = 11.0, **attributes: str
) -> Element:
    """Append one line of plain text with its baseline at (x, y)."""
    attributes.setdefault("fill", INK)
    element = add(parent, "text", x=x, y=y, font_size=size, **attributes)
    element.text = plain_text(words)
    return element


def add_haloed(parent: Element, middle: tuple[float, float], words: str, ink: str) -> None:
    """Write on a white halo, readable on every band."""
    add_text(
        parent,
        middle[0],
        middle[1] + 4,
        words,
        fill=ink,
        font_weight="bold",
        stroke=PAPER,
        stroke_width="3",
        paint_order="stroke",
        stroke_linejoin="round",
        text_anchor="middle",
    )


def add_title(parent: Element, words: str) -> None:
    """Give `parent` a tooltip; it must be its first child."""
    title = Element("title")
    lines = (plain_text(line, LONGEST_TOOLTIP) for line in words.split("\n"))
    title.text = "\n".join(lines)
    parent.insert(0, title)


def text_width(words: str, size: float) -> float:
    """Estimated width of a line of text on the page."""
    return len(words) * size * GLYPH_WIDTH


def shortened(words: str, width: float, size: float) -> str:
    """`words` cut with an ellipsis to an estimated `width`."""
    return plain_text(words, max(2, int(width / (size * GLYPH_WIDTH))))
