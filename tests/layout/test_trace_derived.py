"""Polygons of any expressions against the regions, which are tested against shapely."""

from __future__ import annotations

import pytest
import shapely
from drawn_blocks import random_block, technology

from latchscan.layout.regions import Sizes, derive_expressions, derive_regions
from latchscan.tasks import Workers

NAMES = ("nwell", "pwell", "well_tap", "p_diffusion_in_nwell")


@pytest.mark.parametrize("tile_um", [None, 7.0])
def test_expressions_of_roles_are_the_regions(tile_um: float | None) -> None:
    block, tech = random_block(4, slanted=True), technology()
    regions = derive_regions(block, tech, None, Workers())
    expressions = {name: getattr(tech.roles, name) for name in NAMES}
    found = derive_expressions(block, tech, expressions, Workers(), sizes=Sizes(tile_um=tile_um))
    for name in NAMES:
        ours, theirs = found[name], regions.shapes[name]
        assert len(theirs)
        assert [shapely.to_wkb(p) for p in ours] == [shapely.to_wkb(p) for p in theirs]


def test_nothing_asked_is_nothing_derived() -> None:
    assert derive_expressions(random_block(1), technology(), {}, Workers()) == {}


def test_an_expression_that_holds_nothing_is_empty() -> None:
    found = derive_expressions(
        random_block(1), technology(), {"none": "nwell and not nwell"}, Workers()
    )
    assert list(found) == ["none"]
    assert len(found["none"]) == 0
