"""Ranked sites: against plain scalar arithmetic, against the exact loop, and by their laws."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
import shapely

from latchscan.parasitics.model import Transfers
from latchscan.pnpn.circuit import LoopCircuit, Shunt, Transistor
from latchscan.pnpn.loop import first_order_triggers, trigger_substrate, trigger_well
from latchscan.pnpn.model import Sites
from latchscan.pnpn.sites import EXACT_SITES, evaluate_sites
from latchscan.pnpn.sources import collect_sources, pair_places_um
from latchscan.technology.model import Technology

TEMPERATURE_K = 398.15
T0_K = 300.15


def evaluate(block: Any, technology: Technology) -> Sites:
    return evaluate_sites(
        block.layout,
        block.pairs,
        block.resistances,
        block.transfers,
        technology,
        TEMPERATURE_K,
    )


@pytest.fixture(scope="module")
def block(make_block: Callable[..., Any]) -> Any:
    return make_block(emitters=300, pairs=1500, seed=3)


@pytest.fixture(scope="module")
def sites(block: Any, technology: Technology) -> Sites:
    return evaluate(block, technology)


def ends(block: Any, patch: bool, pair: int) -> dict[str, float]:
    """Resistances and areas of one pair, in plain numbers."""
    anode, cathode = int(block.pairs.anode[pair]), int(block.pairs.cathode[pair])
    emitters = block.layout.emitters
    own = block.resistances.patch_ohm if patch else block.resistances.mean_ohm
    bound = block.resistances.patch_ohm if patch else block.resistances.max_ohm

    def area(row: int) -> float:
        if row >= len(emitters.area_um2):
            return 900.0  # the isolated p-well is a square of 30 um
        if not patch:
            return float(emitters.area_um2[row])
        centre = (emitters.box_um[:, :2] + emitters.box_um[:, 2:]) / 2
        near = np.hypot(*(centre - centre[row]).T) <= 10.0
        return float(emitters.area_um2[near & (emitters.kind == emitters.kind[row])].sum())

    return {
        "rw": float(own[anode]),
        "rs": float(own[cathode]),
        "rw_t": float(min(block.transfers.well_ohm[pair], bound[anode])),
        "rs_t": float(min(block.transfers.substrate_ohm[pair], bound[cathode])),
        "area_p": area(anode),
        "area_n": area(cathode),
    }


def low_betas(block: Any, pair: int) -> tuple[float, float]:
    alpha = 0.99 * 0.8 / math.cosh(float(block.pairs.base_width_um[pair]) / 300.0)
    anode = int(block.pairs.anode[pair])
    emitters = block.layout.emitters
    buried = anode >= len(emitters.area_um2) or bool(emitters.over_buried[anode])
    ratio = TEMPERATURE_K / T0_K
    return alpha / (1 - alpha) * ratio**1.5, (2.0 if buried else 20.0) * ratio**1.7


def plain_gain(block: Any, patch: bool, pair: int) -> tuple[float, float]:
    """Loop gain at 1 mA and its ceiling, straight from the definition."""
    e = ends(block, patch, pair)
    bn0, bp0 = low_betas(block, pair)
    probe, vt = 1e-3, 8.617333262e-5 * TEMPERATURE_K
    bn = bn0 / (1 + probe / (1e-4 * e["area_n"]))
    bp = bp0 / (1 + probe / (1e-4 * e["area_p"]))
    npn = bn * e["rs_t"] / (e["rs"] + vt / (probe / bn))
    pnp = bp * e["rw_t"] / (e["rw"] + vt / (probe / bp))
    return npn * pnp, bn0 * bp0 * e["rs_t"] * e["rw_t"] / (e["rs"] * e["rw"])


def loop_of(block: Any, sites: Sites, row: int) -> LoopCircuit:
    """Circuit of one ranked site, from the definition."""
    pair = int(sites.pair[row])
    e = ends(block, bool(sites.patch[row]), pair)
    ratio = TEMPERATURE_K / T0_K
    density = 1e-17 * ratio**3 * math.exp(1.12 / 8.617333262e-5 * (1 / T0_K - 1 / TEMPERATURE_K))
    bn, bp = low_betas(block, pair)

    def transistor(area: float, beta: float, reverse: float) -> Transistor:
        return Transistor(
            saturation_current_a=density * area,
            knee_current_a=1e-4 * area,
            beta=beta,
            reverse_beta=reverse,
        )

    return LoopCircuit(
        npn=transistor(e["area_n"], bn, 1.0),
        pnp=transistor(e["area_p"], bp, 0.1),
        well=Shunt(self_ohm=e["rw"], transfer_ohm=e["rw_t"]),
        substrate=Shunt(self_ohm=e["rs"], transfer_ohm=e["rs_t"]),
        supply_v=3.3,
        temperature_k=TEMPERATURE_K,
    )


def test_every_pair_is_one_site_and_the_worst_comes_first(block: Any, sites: Sites) -> None:
    count = len(block.pairs.anode)
    assert sorted(sites.pair.tolist()) == list(range(count))
    assert sites.ids.tolist() == [f"site-{i}" for i in range(1, count + 1)]
    assert np.all(np.diff(sites.loop_gain) <= 1e-9 * sites.loop_gain[:-1])


def test_columns_equal_plain_arithmetic(block: Any, sites: Sites) -> None:
    for row in range(0, len(sites.pair), 7):
        pair = int(sites.pair[row])
        single, joint = (plain_gain(block, patch, pair) for patch in (False, True))
        patch = joint[0] > single[0]
        assert bool(sites.patch[row]) == patch
        gain, ceiling = joint if patch else single
        assert sites.loop_gain[row] == pytest.approx(gain, rel=1e-6)
        assert sites.loop_gain_ceiling[row] == pytest.approx(ceiling, rel=1e-9)


def test_reported_numbers_give_the_reported_gain(sites: Sites) -> None:
    vt = 8.617333262e-5 * TEMPERATURE_K
    npn = sites.beta_npn * sites.substrate_transfer_ohm
    npn /= sites.substrate_resistance_ohm + vt * sites.beta_npn / 1e-3
    pnp = sites.beta_pnp * sites.well_transfer_ohm
    pnp /= sites.well_resistance_ohm + vt * sites.beta_pnp / 1e-3
    np.testing.assert_allclose(sites.loop_gain, npn * pnp, rtol=1e-6)


def test_both_kinds_of_judgement_occur(sites: Sites) -> None:
    assert 0 < sites.patch.sum() < sites.patch.size


def test_worst_sites_carry_the_exact_fold(block: Any, sites: Sites) -> None:
    for row in range(0, EXACT_SITES, 40):
        loop = loop_of(block, sites, row)
        substrate = float(trigger_substrate(loop).injected_a)
        well = float(trigger_well(loop).injected_a)
        if sites.loop_gain_ceiling[row] < 1.0:
            substrate = well = math.nan
        assert sites.trigger_substrate_a[row] == pytest.approx(substrate, rel=1e-5, nan_ok=True)
        assert sites.trigger_well_a[row] == pytest.approx(well, rel=1e-5, nan_ok=True)


def test_other_sites_carry_the_first_order(block: Any, sites: Sites) -> None:
    rows = [r for r in range(EXACT_SITES, len(sites.pair), 20) if sites.loop_gain_ceiling[r] >= 1]
    assert rows
    for row in rows:
        loop = loop_of(block, sites, row)
        at_probe = LoopCircuit(
            npn=Transistor(
                saturation_current_a=loop.npn.saturation_current_a,
                beta=sites.beta_npn[row],
                reverse_beta=1.0,
            ),
            pnp=Transistor(
                saturation_current_a=loop.pnp.saturation_current_a,
                beta=sites.beta_pnp[row],
                reverse_beta=0.1,
            ),
            well=loop.well,
            substrate=loop.substrate,
            supply_v=3.3,
            temperature_k=TEMPERATURE_K,
        )
        substrate, well = first_order_triggers(at_probe)
        assert sites.trigger_substrate_a[row] == pytest.approx(float(substrate), rel=1e-5)
        assert sites.trigger_well_a[row] == pytest.approx(float(well), rel=1e-5)


def test_what_cannot_latch_has_no_trigger_current(sites: Sites) -> None:
    unable = sites.loop_gain_ceiling < 1.0
    assert unable.any()
    assert np.isnan(sites.trigger_current_a[unable]).all()
    lesser = np.fmin(sites.trigger_well_a, sites.trigger_substrate_a)
    np.testing.assert_array_equal(sites.trigger_current_a, lesser)


def test_equal_places_are_ordered_by_pair(block: Any, technology: Technology) -> None:
    # every pair twice, the copy with resistances off by rounding errors
    twice = replace(
        block,
        pairs=type(block.pairs)(
            **{
                f.name: np.concatenate([getattr(block.pairs, f.name)] * 2)
                for f in fields(block.pairs)
            }
        ),
        transfers=Transfers(
            **{
                f.name: np.concatenate([v := getattr(block.transfers, f.name), v * (1 + 4e-16)])
                for f in fields(block.transfers)
            }
        ),
    )
    pair = evaluate(twice, technology).pair
    count = len(block.pairs.anode)
    np.testing.assert_array_equal(pair[0::2], pair[1::2] - count)


def test_an_untied_well_is_the_worst_site(block: Any, technology: Technology) -> None:
    mean, patch = block.resistances.mean_ohm.copy(), block.resistances.patch_ohm.copy()
    well = int(block.pairs.anode[5])
    mean[well] = patch[well] = np.inf
    untied = replace(
        block,
        resistances=replace(block.resistances, mean_ohm=mean, max_ohm=mean, patch_ohm=patch),
        transfers=replace(
            block.transfers,
            well_ohm=np.where(block.pairs.anode == well, np.nan, block.transfers.well_ohm),
        ),
    )
    result = evaluate(untied, technology)
    row = int(np.flatnonzero(result.pair == 5)[0])
    assert np.isinf(result.well_resistance_ohm[row])
    assert np.isfinite(result.loop_gain).all()
    assert result.loop_gain[row] > float(plain_gain(block, bool(result.patch[row]), 5)[0])
    assert np.isfinite(result.trigger_current_a[row])


def test_a_pair_without_resistance_comes_last_without_numbers(
    block: Any, technology: Technology
) -> None:
    transfer = block.transfers.well_ohm.copy()
    transfer[17] = np.nan
    broken = replace(block, transfers=replace(block.transfers, well_ohm=transfer))
    whole, result = evaluate(block, technology), evaluate(broken, technology)
    assert result.pair[-1] == 17
    assert np.isnan(result.loop_gain[-1])
    assert np.isnan(result.trigger_current_a[-1])
    np.testing.assert_array_equal(result.pair[:-1], whole.pair[whole.pair != 17])
    np.testing.assert_array_equal(result.loop_gain[:-1], whole.loop_gain[whole.pair != 17])
    assert result.ids[-1] == f"site-{len(result.ids)}"


def test_rounding_errors_below_zero_count_as_no_coupling(
    block: Any, technology: Technology
) -> None:
    transfer = block.transfers.well_ohm.copy()
    transfer[17] = -1e-12
    apart = replace(block, transfers=replace(block.transfers, well_ohm=transfer))
    result = evaluate(apart, technology)
    row = int(np.flatnonzero(result.pair == 17)[0])
    assert result.loop_gain[row] == result.loop_gain_ceiling[row] == 0.0


def test_no_pairs_give_no_sites(block: Any, technology: Technology) -> None:
    empty = replace(
        block,
        pairs=type(block.pairs)(
            **{f.name: getattr(block.pairs, f.name)[:0] for f in fields(block.pairs)}
        ),
        transfers=Transfers(well_ohm=np.empty(0), substrate_ohm=np.empty(0)),
    )
    assert evaluate(empty, technology).ids.size == 0


def test_patch_area_is_the_sum_within_the_radius(block: Any) -> None:
    sources = collect_sources(block.layout, 10.0)
    for row in (0, 17, 160, 299):
        assert sources.patch_area_um2[row] == pytest.approx(
            ends(replace(block, pairs=replace(block.pairs, anode=np.full(1500, row))), True, 0)[
                "area_p"
            ]
        )


def test_places_lie_halfway_between_the_pair(block: Any) -> None:
    place = pair_places_um(block.layout, block.pairs)
    polygons = block.layout.emitters.polygons
    for pair in range(0, 1400, 50):
        first = polygons[block.pairs.anode[pair]]
        second = polygons[block.pairs.cathode[pair]]
        half = shapely.distance(first, second) / 2
        point = shapely.Point(place[pair])
        if half > 0:
            assert shapely.distance(point, first) == pytest.approx(half)
            assert shapely.distance(point, second) == pytest.approx(half)


def test_wider_bases_never_raise_a_loop_gain(
    block: Any, sites: Sites, technology: Technology
) -> None:
    wider = replace(
        block, pairs=replace(block.pairs, base_width_um=block.pairs.base_width_um * 1.5 + 1.0)
    )
    result = evaluate(wider, technology)
    before, after = np.empty(len(sites.pair)), np.empty(len(sites.pair))
    before[sites.pair], after[result.pair] = sites.loop_gain, result.loop_gain
    assert np.all(after < before)


def test_a_hundred_thousand_pairs_take_a_second(
    make_block: Callable[..., Any], technology: Technology
) -> None:
    block = make_block(emitters=20_000, pairs=100_000, seed=1)
    start = time.process_time()
    evaluate(block, technology)
    # measured 0.4 s of one core; the bound only catches a loss of order
    assert time.process_time() - start < 3.0
