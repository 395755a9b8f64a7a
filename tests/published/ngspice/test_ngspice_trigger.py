"""Trigger currents by an independent circuit simulator (Debian's ngspice package).

Each loop is two Gummel-Poon transistors and two resistor networks.  A voltage forces one
base and the current it takes is the injected current of the model's curve; its first
maximum is the trigger current.  The bodies are T networks: the other transistor's collector
sits at the network's inner node, so the simulator does not share the model's assumption of
one common junction voltage.  One more run forces a rising *current* and watches the loop
turn on by itself.
"""

from __future__ import annotations

import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from latchscan.pnpn.circuit import LoopCircuit, Shunt, Transistor
from latchscan.pnpn.loop import trigger_substrate, trigger_well

AGREEMENT = 0.02
SWEEP_STEP_V = 0.001
SWEEP_END_V = 1.0


@dataclass(frozen=True, kw_only=True)
class Case:
    bn: float
    bp: float
    saturation_n: float
    saturation_p: float
    knee_n: float
    knee_p: float
    well: float
    well_share: float
    substrate: float
    substrate_share: float
    supply: float
    celsius: float


SET_A = Case(
    bn=5.0,
    bp=20.0,
    saturation_n=1e-16,
    saturation_p=1e-16,
    knee_n=1e6,
    knee_p=1e6,
    well=500.0,
    well_share=1.0,
    substrate=300.0,
    substrate_share=1.0,
    supply=3.3,
    celsius=27.0,
)


def random_cases(count: int) -> list[Case]:
    rng = np.random.default_rng(20)
    cases = []
    while len(cases) < count:
        bn, bp = 10.0 ** rng.uniform(-0.3, 1.2), 10.0 ** rng.uniform(0.0, 1.8)
        well_share, substrate_share = rng.choice([1.0, 0.7, 0.4], 2)
        # without a margin over 1 the fold, if there is one, is at ever larger currents
        if bn * bp * well_share * substrate_share < 2.0:
            continue
        celsius = rng.choice([-40.0, 27.0, 125.0])
        warm = (celsius + 273.15) / 300.15
        leak = warm**3 * np.exp(1.12 / 8.617333262e-5 / 300.15 * (1.0 - 1.0 / warm))
        cases.append(
            Case(
                bn=bn,
                bp=bp,
                saturation_n=leak * 10.0 ** rng.uniform(-17.0, -15.0),
                saturation_p=leak * 10.0 ** rng.uniform(-17.0, -15.0),
                knee_n=rng.choice([1e6, 3e-2]),
                knee_p=rng.choice([1e6, 3e-2]),
                well=10.0 ** rng.uniform(2.0, 4.0),
                well_share=well_share,
                substrate=10.0 ** rng.uniform(2.0, 4.0),
                substrate_share=substrate_share,
                supply=rng.choice([1.8, 3.3, 5.0]),
                celsius=celsius,
            )
        )
    return cases


CASES = [SET_A, *random_cases(24)]


def circuit(case: Case) -> LoopCircuit:
    return LoopCircuit(
        npn=Transistor(
            saturation_current_a=case.saturation_n,
            beta=case.bn,
            reverse_beta=1.0,
            knee_current_a=case.knee_n,
        ),
        pnp=Transistor(
            saturation_current_a=case.saturation_p,
            beta=case.bp,
            reverse_beta=0.1,
            knee_current_a=case.knee_p,
        ),
        well=Shunt(self_ohm=case.well, transfer_ohm=case.well * case.well_share),
        substrate=Shunt(
            self_ohm=case.substrate, transfer_ohm=case.substrate * case.substrate_share
        ),
        supply_v=case.supply,
        temperature_k=case.celsius + 273.15,
    )


def loop_lines(name: str, case: Case, capacitance: str = "") -> list[str]:
    """Netlist of one loop: nodes s (cathode's base), w (anode's base), d (supply)."""
    at = f"temp={case.celsius}"
    well_inner = max(case.well * (1.0 - case.well_share), 1e-3)
    substrate_inner = max(case.substrate * (1.0 - case.substrate_share), 1e-3)
    npn = f"is={case.saturation_n} bf={case.bn} br=1 ikf={case.knee_n}"
    pnp = f"is={case.saturation_p} bf={case.bp} br=0.1 ikf={case.knee_p}"
    more = f"tnom={case.celsius} {capacitance}"
    return [
        f"V{name}d d{name} 0 {case.supply}",
        f"RA{name} w{name} wi{name} {well_inner}",
        f"RB{name} wi{name} d{name} {case.well * case.well_share}",
        f"RC{name} s{name} si{name} {substrate_inner}",
        f"RD{name} si{name} 0 {case.substrate * case.substrate_share}",
        f"QN{name} wi{name} s{name} 0 mn{name} {at}",
        f"QP{name} si{name} w{name} d{name} mp{name} {at}",
        f".model mn{name} npn({npn} {more})",
        f".model mp{name} pnp({pnp} {more})",
    ]


def simulate(folder: Path, lines: list[str], commands: list[str]) -> np.ndarray:
    """Run a netlist and return the columns it wrote to `data.txt`."""
    program = shutil.which("ngspice")
    if program is None:
        pytest.fail("ngspice is not installed; the set-up installs Debian's package of that name")
    netlist = folder / "loops.cir"
    control = [".control", "set wr_singlescale", "set wr_vecnames", *commands, ".endc", ".end"]
    netlist.write_text("\n".join(["trigger currents", *lines, *control]) + "\n")
    run = subprocess.run(
        [program, "-b", netlist.name],
        cwd=folder,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    data = folder / "data.txt"
    assert data.exists(), run.stdout + run.stderr
    return np.loadtxt(data, skiprows=1, ndmin=2)


def first_maximum(values: np.ndarray) -> float:
    """First maximum of a curve, NaN where it only rises."""
    falling = np.flatnonzero(np.diff(values) < 0.0)
    return float(values[falling[0]]) if falling.size else float("nan")


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> tuple[np.ndarray, np.ndarray]:
    """Simulated trigger currents from the substrate and from the well, one a case."""
    lines, names = ["Vx x 0 0", ".options gmin=1e-16 reltol=1e-6"], []
    for index, case in enumerate(CASES):
        for side in "sw":
            name = f"{side}{index}"
            lines += loop_lines(name, case)
            forced = f"s{name} 0" if side == "s" else f"d{name} w{name}"
            lines.append(f"E{name} {forced} x 0 1")
            names.append(f"i(E{name})")
    data = simulate(
        tmp_path_factory.mktemp("sweep"),
        lines,
        [f"dc Vx 0 {SWEEP_END_V} {SWEEP_STEP_V}", "wrdata data.txt " + " ".join(names)],
    )
    assert data[-1, 0] == pytest.approx(SWEEP_END_V), "the simulator stopped early"
    # a source's current counts from its first node through it to the second
    triggers = np.array([first_maximum(-column) for column in data[:, 1:].T])
    assert np.isfinite(triggers).sum() >= 40, "too few of the simulated loops fire"
    return triggers[0::2], triggers[1::2]


@pytest.mark.parametrize("index", range(len(CASES)))
def test_trigger_currents_agree(swept: tuple[np.ndarray, np.ndarray], index: int) -> None:
    loop = circuit(CASES[index])
    substrate, well = (float(side[index]) for side in swept)
    assert float(trigger_substrate(loop).injected_a) == pytest.approx(
        substrate, rel=AGREEMENT, nan_ok=True
    )
    assert float(trigger_well(loop).injected_a) == pytest.approx(well, rel=AGREEMENT, nan_ok=True)


def test_a_rising_current_fires_the_loop(tmp_path: Path) -> None:
    # slow against the transistors' charge, so that the loop follows its curve to the fold
    lines = [
        *loop_lines("a", SET_A, "tf=1n cje=1p cjc=1p"),
        "Rx da 0 1e9",
        "Ix 0 sa pwl(0 0 1m 4m)",
    ]
    # in the latched state both transistors saturate: a small series resistance bounds it
    lines[0] = f"Vad dd 0 {SET_A.supply}"
    lines.append("Rseries dd da 10")
    data = simulate(tmp_path, lines, ["tran 0.5u 1m", "wrdata data.txt v(sa) i(Vad)"])
    time, _, supply_a = data.T
    assert time[-1] == pytest.approx(1e-3), "the simulator stopped early"
    fired_at = time[np.flatnonzero(-supply_a > 0.02)[0]]
    model = float(trigger_substrate(circuit(SET_A)).injected_a)
    assert 4e-3 * fired_at / 1e-3 == pytest.approx(model, rel=AGREEMENT)
