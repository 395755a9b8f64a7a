"""The section ``conductors`` and the rules that need it: each fault once, at its place.

The form of the planted texts is that of ``tests/planted_text.py``.
"""

from __future__ import annotations

from pathlib import Path

import networkx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from planted_text import plant

from latchscan.technology.check import check_technology, validate

METAL1 = "metal1: {shape: metal1, sheet_resistance_ohm_sq: 0.08}"
METAL2 = "metal2: {shape: metal2, sheet_resistance_ohm_sq: 0.08}"
VIA2 = "    via2: {shape: via2, joins: [metal2, metal3], resistance_ohm: 5.0}\n"
VIA3 = "    via3: {shape: via3, joins: [metal3, metal4], resistance_ohm: 3.0}\n"

PLANTED: list[tuple[str, str, str, str, str]] = [
    # what, text that is replaced, by what, key, part of the message
    (
        "undefined name in a conductor",
        "shape: metal1,",
        "shape: §metl1,",
        "conductors.layers.metal1.shape",
        "undefined name `metl1`, expected `metal1`",
    ),
    (
        "undefined name in a connection",
        "shape: via1,",
        "shape: via1 and §swamp,",
        "conductors.connections.via1.shape",
        "undefined name `swamp`, expected a name from `layers` or `derived`",
    ),
    (
        "undefined name in a resistor",
        "shape: nwell and well_resistor_marker",
        "shape: nwell and §well_resistor_maker",
        "conductors.resistors.well_resistor.shape",
        "expected `well_resistor_marker`",
    ),
    (
        "undefined name in the pads",
        "{shape: pad, on",
        "{shape: §pat, on",
        "conductors.pads.shape",
        "undefined name `pat`, expected `pad`",
    ),
    (
        "syntax",
        "shape: poly and not resistor_marker",
        "shape: poly §not resistor_marker",
        "conductors.layers.poly.shape",
        "expected `and` or `or` before `not`",
    ),
    (
        "length out of range",
        "shape: via1,",
        'shape: "grow(via1, §5000)",',
        "conductors.connections.via1.shape",
        "at most 1000 um",
    ),
    (
        "expression that is a list",
        "shape: metal1,",
        "shape: §[metal1],",
        "conductors.layers.metal1.shape",
        "got a list, expected text",
    ),
    (
        "conductor without a shape",
        METAL1,
        "§metal1: {sheet_resistance_ohm_sq: 0.08}",
        "conductors.layers.metal1.shape",
        "missing, expected what of the layers conducts",
    ),
    (
        "conductor without a number",
        METAL1,
        "§metal1: {shape: metal1}",
        "conductors.layers.metal1.sheet_resistance_ohm_sq",
        "missing, expected sheet resistance [ohm/sq]",
    ),
    (
        "conductor that is no mapping",
        METAL1,
        "metal1: §metal1",
        "conductors.layers.metal1",
        "got text `metal1`, expected a mapping with the keys shape, kind",
    ),
    (
        "wrong unit in a key of a conductor",
        "metal1, sheet_resistance_ohm_sq:",
        "metal1, §sheet_resistance_mohm:",
        "conductors.layers.metal1.sheet_resistance_mohm",
        "expected `sheet_resistance_ohm_sq` with the number in ohm per square",
    ),
    (
        "milliohm for ohm",
        METAL2,
        METAL2.replace("0.08", "§8.0e+7"),
        "conductors.layers.metal2.sheet_resistance_ohm_sq",
        "out of range, expected 0.0001 to 1e+06",
    ),
    (
        "no resistance at all",
        METAL2,
        METAL2.replace("0.08", "§0"),
        "conductors.layers.metal2.sheet_resistance_ohm_sq",
        "out of range",
    ),
    (
        "unknown kind",
        "kind: poly",
        "kind: §polly",
        "conductors.layers.poly.kind",
        "expected `diffusion`, `poly` or `metal`",
    ),
    (
        "name of a conductor with capitals",
        METAL1,
        METAL1 + "\n    §Metal5: {shape: via3, touches: [poly], sheet_resistance_ohm_sq: 0.08}",
        "conductors.layers.Metal5",
        "not a usable name",
    ),
    (
        "conductor with the name of a role",
        "    metal1: {shape",
        "    §nwell: {shape: nwell, touches: [metal2], sheet_resistance_ohm_sq: 900.0}\n"
        "    metal1: {shape",
        "conductors.layers.nwell",
        "`nwell` is the role that resistors made of a well name, expected another name",
    ),
    (
        "conductor with the word for all",
        "    metal1: {shape",
        "    §any: {shape: nwell, touches: [metal2], sheet_resistance_ohm_sq: 900.0}\n"
        "    metal1: {shape",
        "conductors.layers.any",
        "`any` is what reports call all conductors",
    ),
    (
        "resistor with the word for wiring",
        "    poly_resistor:",
        "    §strap:",
        "conductors.resistors.strap",
        "`strap` is what reports call wiring that resists",
    ),
    (
        "connection with a conductor's name",
        "    via1: {shape: via1,",
        "    §metal2: {shape: via1,",
        "conductors.connections.metal2",
        "already the name of a conductor in line",
    ),
    (
        "text pair of two conductors",
        METAL2,
        'metal2: {shape: metal2, texts: ["70/0"], sheet_resistance_ohm_sq: 0.08}\n'
        '    metal9: {shape: metal2, touches: [metal2], texts: [§"70/0"],'
        " sheet_resistance_ohm_sq: 0.08}",
        "conductors.layers.metal9.texts[0]",
        "70/0 is already used by conductor `metal2`, expected a pair of its own",
    ),
    (
        "text pair of one conductor twice",
        METAL2,
        METAL2[:-1] + ', texts: ["70/0", §"70/0"]}',
        "conductors.layers.metal2.texts[1]",
        "70/0 is already used by conductor `metal2`",
    ),
    (
        "text pair that is general too",
        METAL2,
        METAL2[:-1] + ', texts: [§"60/0"]}',
        "conductors.layers.metal2.texts[0]",
        "60/0 is already used by `labels.layers`, expected a pair of its own",
    ),
    (
        "text pair of the wrong form",
        METAL2,
        METAL2[:-1] + ", texts: [§text]}",
        "conductors.layers.metal2.texts[0]",
        "expected layer/datatype",
    ),
    (
        "unknown conductor in joins",
        "joins: [metal1, metal2]",
        "joins: [metal1, §metl2]",
        "conductors.connections.via1.joins[1]",
        "unknown conductor `metl2`, expected `metal2`",
    ),
    (
        "layer that is no conductor in joins",
        "joins: [metal1, metal2]",
        "joins: [metal1, metal2, §pplus]",
        "conductors.connections.via1.joins[2]",
        "unknown conductor `pplus`, expected one of `diffusion`, `poly`, `metal1`",
    ),
    (
        "role in joins",
        "joins: [metal1, metal2]",
        "joins: [metal1, metal2, §nwell]",
        "conductors.connections.via1.joins[2]",
        "unknown conductor `nwell`",
    ),
    (
        "conductor twice in joins",
        "joins: [metal1, metal2]",
        "joins: [metal1, metal2, §metal1]",
        "conductors.connections.via1.joins[2]",
        "`metal1` stands here twice, expected each conductor once",
    ),
    (
        "joins nothing",
        "joins: [metal1, metal2]",
        "joins: §[]",
        "conductors.connections.via1.joins",
        "got a list without entries, expected at least two",
    ),
    (
        "joins one",
        "joins: [metal1, metal2]",
        "joins: §[metal1]",
        "conductors.connections.via1.joins",
        "a connection joins at least two conductors, got one",
    ),
    (
        "joins a text",
        "joins: [metal1, metal2]",
        "joins: §metal1",
        "conductors.connections.via1.joins",
        "got text `metal1`, expected a list: [metal1]",
    ),
    (
        "joins a number",
        "joins: [metal1, metal2]",
        "joins: [metal1, §2]",
        "conductors.connections.via1.joins[1]",
        "got the number 2, expected text",
    ),
    (
        "misspelt joins",
        "via1, joins: [metal1, metal2]",
        "via1, §join: [metal1, metal2]",
        "conductors.connections.via1.join",
        "unknown key, expected `joins`",
    ),
    (
        "touches itself",
        METAL2,
        METAL2[:-1] + ", touches: [§metal2]}",
        "conductors.layers.metal2.touches[0]",
        "touches itself, expected another conductor",
    ),
    (
        "touches an unknown one",
        METAL2,
        METAL2[:-1] + ", touches: [poly, §metal]}",
        "conductors.layers.metal2.touches[1]",
        "unknown conductor `metal`, expected `metal",
    ),
    (
        "resistor in an unknown conductor",
        "conductor: nwell",
        "conductor: §nwel",
        "conductors.resistors.well_resistor.conductor",
        "unknown conductor `nwel`, expected `nwell`",
    ),
    (
        "pads on an unknown conductor",
        "on: metal4",
        "on: §metal_4",
        "conductors.pads.on",
        "unknown conductor `metal_4`, expected `metal4`",
    ),
    (
        "pads on a well",
        "on: metal4",
        "on: §nwell",
        "conductors.pads.on",
        "unknown conductor `nwell`",
    ),
    (
        "no conductor in the silicon",
        "  layers:\n    diffusion:\n",
        "  §layers:\n    diffusion:\n",
        "conductors.layers",
        "no conductor of kind `diffusion`",
    ),
    (
        "silicon above metal",
        METAL2,
        "§metal2: {shape: metal2, kind: diffusion, sheet_resistance_ohm_sq: 0.08}",
        "conductors.layers.metal2",
        "stands after `poly`, expected conductors from the silicon upwards",
    ),
    (
        "hole between two metals",
        VIA2,
        "",
        "conductors.layers.metal3",
        "no connection joins it to `metal2`, expected one in `connections`",
    ),
    (
        "last metal cut off",
        VIA3,
        "",
        "conductors.layers.metal4",
        "no connection joins it to `metal3`",
    ),
    (
        "poly left out of the contact",
        "joins: [diffusion, poly, metal1]",
        "joins: [diffusion, metal1]",
        "conductors.layers.poly",
        "no connection joins it to `diffusion` or `metal1`",
    ),
    (
        "silicon left out of the contact",
        "joins: [diffusion, poly, metal1]",
        "joins: [poly, metal1]",
        "conductors.layers.poly",
        "no connection joins it to `diffusion`",
    ),
    (
        "via between the wrong metals",
        "joins: [metal2, metal3]",
        "joins: [metal1, metal2]",
        "conductors.layers.metal3",
        "no connection joins it to `metal2`",
    ),
    (
        "unknown part",
        "  pads: {shape: pad",
        "  §pad: {shape: pad",
        "conductors.pad",
        "unknown key, expected `pads`",
    ),
    (
        "no value for the section",
        "  resistors:\n    # Without",
        "  resistors: §3\n  resistor:\n    # Without",
        "conductors.resistors",
        "got the number 3, expected a mapping of names",
    ),
    (
        "kind of ring that there is not",
        "n_injector: [majority]",
        "n_injector: [majority, §double]",
        "rules.ring-missing.n_injector[1]",
        "got text `double`, expected `majority` or `minority`",
    ),
    (
        "kind of ring without brackets",
        "n_injector: [majority]",
        "n_injector: §majority",
        "rules.ring-missing.n_injector",
        "expected a list: [majority]",
    ),
    (
        "negative gap",
        "ring-gap: {severity: fail, max_um: 0.0}",
        "ring-gap: {severity: fail, max_um: §-1}",
        "rules.ring-gap.max_um",
        "expected at least 0, got -1",
    ),
    (
        "share in percent",
        "min_share: 0.5",
        "min_share: §50",
        "rules.ring-contacts.min_share",
        "expected at most 1, got 50",
    ),
    (
        "limit of another rule",
        "tie-net: {severity: fail}",
        "tie-net: {severity: fail, §max_ohm: 50.0}",
        "rules.tie-net.max_ohm",
        "unknown key, expected one of source, severity",
    ),
    (
        "coverage in percent",
        "least_coverage: 0.5",
        "least_coverage: §50",
        "rings.least_coverage",
        "expected at most 1",
    ),
    (
        "unit of the reach",
        "  reach_um: 30.0",
        "  §reach_nm: 30000",
        "rings.reach_nm",
        "wrong unit `nm` in the key, expected `reach_um` with the number in um",
    ),
]
FOLLOWED = {"no value for the section"}
"""Faults that rightly bring a second problem with them."""
ALSO_REPLACED = {"no conductor in the silicon": ("kind: diffusion", "kind: poly")}
"""A second change that a fault needs."""


@pytest.fixture(scope="module")
def larch(repository: Path) -> str:
    return (repository / "techfiles" / "larch180.yaml").read_text()


@pytest.mark.parametrize(
    ("what", "old", "new", "key", "message"), PLANTED, ids=[case[0] for case in PLANTED]
)
def test_planted_fault(larch: str, what: str, old: str, new: str, key: str, message: str) -> None:
    text, line, column = plant(larch, old, new)
    if what in ALSO_REPLACED:
        text = plant(text, *ALSO_REPLACED[what])[0]
    problems = check_technology(text, "own.yaml")
    found = [p for p in problems if p.key == key and message in p.message]
    assert len(found) == 1, "\n".join(map(str, problems))
    if line:
        assert (found[0].line, found[0].column) == (line, column)
    else:
        name = key.rpartition(".")[2]
        assert text.splitlines()[found[0].line - 1][found[0].column - 1 :].startswith(f"{name}:")
    if what not in FOLLOWED:
        assert len(problems) == 1, "\n".join(map(str, problems))


def test_two_holes_are_two_problems(larch: str) -> None:
    problems = check_technology(larch.replace(VIA2, "").replace(VIA3, ""), "own.yaml")
    assert [(p.key, p.message.partition(",")[0]) for p in problems] == [
        ("conductors.layers.metal3", "no connection joins it to `metal2` or `metal4`"),
        ("conductors.layers.metal4", "no connection joins it to `metal3`"),
    ]


def test_touching_closes_a_hole(larch: str) -> None:
    """Local interconnect needs no connection, whichever of both says so."""
    for upper, lower in (("metal3", "metal2"), ("metal2", "metal3")):
        old = f"{upper}: {{shape: {upper},"
        text = plant(larch.replace(VIA2, ""), old, f"{old} touches: [{lower}],")[0]
        assert check_technology(text, "own.yaml") == []


def test_a_technology_may_know_no_conductors(larch: str) -> None:
    """The older meaning: texts and the marker alone make injectors."""
    start, end = larch.index("\nconductors:\n"), larch.index("\nwells:\n")
    technology, problems = validate(larch[:start] + larch[end:], "own.yaml")
    assert problems == []
    assert technology is not None
    assert technology.conductors is None
    assert (technology.rings.reach_um, technology.rings.contact_reach_um) == (30.0, 2.0)


def test_what_else_may_be_left_out(larch: str) -> None:
    """One conductor needs no connection; resistors, pads, kinds and lists have defaults."""
    start, end = larch.index("\nconductors:\n"), larch.index("\nwells:\n")
    only = "{shape: active, kind: diffusion, sheet_resistance_ohm_sq: 8}"
    least = f"\nconductors: {{layers: {{all: {only}}}}}"
    technology, problems = validate(larch[:start] + least + larch[end:], "own.yaml")
    assert problems == []
    assert technology is not None
    conductors = technology.conductors
    assert conductors is not None
    assert (conductors.connections, conductors.resistors, conductors.pads) == ({}, {}, None)
    assert (conductors.layers["all"].texts, conductors.layers["all"].touches) == ((), ())


NAMES = ("a", "b", "c", "d", "e", "f")


@settings(max_examples=60, deadline=None)
@given(
    st.integers(2, 6),
    st.lists(st.lists(st.sampled_from(NAMES), min_size=2, max_size=3, unique=True), max_size=5),
    st.lists(st.tuples(st.sampled_from(NAMES), st.sampled_from(NAMES)), max_size=3),
)
def test_holes_are_where_a_graph_falls_apart(
    count: int, joints: list[list[str]], touching: list[tuple[str, str]]
) -> None:
    """Reference: connected components of `networkx`."""
    names = NAMES[:count]
    joints = [joint for joint in joints if set(joint) <= set(names)]
    touches: dict[str, set[str]] = {name: set() for name in names}
    for one, other in touching:
        if one != other and {one, other} <= set(names):
            touches[one].add(other)
    lines = ["conductors:", "  layers:"]
    for name in names:
        kind = "diffusion" if name == "a" else "metal"
        others = f"touches: [{', '.join(sorted(touches[name]))}]"
        lines += [f"    {name}: {{shape: x, kind: {kind}, {others}, sheet_resistance_ohm_sq: 1.0}}"]
    lines += ["  connections:" if joints else "  connections: {}"]
    lines += [
        f"    j{i}: {{shape: x, joins: [{', '.join(joint)}], resistance_ohm: 1.0}}"
        for i, joint in enumerate(joints)
    ]
    graph = networkx.Graph()
    graph.add_nodes_from(names)
    graph.add_edges_from((joint[0], other) for joint in joints for other in joint[1:])
    graph.add_edges_from((one, other) for one, others in touches.items() for other in others)
    parts = [min(part) for part in networkx.connected_components(graph)]
    expected = sorted(f"conductors.layers.{name}" for name in parts if name != "a")
    problems = check_technology("\n".join(lines) + "\n", "own.yaml")
    assert sorted(p.key for p in problems if "no connection joins" in p.message) == expected
