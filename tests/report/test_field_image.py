"""The painted field against brute force, and its PNG decoded by the letter of the standard."""

from __future__ import annotations

import struct
import zlib

import numpy as np
import pytest
import synthetic_scan

from latchscan.report.field_image import can_latch_outline, largest_within, paint, png
from latchscan.report.frame import Frame, fit
from latchscan.report.palette import BANDS, CAN_LATCH_BAND, band_colours
from latchscan.report.svg_map import MAP_AREA
from latchscan.rules.model import Evidence


@pytest.fixture(name="measured", scope="module")
def _measured() -> Evidence:
    return synthetic_scan.evidence()


@pytest.fixture(name="frame", scope="module")
def _frame(measured: Evidence) -> Frame:
    return fit(measured.layout.regions.bbox_um, MAP_AREA)


@pytest.mark.parametrize("radius", [0.5, 1.0, 2.5, 4.0])
def test_largest_within_equals_brute_force(radius: float) -> None:
    values = np.random.default_rng(7).uniform(size=(13, 17))
    rows, columns = np.indices(values.shape)
    expected = np.empty_like(values)
    for (y, x), _ in np.ndenumerate(values):
        near = (rows - y) ** 2 + (columns - x) ** 2 <= radius**2
        expected[y, x] = values[near].max()
    np.testing.assert_array_equal(largest_within(values, radius), expected)


def test_every_site_shows_at_least_its_own_band(measured: Evidence, frame: Frame) -> None:
    field = paint(measured, frame)
    sites = measured.sites
    known = np.flatnonzero(np.isfinite(sites.loop_gain))
    column = ((sites.x_um[known] - frame.box_um[0]) / field.pixel_um).astype(int)
    row = ((sites.y_um[known] - frame.box_um[1]) / field.pixel_um).astype(int)
    lows = np.array([band.low for band in BANDS])
    own = np.array([np.sum(lows <= gain) for gain in sites.loop_gain[known]])
    assert (field.band[row, column] >= own).all()
    assert (field.band == 0).any(), "places without a site stay transparent"


def test_png_decodes_to_the_field(measured: Evidence, frame: Frame) -> None:
    field = paint(measured, frame)
    data = png(field)
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    chunks, at = {}, 8
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        kind, content = data[at + 4 : at + 8], data[at + 8 : at + 8 + length]
        (check,) = struct.unpack(">I", data[at + 8 + length : at + 12 + length])
        assert check == zlib.crc32(kind + content)
        chunks[kind] = content
        at += 12 + length
    width, height, depth, colour = struct.unpack(">IIBB", chunks[b"IHDR"][:10])
    assert (depth, colour) == (8, 3)
    lines = np.frombuffer(zlib.decompress(chunks[b"IDAT"]), dtype=np.uint8)
    lines = lines.reshape(height, width + 1)
    assert not lines[:, 0].any(), "no line filter"
    np.testing.assert_array_equal(lines[::-1, 1:], field.band)
    palette = np.frombuffer(chunks[b"PLTE"], dtype=np.uint8).reshape(-1, 3)
    assert [tuple(row) for row in palette[1:].tolist()] == list(band_colours())
    assert chunks[b"tRNS"] == b"\x00"


def test_the_line_encloses_exactly_what_can_latch(measured: Evidence, frame: Frame) -> None:
    field = paint(measured, frame)
    inside = field.band > CAN_LATCH_BAND
    length = sum(x1 - x0 + y1 - y0 for x0, y0, x1, y1 in can_latch_outline(field))
    padded = np.pad(inside, 1).astype(int)
    expected = np.abs(np.diff(padded, axis=0)).sum() + np.abs(np.diff(padded, axis=1)).sum()
    assert length == expected > 0
