"""The loop gain as an image: each pixel the largest loop gain of any site nearby.

Every site is painted at its middle and over its two emitters; every pixel then takes the
largest value within the smoothing radius, so that a site is never hidden by a weaker one.
Pixels without a site nearby stay transparent.
"""

from __future__ import annotations

import struct
import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from latchscan.layout.model import Floats
from latchscan.report.frame import Frame, round_length
from latchscan.report.palette import BANDS, CAN_LATCH_BAND, band_colours
from latchscan.report.svg_paths import pixel_span, raster_shape, runs
from latchscan.rules.model import Evidence

LONGEST_SIDE_PX = 900
OPACITY = 0.82
"""How much of the drawing below the field covers."""
SMOOTHING_SHARE = 0.01
"""Smoothing radius as a share of the longer side, before it is rounded."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Field:
    """A painted field.

    Attributes
    ----------
    band
        [iy, ix] 0 where there is no site nearby, else 1 + the index of the band; row 0 at the
        bottom, as in the layout.
    pixel_um
        Side of a pixel.
    radius_um
        Smoothing radius.
    """

    band: NDArray[np.uint8]
    pixel_um: float
    radius_um: float


def paint(evidence: Evidence, frame: Frame) -> Field:
    """Paint the sites of the evidence into the frame."""
    side_um = max(frame.box_um[2] - frame.box_um[0], frame.box_um[3] - frame.box_um[1])
    pixel_um = side_um / LONGEST_SIDE_PX
    radius_um = round_length(side_um * SMOOTHING_SHARE)
    gain = _stamped(evidence, frame, pixel_um)
    gain = largest_within(gain, radius_um / pixel_um)
    edges = np.array([band.low for band in BANDS])
    band = np.searchsorted(edges, gain, side="right").astype(np.uint8)
    return Field(band=band, pixel_um=pixel_um, radius_um=radius_um)


def _stamped(evidence: Evidence, frame: Frame, pixel_um: float) -> Floats:
    """[iy, ix] largest loop gain of the sites at each pixel; -inf where there is none."""
    sites, pairs = evidence.sites, evidence.pairs
    raster = np.full(raster_shape(frame, pixel_um), -np.inf)
    known = np.flatnonzero(np.isfinite(sites.loop_gain))
    gain, pair = sites.loop_gain[known], sites.pair[known]
    middle = np.column_stack((sites.x_um[known], sites.y_um[known]))
    low, _ = pixel_span(np.hstack((middle, middle)), frame, pixel_um)
    np.maximum.at(raster, (low[:, 1], low[:, 0]), gain)
    count = len(evidence.layout.emitters.ids)
    strongest = np.full(count, -np.inf)
    drawn = pairs.anode[pair] < count
    np.maximum.at(strongest, pairs.anode[pair][drawn], gain[drawn])
    np.maximum.at(strongest, pairs.cathode[pair], gain)
    rows = np.flatnonzero(np.isfinite(strongest))
    low, high = pixel_span(evidence.layout.emitters.box_um[rows], frame, pixel_um)
    for value, (x0, y0), (x1, y1) in zip(
        strongest[rows].tolist(), low.tolist(), high.tolist(), strict=True
    ):
        patch = raster[y0:y1, x0:x1]
        np.maximum(patch, value, out=patch)
    return raster


def largest_within(values: Floats, radius_px: float) -> Floats:
    """Largest value within a disk of `radius_px` pixels around each pixel.

    Examples
    --------
    >>> largest_within(np.array([[0.0, 0.0, 5.0, 0.0, 0.0]]), 1.0).tolist()
    [[0.0, 5.0, 5.0, 5.0, 0.0]]
    """
    rows = values.shape[0]
    result = np.full(values.shape, -np.inf)
    wide, width = values.copy(), 0
    # from the narrow top of the disk to its middle, one horizontal maximum grows and is shared
    for dy in range(int(radius_px), -1, -1):
        half_width = int(np.sqrt(radius_px**2 - dy**2))
        for step in range(width + 1, half_width + 1):
            _raise_by_shift(wide, values, step)
        width = max(width, half_width)
        if dy < rows:
            np.maximum(result[dy:], wide[: rows - dy], out=result[dy:])
            np.maximum(result[: rows - dy], wide[dy:], out=result[: rows - dy])
    return result


def _raise_by_shift(target: Floats, values: Floats, step: int) -> None:
    """Raise `target` to `values` moved by `step` columns either way."""
    columns = values.shape[1]
    if step < columns:
        np.maximum(target[:, step:], values[:, : columns - step], out=target[:, step:])
        np.maximum(target[:, : columns - step], values[:, step:], out=target[:, : columns - step])


def can_latch_outline(field: Field) -> list[tuple[int, int, int, int]]:
    """Straight pieces (ix0, iy0, ix1, iy1) around every region with a loop gain of 1 and above."""
    inside = field.band > CAN_LATCH_BAND
    padded = np.pad(inside, 1)
    flat = runs(padded[1:, :] != padded[:-1, :])
    upright = runs((padded[:, 1:] != padded[:, :-1]).T)
    pieces = [
        (start - 1, row, end - 1, row) for row, start, end in zip(*map(_list, flat), strict=True)
    ]
    pieces += [
        (column, start - 1, column, end - 1)
        for column, start, end in zip(*map(_list, upright), strict=True)
    ]
    return pieces


def _list(values: NDArray[np.int64]) -> list[int]:
    return [int(value) for value in values]


def png(field: Field) -> bytes:
    """The field as a PNG with a palette, row 0 at the top (ISO/IEC 15948:2004)."""
    rows, columns = field.band.shape
    lines = np.zeros((rows, columns + 1), dtype=np.uint8)
    lines[:, 1:] = field.band[::-1]
    palette = bytes((255, 255, 255)) + b"".join(bytes(colour) for colour in band_colours())
    return b"".join(
        (
            b"\x89PNG\r\n\x1a\n",
            _chunk(b"IHDR", struct.pack(">IIBBBBB", columns, rows, 8, 3, 0, 0, 0)),
            _chunk(b"PLTE", palette),
            _chunk(b"tRNS", b"\x00"),
            _chunk(b"IDAT", zlib.compress(lines.tobytes(), 9)),
            _chunk(b"IEND", b""),
        )
    )


def _chunk(kind: bytes, content: bytes) -> bytes:
    """One chunk: length, kind, content, checksum over kind and content."""
    return (
        struct.pack(">I", len(content))
        + kind
        + content
        + struct.pack(">I", zlib.crc32(kind + content))
    )
