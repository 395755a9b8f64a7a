"""Groups of emitters: repeating devices and islands that look alike."""

from __future__ import annotations

import numpy as np

from latchscan.parasitics.clusters import cluster_emitters, repeat_pitch


def fingers(x: float, y: float, count: int) -> list[tuple[float, float, float, float]]:
    return [(x + i, y, x + i + 0.5, y + 7.0) for i in range(count)]


def relative(boxes: np.ndarray, group: np.ndarray) -> bytes:
    part = boxes[group]
    return (part - np.tile(part[:, :2].min(axis=0), 2)).round(6).tobytes()


def test_the_device_repeats_rather_than_its_fingers() -> None:
    # 7 fingers 1 um apart, devices 7.5 um apart, rows 8.2 um apart with room for a tap after 3
    rows = [3.0 + 8.2 * row + 1.6 * (row // 3) for row in range(46)]
    boxes = np.array([b for y in rows for i in range(39) for b in fingers(7.5 * i, y, 7)])
    assert repeat_pitch(boxes) == (7.5, 26.2)
    groups = cluster_emitters(boxes)
    assert sorted(np.concatenate(groups).tolist()) == list(range(len(boxes)))
    assert len({relative(boxes, group) for group in groups}) <= 4


def test_fingers_alone_repeat_at_their_own_step() -> None:
    boxes = np.array([b for y in range(0, 80, 8) for b in fingers(0.0, float(y), 80)])
    assert repeat_pitch(boxes) == (1.0, 8.0)


def test_islands_that_look_alike_stay_whole() -> None:
    # ten equal combs far apart among scattered single emitters
    combs = [b for i in range(10) for b in fingers(72.0 * i, 0.0, 21)]
    singles = [(72.0 * i + 3.0, 90.0, 72.0 * i + 4.0 + i, 91.0) for i in range(10)]
    boxes = np.array(combs + singles)
    groups = cluster_emitters(boxes)
    assert sorted(np.concatenate(groups).tolist()) == list(range(len(boxes)))
    whole = [group.tolist() for group in groups if len(group) == 21]
    assert sorted(whole) == [list(range(21 * i, 21 * i + 21)) for i in range(10)]
