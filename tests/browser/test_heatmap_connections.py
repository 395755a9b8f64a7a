"""Pins and rings of the picture in a real browser: what hovering shows, and where marks lie.

Layout coordinates are taken to the screen by the printed axis ticks alone, as a reader does.
Expected places and numbers: the hand-made scan of `synthetic_connections`.
"""

from __future__ import annotations

import dataclasses
import itertools
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import shapely
import synthetic_scan
from selenium.webdriver import ActionChains, Chrome
from selenium.webdriver.common.by import By
from synthetic_connections import DRIVE, SENSE_INNER, WIRING

from latchscan.report.svg_map import heatmap_svg
from latchscan.rules.model import Evidence

TICKS = """
return [...document.querySelectorAll('#axes path')].map(tick => {
  const box = tick.getBoundingClientRect();
  return {value: Number(tick.nextElementSibling.textContent), across: box.height > box.width,
          x: box.left + box.width / 2, y: box.top + box.height / 2};
});
"""
BOXES = """
return [...document.querySelectorAll(arguments[0])].map(element => {
  const box = element.getBoundingClientRect();
  return [box.left, box.top, box.right, box.bottom];
});
"""
VISIBLE = """
return [...document.querySelectorAll('.pin')].map(pin => [
  pin.querySelector('title').textContent.split(':')[0],
  getComputedStyle(pin.querySelector('.net-shapes')).visibility === 'visible']);
"""
WIRING_VISIBLE = """
return Object.fromEntries([...document.querySelectorAll('.net-wiring')].map(path => [
  path.closest('.pin').id, getComputedStyle(path).visibility === 'visible']));
"""
IN_FILL = """
const path = document.querySelector(arguments[0]);
const at = new DOMPoint(arguments[1], arguments[2]).matrixTransform(
  path.getScreenCTM().inverse());
return path.isPointInFill(at);
"""
DRIVE_PIN, SENSE_PIN = "pin-mark-4", "pin-mark-5"


@pytest.fixture(name="measured", scope="module")
def _measured() -> Evidence:
    return synthetic_scan.evidence(connected=True)


def show(browser: Chrome, measured: Evidence, folder: Path) -> None:
    scan = dataclasses.replace(synthetic_scan.scan(), evidence=measured)
    path = folder / "heatmap.svg"
    path.write_bytes(heatmap_svg(scan))
    browser.get(path.as_uri())
    rest(browser)


def rest(browser: Chrome) -> None:
    """Move the pointer off the map, to the corner of the page."""
    ActionChains(browser).move_by_offset(0, 0).perform()
    ActionChains(browser).move_to_element_with_offset(
        browser.find_element(By.CSS_SELECTOR, "#heading text"), 0, 0
    ).perform()


def point_at(browser: Chrome, selector: str) -> None:
    ActionChains(browser).move_to_element(browser.find_element(By.CSS_SELECTOR, selector)).perform()


def shown(browser: Chrome) -> set[str]:
    """Names of the pins whose nets can be seen."""
    found = browser.execute_script(VISIBLE)
    return {name.removeprefix("Pin ") for name, visible in found if visible}


def screen_of(browser: Chrome) -> Any:
    """Function from layout coordinates to the screen, fitted to the printed ticks."""
    ticks = browser.execute_script(TICKS)
    across = [(tick["value"], tick["x"]) for tick in ticks if tick["across"]]
    upward = [(tick["value"], tick["y"]) for tick in ticks if not tick["across"]]
    x_fit = np.polyfit(*zip(*across, strict=True), 1)
    y_fit = np.polyfit(*zip(*upward, strict=True), 1)
    return lambda x, y: (float(np.polyval(x_fit, x)), float(np.polyval(y_fit, y)))


def middle(box: list[float]) -> tuple[float, float]:
    return ((box[0] + box[2]) / 2, (box[1] + box[3]) / 2)


def test_a_net_is_seen_while_its_pin_is_pointed_at(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    assert shown(browser) == set()
    for name, mark in (("drive", DRIVE_PIN), ("sense", SENSE_PIN), ("VDD", "pin-mark-1")):
        point_at(browser, f"#{mark} .pin-mark")
        assert shown(browser) == {name}
    rest(browser)
    assert shown(browser) == set()


def test_a_name_points_at_its_pin_as_the_mark_does(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    point_at(browser, f"#{SENSE_PIN} text")
    assert shown(browser) == {"sense"}


def test_a_clicked_pin_keeps_its_net_until_another_place_is_clicked(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    mark = browser.find_element(By.CSS_SELECTOR, f"#{DRIVE_PIN} .pin-mark")
    ActionChains(browser).move_to_element(mark).click().perform()
    rest(browser)
    assert shown(browser) == {"drive"}
    ActionChains(browser).click().perform()
    assert shown(browser) == set()


def test_the_shapes_shown_lie_where_the_axes_say(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    place = screen_of(browser)
    nets = measured.connections.nets
    on_drive = nets.piece_polygons[nets.node_net[nets.piece_node] == DRIVE]
    x0, y0, x1, y1 = shapely.total_bounds([*on_drive, nets.pad_polygons[0]])
    (left, bottom), (right, top) = place(x0, y0), place(x1, y1)
    (found,) = browser.execute_script(BOXES, f"#{DRIVE_PIN} .net-shapes")
    np.testing.assert_allclose(found, (left, top, right, bottom), atol=1.5)
    inner = nets.piece_polygons[nets.node_net[nets.piece_node] == SENSE_INNER]
    x0, y0, x1, y1 = shapely.total_bounds(inner)
    (found,) = browser.execute_script(BOXES, f"#{SENSE_PIN} .through")
    np.testing.assert_allclose(middle(found), place((x0 + x1) / 2, (y0 + y1) / 2), atol=1.0)


def test_the_metal_of_a_net_is_seen_and_lies_where_the_axes_say(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    """Hovering shows the wiring; it covers what is drawn of the net and nothing beside it."""
    show(browser, measured, tmp_path)
    place = screen_of(browser)
    assert set(browser.execute_script(WIRING_VISIBLE).values()) == {False}
    point_at(browser, f"#{DRIVE_PIN} .pin-mark")
    seen = browser.execute_script(WIRING_VISIBLE)
    assert {pin for pin, visible in seen.items() if visible} == {DRIVE_PIN}
    drive = shapely.union_all(WIRING[:2])
    (found,) = browser.execute_script(BOXES, f"#{DRIVE_PIN} .net-wiring")
    (left, bottom), (right, top) = place(*drive.bounds[:2]), place(*drive.bounds[2:])
    np.testing.assert_allclose(found, (left, top, right, bottom), atol=1.5)
    for x, y in ((10.0, -1.5), (33.0, 0.7), (33.0, -1.5), (30.5, 2.0), (10.0, 5.0)):
        inside = browser.execute_script(IN_FILL, f"#{DRIVE_PIN} .net-wiring", *place(x, y))
        assert inside == drive.covers(shapely.Point(x, y))
    rest(browser)
    assert set(browser.execute_script(WIRING_VISIBLE).values()) == {False}


def test_pins_and_rings_lie_where_the_axes_say(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    place = screen_of(browser)
    pins, rings = measured.connections.pins, measured.connections.rings
    for row in range(len(pins.names)):
        (found,) = browser.execute_script(BOXES, f"#pin-mark-{row + 1} .pin-mark")
        np.testing.assert_allclose(middle(found), place(pins.x_um[row], pins.y_um[row]), atol=1.0)
    for row, name in enumerate(rings.ids.tolist()):
        x0, y0, x1, y1 = rings.polygons[row].bounds
        (found,) = browser.execute_script(BOXES, f"[id='{name}'] .strips")
        (left, bottom), (right, top) = place(x0, y0), place(x1, y1)
        # the outline stands off the strips by a page unit
        np.testing.assert_allclose(found, (left, top, right, bottom), atol=2.5)
    for name, gap in (("ring-2", 0), ("ring-3", 1)):
        (found,) = browser.execute_script(BOXES, f"[id='{name}-openings'] .gap")
        at = (rings.gap_from_um[gap] + rings.gap_to_um[gap]) / 2
        np.testing.assert_allclose(middle(found), place(*at), atol=1.0)


def test_tooltips_of_pins_and_rings(browser: Chrome, measured: Evidence, tmp_path: Path) -> None:
    show(browser, measured, tmp_path)
    titles = {
        element: browser.execute_script(
            "return document.getElementById(arguments[0]).querySelector('title').textContent",
            element,
        )
        for element in (DRIVE_PIN, SENSE_PIN, "ring-1", "ring-2")
    }
    for element, words in {
        DRIVE_PIN: ("Pin drive", "signal", "net-1", "1.98 V", "100 mA", "below ground: 6"),
        SENSE_PIN: ("Pin sense", "not known", "n-47 100 %"),
        "ring-1": ("majority", "closed", "0.6 um", "95 %", "VSS"),
        "ring-2": ("open", "2 um at (2.000, 24.400) um", "30 %"),
    }.items():
        for word in words:
            assert word in titles[element]


def test_what_is_under_the_pointer_has_the_tooltip(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    place = screen_of(browser)
    owner = (
        "const hit = document.elementFromPoint(arguments[0], arguments[1]);"
        "return hit.closest('g[id], g[class]').id;"
    )
    pins = measured.connections.pins
    assert browser.execute_script(owner, *place(pins.x_um[2], pins.y_um[2])) == "pin-mark-3"
    # on the left side of the closed ring, away from everything else
    assert browser.execute_script(owner, *place(-0.7, 1.0)) == "ring-1"


@pytest.mark.parametrize("cells", [8, 24, 60])
def test_names_of_pins_hide_neither_each_other_nor_a_mark(
    browser: Chrome, tmp_path: Path, cells: int
) -> None:
    show(browser, synthetic_scan.evidence(cells=cells, connected=True), tmp_path)
    names = browser.execute_script(BOXES, ".pin text, .injector text")
    marks = browser.execute_script(BOXES, ".pin-mark, .gap")
    assert names
    for one, other in itertools.combinations(names, 2):
        assert not overlap(one, other)
    for name in names:
        assert not any(overlap(name, mark) for mark in marks)


def overlap(one: list[float], other: list[float]) -> bool:
    """Whether two boxes overlap by more than the slack of a text's box around its letters."""
    across = min(one[2], other[2]) - max(one[0], other[0])
    along = min(one[3], other[3]) - max(one[1], other[1])
    return across > 1.0 and along > 2.5


def test_texts_of_the_key_stay_apart_and_on_the_page(
    browser: Chrome, measured: Evidence, tmp_path: Path
) -> None:
    show(browser, measured, tmp_path)
    page = browser.execute_script(BOXES, "svg > rect")[0]
    texts = browser.execute_script(BOXES, "#connection-key text, #key text")
    for one, other in itertools.combinations(texts, 2):
        assert not overlap(one, other)
    for left, _, right, bottom in texts:
        assert page[0] <= left
        assert right <= page[2]
        assert bottom <= page[3]
    cut = browser.execute_script(
        "return [...document.querySelectorAll('#connection-key text')]"
        ".filter(text => text.textContent.includes('…')).length"
    )
    assert cut == 0
