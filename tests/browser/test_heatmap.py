"""The picture in a real browser: positions to a pixel, tooltips, hostile names, text fit.

Layout coordinates are taken to the screen by the printed axis ticks alone, which is what a
reader does; nothing of the program's own scale is used.
"""

from __future__ import annotations

import dataclasses
import io
import itertools
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import synthetic_scan
from selenium.webdriver import Chrome

from latchscan.report.svg_map import heatmap_svg
from latchscan.scan import Scan

TICKS = """
return [...document.querySelectorAll('#axes path')].map((tick, index) => {
  const box = tick.getBoundingClientRect();
  const label = tick.nextElementSibling.textContent;
  return {value: Number(label), across: box.height > box.width,
          x: box.left + box.width / 2, y: box.top + box.height / 2};
});
"""
BOXES = """
return [...document.querySelectorAll(arguments[0])].map(element => {
  const box = element.getBoundingClientRect();
  return [box.left, box.bottom, box.right, box.top];
});
"""


@pytest.fixture(name="scan", scope="module")
def _scan() -> Scan:
    return synthetic_scan.scan()


def show(browser: Chrome, scan: Scan, folder: Path) -> None:
    path = folder / "heatmap.svg"
    path.write_bytes(heatmap_svg(scan))
    browser.get(path.as_uri())


def screen_of(browser: Chrome) -> Any:
    """Function from layout coordinates to the screen, fitted to the printed ticks."""
    ticks = browser.execute_script(TICKS)
    across = [(tick["value"], tick["x"]) for tick in ticks if tick["across"]]
    upward = [(tick["value"], tick["y"]) for tick in ticks if not tick["across"]]
    assert len(across) >= 3
    assert len(upward) >= 3
    x_fit, y_fit = (
        np.polyfit(*zip(*across, strict=True), 1),
        np.polyfit(*zip(*upward, strict=True), 1),
    )
    assert y_fit[0] < 0, "y grows upwards, as in the layout"
    return lambda x, y: (float(np.polyval(x_fit, x)), float(np.polyval(y_fit, y)))


def test_shapes_lie_where_the_axes_say(browser: Chrome, scan: Scan, tmp_path: Path) -> None:
    show(browser, scan, tmp_path)
    place = screen_of(browser)
    shapes = scan.evidence.layout.regions.shapes
    for selector, names in {
        "#nwell": ("nwell",),
        "#taps": ("well_tap", "substrate_tap"),
        "#p-diffusion": ("p_diffusion_in_nwell",),
        "#n-diffusion": ("n_diffusion_outside_nwell",),
    }.items():
        bounds = np.array([shape.bounds for name in names for shape in shapes[name]])
        low, high = bounds[:, :2].min(axis=0), bounds[:, 2:].max(axis=0)
        (found,) = browser.execute_script(BOXES, selector)
        np.testing.assert_allclose(found, (*place(*low), *place(*high)), atol=1.0)


def test_findings_and_sites_lie_where_the_axes_say(
    browser: Chrome, scan: Scan, tmp_path: Path
) -> None:
    show(browser, scan, tmp_path)
    place = screen_of(browser)
    for finding in scan.findings:
        x0, y0, x1, y1 = finding.box_um
        (left, bottom), (right, top) = place(x0, y0), place(x1, y1)
        found = browser.execute_script(BOXES, f"[id='{finding.id}'] rect:last-child")[0]
        middle = ((found[0] + found[2]) / 2, (found[1] + found[3]) / 2)
        np.testing.assert_allclose(middle, ((left + right) / 2, (top + bottom) / 2), atol=1.0)
        assert found[2] - found[0] >= right - left - 1.0
    site = scan.evidence.sites
    found = browser.execute_script(BOXES, "[id='site-1'] path:last-child")[0]
    middle = ((found[0] + found[2]) / 2, (found[1] + found[3]) / 2)
    np.testing.assert_allclose(middle, place(site.x_um[0], site.y_um[0]), atol=1.0)


def test_the_field_is_painted_where_the_worst_site_lies(
    browser: Chrome, scan: Scan, tmp_path: Path
) -> None:
    show(browser, scan, tmp_path)
    size = browser.execute_async_script(
        "const done = arguments[0], image = new Image();"
        "image.onload = () => done([image.naturalWidth, image.naturalHeight]);"
        "image.onerror = () => done(null);"
        "image.src = document.querySelector('#field').href.baseVal;"
    )
    assert size is not None, "the browser can decode the image"
    assert max(size) == 900
    darkest = browser.execute_async_script(
        "const done = arguments[0], image = new Image();"
        "image.onload = () => { const canvas = document.createElementNS("
        "'http://www.w3.org/1999/xhtml', 'canvas');"
        "canvas.width = image.width; canvas.height = image.height;"
        "const brush = canvas.getContext('2d'); brush.drawImage(image, 0, 0);"
        "const data = brush.getImageData(0, 0, image.width, image.height).data;"
        "let best = null, level = 1e9, clear = 0;"
        "for (let i = 0; i < data.length; i += 4) { if (!data[i + 3]) { clear++; continue; }"
        " const sum = data[i] + data[i + 1] + data[i + 2];"
        " if (sum < level) { level = sum; best = i / 4; } }"
        "done([best % image.width, Math.floor(best / image.width), clear]); };"
        "image.src = document.querySelector('#field').href.baseVal;"
    )
    assert darkest[2] > 0, "places without a thyristor are clear"
    x0, y0, x1, _ = scan.origin.bbox_um
    pixel_um = (x1 - x0) / size[0]
    y_um = y0 + (size[1] - darkest[1]) * pixel_um
    lowest_row = scan.evidence.layout.emitters.box_um[0, 3] + 3.0
    assert y_um < lowest_row, "row 0 has the strongest sites"


def test_tooltips_hold_the_measures(browser: Chrome, scan: Scan, tmp_path: Path) -> None:
    show(browser, scan, tmp_path)
    for finding in scan.findings:
        title = browser.execute_script(
            "return document.getElementById(arguments[0]).querySelector('title').textContent",
            finding.id,
        )
        assert finding.message in title
    title = browser.execute_script(
        "return document.getElementById('site-1').querySelector('title').textContent"
    )
    for words in ("loop gain", "trigger current", "ohm", "mA"):
        assert words in title


def test_hostile_names_are_text_and_nothing_runs(
    browser: Chrome, scan: Scan, tmp_path: Path
) -> None:
    hostile = (
        '"><script>document.documentElement.setAttribute("data-run","1")</script>'
        '<image href="x" onerror="alert(1)"/>\u0000\u202e\ud800]]>&amp;' + "w" * 10_000
    )
    injector = scan.evidence.layout.emitters.injector.astype("U200")
    injector[injector != ""] = hostile[:200]
    measured = synthetic_scan.changed(scan.evidence, "layout.emitters", injector=injector)
    names = dict.fromkeys(("top", "layout_name", "technology_name"), hostile)
    show(browser, synthetic_scan.scan(measured, **names), tmp_path)
    assert browser.execute_script("return document.documentElement.localName") == "svg"
    assert browser.execute_script("return document.querySelectorAll('script').length") == 0
    assert browser.execute_script("return document.documentElement.dataset.run") is None
    words = browser.execute_script("return document.querySelector('#heading text').textContent")
    assert '"><script>document.documentElement' in words


@pytest.mark.parametrize("cells", [8, 60])
def test_no_text_leaves_the_page_or_its_column(browser: Chrome, tmp_path: Path, cells: int) -> None:
    shown = synthetic_scan.scan(synthetic_scan.evidence(cells=cells), top="long_name_" * 40)
    show(browser, shown, tmp_path)
    page = browser.execute_script(BOXES, "svg > rect")[0]
    for left, bottom, right, top in browser.execute_script(BOXES, "text"):
        assert page[0] <= left
        assert right <= page[2]
        assert page[3] <= top
        assert bottom <= page[1]
    rows = browser.execute_script(
        "return [...document.querySelectorAll('#finding-list text, #site-list text')].map("
        "text => { const box = text.getBoundingClientRect();"
        " return [text.getAttribute('y'), box.left, box.right]; })"
    )
    by_line: dict[str, list[tuple[float, float]]] = {}
    for line, left, right in rows:
        by_line.setdefault(line, []).append((left, right))
    for parts in by_line.values():
        ordered = sorted(parts)
        for (_, end), (start, _) in itertools.pairwise(ordered):
            assert end <= start + 0.5, "two texts of one line overlap"


def test_a_whole_chip_is_drawn_quickly(browser: Chrome, tmp_path: Path) -> None:
    many = synthetic_scan.scan(synthetic_scan.evidence(rows=60, cells=187))
    path = tmp_path / "heatmap.svg"
    path.write_bytes(heatmap_svg(many))
    start = time.perf_counter()
    browser.get(path.as_uri())
    picture = browser.get_screenshot_as_png()
    # generous against a busy machine; an element a shape takes far longer
    assert time.perf_counter() - start < 10.0
    assert len(io.BytesIO(picture).getvalue()) > 20_000


def test_the_comparison_can_fail(browser: Chrome, scan: Scan, tmp_path: Path) -> None:
    box = scan.evidence.layout.regions.bbox_um
    wrong = (box[0] + 2.0, box[1], box[2] + 2.0, box[3])
    regions = dataclasses.replace(scan.evidence.layout.regions, bbox_um=wrong)
    measured = synthetic_scan.changed(scan.evidence, "layout", regions=regions)
    moved = dataclasses.replace(scan, evidence=measured)
    show(browser, moved, tmp_path)
    place = screen_of(browser)
    bounds = np.array([shape.bounds for shape in scan.evidence.layout.regions.shapes["nwell"]])
    (found,) = browser.execute_script(BOXES, "#nwell")
    expected = place(*bounds[:, :2].min(axis=0))
    # the axes moved with the box, so shapes still agree; against the old axes they must not
    np.testing.assert_allclose(found[:2], expected, atol=1.0)
    show(browser, scan, tmp_path)
    assert abs(screen_of(browser)(*bounds[:, :2].min(axis=0))[0] - found[0]) > 5.0
