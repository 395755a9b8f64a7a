"""The picture as XML: well formed, escaped, repeatable, and everything pointed out in it."""

from __future__ import annotations

import re
from dataclasses import replace
from xml.etree import ElementTree

import numpy as np
import pytest
import shapely
import synthetic_scan

from latchscan.report.frame import Frame, fit, round_length, ticks
from latchscan.report.placing import Places
from latchscan.report.svg_map import MAP_AREA, heatmap_svg
from latchscan.report.svg_paths import path_data
from latchscan.scan import Scan

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(name="scan", scope="module")
def _scan() -> Scan:
    return synthetic_scan.scan()


@pytest.fixture(name="root", scope="module")
def _root(scan: Scan) -> ElementTree.Element:
    return ElementTree.fromstring(heatmap_svg(scan))


def texts(root: ElementTree.Element) -> str:
    return "\n".join(element.text or "" for element in root.iter(f"{SVG}text"))


def test_the_same_scan_gives_the_same_bytes(scan: Scan) -> None:
    assert heatmap_svg(scan) == heatmap_svg(synthetic_scan.scan())


def test_heading_names_block_technology_temperature_and_caution(
    root: ElementTree.Element,
) -> None:
    words = texts(root)
    for part in ("valve_driver", "invented", "125 °C", "All results are estimates"):
        assert part in words


def test_nothing_comes_from_elsewhere_and_nothing_runs(scan: Scan) -> None:
    text = heatmap_svg(scan).decode("utf-8")
    links = re.findall(r'(?:href|src)="([^"]{0,30})', text)
    assert links
    assert all(link.startswith("data:image/png;base64,") for link in links)
    assert "<script" not in text
    assert re.search(r"\son\w+=", text) is None


def test_every_finding_has_an_outline_and_a_tooltip_with_its_measures(
    scan: Scan, root: ElementTree.Element
) -> None:
    groups = {
        group.get("id"): group
        for group in root.iter(f"{SVG}g")
        if (group.get("class") or "").startswith("finding ")
    }
    assert set(groups) == {finding.id for finding in scan.findings}
    for finding in scan.findings:
        title = groups[finding.id][0]
        assert title.tag == f"{SVG}title"
        assert finding.message in (title.text or "")
        assert f"limit {finding.limit:g}" in (title.text or "")
        dashed = [child.get("stroke-dasharray") for child in groups[finding.id]]
        assert any(dashed) == (finding.severity == "watch"), "never colour alone"


def test_worst_sites_and_injectors_are_marked(root: ElementTree.Element) -> None:
    marks = [group for group in root.iter(f"{SVG}g") if group.get("class") == "site"]
    assert marks[0].get("id") == "site-1"
    assert 1 < len(marks) <= 10
    assert "trigger current" in (marks[0][0].text or "")
    assert "▲ drive" in texts(root)


def test_a_finding_as_large_as_the_block_is_numbered_inside_it(scan: Scan) -> None:
    finding = replace(scan.findings[0], box_um=scan.evidence.layout.regions.bbox_um)
    root = ElementTree.fromstring(heatmap_svg(replace(scan, findings=(finding,))))
    numbers = [g for g in root.iter(f"{SVG}g") if g.get("class") == "finding-number"]
    assert [text.text for text in numbers[0].iter(f"{SVG}text")] == ["1"]


def test_no_number_hides_the_mark_of_a_site() -> None:
    mark = (100.0, 100.0, 110.0, 110.0)
    places = Places(area=(0.0, 0.0, 300.0, 300.0), taken=[mark])
    x, y = places.take((112.0, 112.0, 130.0, 130.0), 15.0, 15.0) or (105.0, 105.0)
    assert max(abs(x - 105.0), abs(y - 105.0)) >= 12.5


def test_labels_in_a_full_area_go_inside_a_large_box_or_nowhere() -> None:
    area = (0.0, 0.0, 100.0, 100.0)
    places = Places(area=area)
    assert places.take(area, 15.0, 15.0) is not None
    assert Places(area=area, taken=[area]).take(area, 15.0, 15.0) is None
    assert Places(area=(0.0, 0.0, 20.0, 20.0)).take((0.0, 0.0, 20.0, 20.0), 15.0, 15.0) is None


def test_hostile_names_are_shown_as_text(scan: Scan) -> None:
    hostile = '"><script>alert(1)</script>\u0007\ud800\u202e' + "z" * 10_000
    injector = scan.evidence.layout.emitters.injector.astype("U300")
    injector[injector != ""] = hostile[:300]
    measured = synthetic_scan.changed(scan.evidence, "layout.emitters", injector=injector)
    names = dict.fromkeys(("top", "layout_name", "technology_name"), hostile)
    data = heatmap_svg(synthetic_scan.scan(measured, **names))
    assert b"<script" not in data
    root = ElementTree.fromstring(data)
    assert '"><script>alert(1)</script>\ufffd\ufffd\ufffdz' in texts(root)
    longest = max(len(element.text or "") for element in root.iter(f"{SVG}text"))
    assert longest <= 200


def test_paths_carry_the_exact_shapes() -> None:
    frame = Frame(box_um=(-10.0, -10.0, 40.0, 40.0), left=0.0, top=0.0, scale=2.0)
    ring = shapely.box(0, 0, 9, 9).difference(shapely.box(3, 3, 6, 6.5))
    slanted = shapely.Polygon([(20, 0), (25.125, 3), (20, 7)])
    shapes = np.array([shapely.box(1.5, 12, 2, 13), ring, slanted], dtype=object)
    drawn = shapely.Polygon()
    for piece in re.findall(r"M[^z]*z", path_data(shapes, frame)):
        drawn = drawn.symmetric_difference(_subpath(piece))  # the even-odd rule
    expected = shapely.transform(shapely.union_all(shapes), lambda xy: (xy + 10) * 1000)
    assert drawn.symmetric_difference(expected).area == 0.0


def _subpath(piece: str) -> shapely.Polygon:
    """Polygon of one subpath of absolute moves and relative lines [nm]."""
    commands = re.findall(r"([MlhvL])([^MlhvLz]*)", piece)
    points = []
    for command, numbers in commands:
        values = [int(text) for text in numbers.split()]
        if command == "M":
            points.append((values[0], values[1]))
            continue
        if command == "h":
            values = [values[0], 0]
        elif command == "v":
            values = [0, values[0]]
        for dx, dy in zip(values[::2], values[1::2], strict=True):
            points.append((points[-1][0] + dx, points[-1][1] + dy))
    return shapely.Polygon(points)


def test_a_crowd_of_shapes_is_reduced_to_what_can_be_seen(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    frame = Frame(box_um=(0.0, 0.0, 100.0, 100.0), left=0.0, top=0.0, scale=1.0)
    random = np.random.default_rng(3)
    corner = random.uniform(0, 99, (400, 2))
    shapes = shapely.box(*np.hstack((corner, corner + 0.3)).T)
    monkeypatch.setattr("latchscan.report.svg_paths.LARGEST_SHAPE_COUNT", 100)
    pieces = re.findall(r"M(\d+) (\d+)h(\d+)v(\d+)h", path_data(shapes, frame))
    boxes = np.array(pieces, dtype=float) / 1000
    drawn = shapely.union_all(
        shapely.box(boxes[:, 0], boxes[:, 1], boxes[:, 0] + boxes[:, 2], boxes[:, 1] + boxes[:, 3])
    )
    assert drawn.buffer(1e-9).covers(shapely.union_all(shapes))
    assert drawn.area < 400 * 4 * 0.25


def test_size_of_a_large_block() -> None:
    many = synthetic_scan.scan(synthetic_scan.evidence(rows=60, cells=187))
    assert len(many.evidence.layout.emitters.ids) == 22_320
    data = heatmap_svg(many)
    assert len(data) <= 5_000_000
    assert sum(1 for _ in ElementTree.fromstring(data).iter()) <= 5_000


@pytest.mark.parametrize(
    "box", [(0.0, 0.0, 10.0, 3000.0), (0.0, 0.0, 3000.0, 10.0), (5.0, 5.0, 5.0, 5.0)]
)
def test_any_shape_of_block_fits_the_page(box: tuple[float, float, float, float]) -> None:
    frame = fit(box, MAP_AREA)
    assert frame.left >= MAP_AREA[0] - 1e-9
    assert frame.left + frame.width <= MAP_AREA[2] + 1e-9
    assert frame.top + frame.height <= MAP_AREA[3] + 1e-9
    assert frame.x(box[0]) == frame.left
    assert ticks(box[0], frame.box_um[2], 5)


def test_round_lengths() -> None:
    for length in np.geomspace(1e-3, 1e5, 200).tolist():
        found = round_length(length)
        assert found <= length * (1 + 1e-9) < 2.5 * found * (1 + 1e-9)
