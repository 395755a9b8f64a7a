"""Circuits and small synthetic blocks for the thyristor's tests."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
import shapely

from latchscan.layout.model import (
    N_OUTSIDE_NWELL,
    P_IN_NWELL,
    Body,
    Emitters,
    Layout,
    Pairs,
    Regions,
    Taps,
)
from latchscan.parasitics.model import Resistances, Transfers
from latchscan.technology.model import Technology

TECHNOLOGY = {
    "format": "latchscan-technology",
    "format_version": 1,
    "name": "test_process",
    "layers": {"active": {"gds": ("1/0",)}},
    "roles": {
        "nwell": "active",
        "pwell": "active",
        "well_tap": "active",
        "substrate_tap": "active",
        "p_diffusion_in_nwell": "active",
        "n_diffusion_outside_nwell": "active",
        "contact": "active",
    },
    "wells": {
        "nwell_sheet_resistance_ohm_sq": 900.0,
        "nwell_doping_cm3": 1.0e17,
        "well_tap_contact_resistance_ohm": 10.0,
    },
    "substrate": {
        "layers": ({"resistivity_ohm_cm": 10.0, "thickness_um": 300.0},),
        "back_side": "floating",
        "substrate_tap_contact_resistance_ohm": 10.0,
    },
    "transistors": {
        "vertical_pnp": {
            "beta": 20.0,
            "beta_over_buried": 2.0,
            "saturation_current_density_a_um2": 1.0e-17,
            "knee_current_density_a_um2": 1.0e-4,
            "beta_temperature_exponent": 1.7,
        },
        "lateral_npn": {
            "electron_diffusion_length_um": 300.0,
            "emitter_efficiency": 0.99,
            "lateral_share": 0.8,
            "calibration": 1.0,
            "saturation_current_density_a_um2": 1.0e-17,
            "knee_current_density_a_um2": 1.0e-4,
            "beta_temperature_exponent": 1.5,
        },
    },
    "loop": {"supply_v": 3.3, "probe_current_a": 1.0e-3},
    "rules": {
        "tap-distance": {"p_diffusion_max_um": 20.0, "n_diffusion_max_um": 20.0},
        "tap-reach": {"max_um": 6.0},
        "injector-spacing": {"min_um": 20.0},
        "well-resistance": {"max_ohm": 1000.0},
        "loop-gain": {"max_gain": 1.0},
    },
}


@pytest.fixture(scope="session")
def technology() -> Technology:
    return Technology.model_validate(TECHNOLOGY)


@dataclass(frozen=True, kw_only=True)
class Block:
    """Everything `evaluate_sites` reads."""

    layout: Layout
    pairs: Pairs
    resistances: Resistances
    transfers: Transfers


def _layout(boxes: np.ndarray, kind: np.ndarray) -> Layout:
    count = len(boxes)
    no_shapes = np.empty(0, dtype=np.object_)
    island = np.array([shapely.box(0, 200, 30, 230)], dtype=np.object_)
    bodies = (
        Body(id="nwell-1", kind="nwell", polygons=no_shapes, sheets=()),
        Body(id="pwell-1", kind="isolated_pwell", polygons=island, sheets=(), enclosing=0),
        Body(id="substrate", kind="substrate", polygons=no_shapes, sheets=()),
    )
    no_ints = np.empty(0, dtype=np.int64)
    return Layout(
        regions=Regions(
            bbox_um=(0.0, 0.0, 1.0, 1.0), shapes={}, contact_box_um=np.empty((0, 4)), labels=()
        ),
        bodies=bodies,
        taps=Taps(
            polygons=no_shapes,
            kind=no_ints,
            body=no_ints,
            contact_count=no_ints,
            contact_first=np.zeros(1, dtype=np.int64),
            contact_box_um=np.empty((0, 4)),
        ),
        emitters=Emitters(
            ids=np.array([f"e-{i}" for i in range(count)], dtype=np.str_),
            polygons=shapely.box(*boxes.T),
            kind=kind,
            body=np.where(kind == P_IN_NWELL, 0, 2),
            box_um=boxes,
            area_um2=(boxes[:, 2] - boxes[:, 0]) * (boxes[:, 3] - boxes[:, 1]),
            over_buried=(np.arange(count) % 3 == 0),
            injector=np.full(count, "", dtype=np.str_),
        ),
    )


@pytest.fixture(scope="session")
def make_block() -> Callable[..., Block]:
    """Factory of a seeded random block with `emitters` sources and `pairs` thyristors."""

    def make(*, emitters: int, pairs: int, seed: int) -> Block:
        rng = np.random.default_rng(seed)
        half = emitters // 2
        kind = np.repeat(np.array([P_IN_NWELL, N_OUTSIDE_NWELL]), [half, emitters - half])
        corner = rng.uniform(0.0, 2.0 * np.sqrt(emitters), (emitters, 2))
        boxes = np.hstack([corner, corner + rng.uniform(0.3, 4.0, (emitters, 2))])
        anode = rng.integers(0, half, pairs)
        # the last pair has the isolated p-well (body 1) as its anode
        anode[-1] = emitters + 1
        cathode = rng.integers(half, emitters, pairs)
        mean = 10.0 ** rng.uniform(1.5, 3.5, emitters + 3)
        place = rng.uniform(0.0, 10.0, (pairs, 2))
        return Block(
            layout=_layout(boxes, kind),
            pairs=Pairs(
                anode=anode,
                cathode=cathode,
                well=np.zeros(pairs, dtype=np.int64),
                base=np.full(pairs, 2, dtype=np.int64),
                spacing_um=rng.uniform(1.0, 60.0, pairs),
                base_width_um=rng.uniform(0.5, 60.0, pairs),
                edge_um=place,
                arrival_um=place,
            ),
            resistances=Resistances(
                mean_ohm=mean,
                max_ohm=1.1 * mean,
                patch_ohm=mean * rng.uniform(0.1, 1.0, emitters + 3),
                relative_error=np.zeros(emitters + 3),
            ),
            transfers=Transfers(
                well_ohm=mean[anode] * rng.uniform(0.05, 1.0, pairs),
                substrate_ohm=mean[cathode] * rng.uniform(0.05, 1.0, pairs),
            ),
        )

    return make
