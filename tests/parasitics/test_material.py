"""Silicon numbers against published tables and values computed apart from the project."""

from __future__ import annotations

from types import SimpleNamespace

import pytest

from latchscan.constants import REFERENCE_TEMPERATURE_K, kelvin
from latchscan.parasitics.material import (
    ELECTRONS,
    HOLES,
    boron_doping_cm3,
    mobility_cm2_vs,
    phosphorus_doping_cm3,
    pwell_temperature_factor,
    resistance_factor,
    sheet_temperature_factor,
)


@pytest.mark.parametrize(
    ("resistivity", "doping"), [(1.0, 1.459e16), (10.0, 1.340e15), (50.0, 2.663e14)]
)
def test_boron_doping_of_a_resistivity(resistivity: float, doping: float) -> None:
    # ASTM F723, evaluated apart from the project to four digits
    assert boron_doping_cm3(resistivity) == pytest.approx(doping, rel=5e-4)


def test_phosphorus_doping_of_a_resistivity() -> None:
    # ASTM F723, evaluated apart from the project to four digits
    assert phosphorus_doping_cm3(10.0) == pytest.approx(4.445e14, rel=5e-4)


@pytest.mark.parametrize("resistivity", [1.0, 10.0, 50.0])
def test_doping_and_mobility_return_the_resistivity(resistivity: float) -> None:
    # Two independent publications: r = 1 / (q mu N); they agree within about 8 percent
    doping = boron_doping_cm3(resistivity)
    mobility = mobility_cm2_vs(HOLES, doping, 296.15)
    assert 1.0 / (1.602e-19 * mobility * doping) == pytest.approx(resistivity, rel=0.08)


@pytest.mark.parametrize(("celsius", "ratio"), [(85, 1.425), (105, 1.585), (125, 1.752)])
def test_lightly_doped_p_silicon_heats_up(celsius: float, ratio: float) -> None:
    # Arora, Hauser, Roulston 1982, evaluated apart from the project, relative to 300 K
    doping = boron_doping_cm3(10.0)
    assert resistance_factor(HOLES, doping, kelvin(celsius), 300.0) == pytest.approx(
        ratio, rel=2e-3
    )


def test_mobilities_at_300_k() -> None:
    # Intrinsic-limit sums of the published constants: 88 + 7.4e8 300^-2.33 = 1340 and
    # 54.3 + 1.36e8 300^-2.23 = 461 (Arora 1982, abstract's fit, worked by hand)
    assert mobility_cm2_vs(ELECTRONS, 0.0, 300.0) == pytest.approx(1340, rel=0.005)
    assert mobility_cm2_vs(HOLES, 0.0, 300.0) == pytest.approx(461, rel=0.005)


def _technology(nwell_doping_cm3: float, resistivity_ohm_cm: float) -> SimpleNamespace:
    layer = SimpleNamespace(resistivity_ohm_cm=SimpleNamespace(typical=resistivity_ohm_cm))
    return SimpleNamespace(
        wells=SimpleNamespace(nwell_doping_cm3=SimpleNamespace(typical=nwell_doping_cm3)),
        substrate=SimpleNamespace(layers=(layer,)),
    )


def test_technology_factors_are_one_at_the_files_temperature() -> None:
    technology = _technology(1e17, 10.0)
    for factor in (sheet_temperature_factor, pwell_temperature_factor):
        assert factor(technology, REFERENCE_TEMPERATURE_K) == pytest.approx(1.0, rel=1e-12)


def test_heavier_doping_heats_less() -> None:
    # Impurity scattering weakens with temperature, so the factor falls with doping
    # (Arora 1982, figs. 3 and 4)
    hot = kelvin(125.0)
    light, heavy = _technology(1e15, 50.0), _technology(3e17, 0.1)
    assert sheet_temperature_factor(light, hot) > sheet_temperature_factor(heavy, hot) > 1.0
    assert pwell_temperature_factor(light, hot) > pwell_temperature_factor(heavy, hot) > 1.0
