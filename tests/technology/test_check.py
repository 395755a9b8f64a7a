"""Planted faults: each is found once, at its line and column, with what was expected.

A planted text marks the place that the problem must name by the sign ``§``, which is taken
out before the check; line and column are counted here, apart from the checker.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from planted_text import plant

from latchscan.technology.check import check_technology, validate
from latchscan.technology.problem import Problem

PLANTED: list[tuple[str, str, str, str, str]] = [
    # what, text that is replaced, by what, key, part of the message
    ("unknown key", "\nwells:", "\n§well:\n  {}\nwells:", "well", "unknown key, expected `wells`"),
    (
        "misspelt key is one problem, not an unknown and a missing one",
        "  nwell_doping_cm3:",
        "  §nwell_dopping_cm3:",
        "wells.nwell_dopping_cm3",
        "unknown key, expected `nwell_doping_cm3`",
    ),
    (
        "key far from any",
        "  back_side:",
        "  §colour: red\n  back_side:",
        "substrate.colour",
        "expected one of layers, back_side",
    ),
    (
        "unit beside the right one",
        "{resistivity_ohm_cm:",
        "{§resistivity_ohm_um:",
        "substrate.layers[0].resistivity_ohm_um",
        "wrong unit `ohm_um` in the key, expected `resistivity_ohm_cm` with the number in ohm cm",
    ),
    (
        "unit a thousandfold",
        "  well_tap_contact_resistance_ohm:",
        "  §well_tap_contact_resistance_kohm:",
        "wells.well_tap_contact_resistance_kohm",
        "wrong unit `kohm` in the key, expected `well_tap_contact_resistance_ohm`",
    ),
    (
        "unit left out",
        "  supply_v: 1.8",
        "  §supply: 1.8",
        "loop.supply",
        "expected `supply_v` with the number in V",
    ),
    (
        "missing key at its parent",
        "\nloop:\n  supply_v: 1.8",
        "\n§loop:",
        "loop.supply_v",
        "missing, expected supply between the rails [V]",
    ),
    (
        "missing key in a list's entry",
        ", thickness_um: 300.0}",
        "}",
        "substrate.layers[0].thickness_um",
        "missing, expected thickness [um]",
    ),
    ("missing block", "\nname: larch180", "", "name", "missing, expected short name"),
    (
        "text that looks like a number",
        "probe_current_a: 5.0e-5",
        "probe_current_a: §1e-4",
        "loop.probe_current_a",
        "1e-4 is text to a YAML parser, expected 1.0e-4",
    ),
    (
        "exponent without sign",
        "nwell_doping_cm3: 2.0e+17",
        "nwell_doping_cm3: §2.0e17",
        "wells.nwell_doping_cm3",
        "2.0e17 is text to a YAML parser, expected 2.0e+17",
    ),
    (
        "number in quotes",
        "supply_v: 1.8",
        'supply_v: §"1.8"',
        "loop.supply_v",
        "1.8 is in quotes and therefore text, expected 1.8",
    ),
    (
        "number with a unit",
        "thickness_um: 300.0",
        "thickness_um: §300 um",
        "substrate.layers[0].thickness_um",
        "expected the number alone",
    ),
    (
        "decimal comma",
        "supply_v: 1.8",
        "supply_v: §1,8",
        "loop.supply_v",
        "expected 1.8 with a point",
    ),
    (
        "word for a number",
        "max_gain: 1.0",
        "max_gain: §one",
        "rules.loop-gain.max_gain",
        "got text `one`, expected a number",
    ),
    (
        "boolean for a number",
        "emitter_efficiency: 0.98",
        "emitter_efficiency: §true",
        "transistors.lateral_npn.emitter_efficiency",
        "got true, expected a number or a mapping with `typical`",
    ),
    (
        "list for a number",
        "supply_v: 1.8",
        "supply_v: §[1.8]",
        "loop.supply_v",
        "got a list, expected a number",
    ),
    (
        "octal",
        "max_ohm: 2000.0",
        "max_ohm: §0200",
        "rules.well-resistance.max_ohm",
        "0200 starts with 0 and is octal to YAML, expected 200",
    ),
    (
        "sixties",
        "pair_reach_um: 60.0",
        "pair_reach_um: §1:00",
        "loop.pair_reach_um",
        "`1:00` is not a plain decimal number",
    ),
    (
        "digits in groups",
        "max_ohm: 2000.0",
        "max_ohm: §2_000.0",
        "rules.well-resistance.max_ohm",
        "not a plain decimal number",
    ),
    (
        "switch word for true",
        'nwell: {gds: ["3/0"], required: true}',
        'nwell: {gds: ["3/0"], required: §on}',
        "layers.nwell.required",
        "got text `on`, expected true",
    ),
    (
        "number for text",
        "name: larch180",
        "name: §180",
        "name",
        'got the number 180, expected text; write it in quotes: "180"',
    ),
    ("name with capitals", "name: larch180", "name: §Larch180", "name", "small letters"),
    (
        "text for a list",
        'poly: {gds: ["15/0"]}',
        "poly: {gds: §15/0}",
        "layers.poly.gds",
        "got text `15/0`, expected a list: [15/0]",
    ),
    (
        "empty list",
        'poly: {gds: ["15/0"]}',
        "poly: {gds: §[]}",
        "layers.poly.gds",
        "expected at least one",
    ),
    (
        "pair of the wrong form",
        'gds: ["15/0"]',
        'gds: [§"15:0"]',
        "layers.poly.gds[0]",
        "expected layer/datatype such as 31/0",
    ),
    (
        "pair beyond two bytes",
        'gds: ["15/0"]',
        'gds: ["15/0", §"15/65536"]',
        "layers.poly.gds[1]",
        "expected 0 to 65535",
    ),
    (
        "pair used twice",
        'via1: {gds: ["22/0"]}',
        'via1: {gds: [§"21/0"]}',
        "layers.via1.gds[0]",
        "21/0 is already used by layer `metal1`",
    ),
    (
        "label layer of the wrong form",
        'layers: ["60/0"]',
        "layers: [§text]",
        "labels.layers[0]",
        "expected layer/datatype",
    ),
    (
        "out of range, bare",
        "nwell_doping_cm3: 2.0e+17",
        "nwell_doping_cm3: §2.0e+7",
        "wells.nwell_doping_cm3",
        "out of range, expected 1e+11 to 1e+21, got 2e+07",
    ),
    (
        "out of range, in a mapping",
        "{low: 750.0, typical: 900.0, high: 1050.0}",
        "{low: 750.0, typical: 900.0, high: §1.0e+9}",
        "wells.nwell_sheet_resistance_ohm_sq.high",
        "out of range, expected 0.1 to 1e+06, got 1e+09",
    ),
    (
        "share above one",
        "emitter_efficiency: 0.98",
        "emitter_efficiency: §98",
        "transistors.lateral_npn.emitter_efficiency",
        "out of range",
    ),
    (
        "negative limit",
        "max_um: 6.0",
        "max_um: §-6.0",
        "rules.tap-reach.max_um",
        "expected more than 0, got -6",
    ),
    (
        "far too large",
        "max_um: 6.0",
        "max_um: §6.0e+9",
        "rules.tap-reach.max_um",
        "expected at most 10000",
    ),
    ("too cold", "temperature_c: 125.0", "temperature_c: §-300", "temperature_c", "at least -55"),
    ("infinite", "supply_v: 1.8", "supply_v: §.inf", "loop.supply_v", "expected a finite number"),
    (
        "not a number",
        "nwell_doping_cm3: 2.0e+17",
        "nwell_doping_cm3: §.nan",
        "wells.nwell_doping_cm3",
        "expected a finite number",
    ),
    (
        "low above typical",
        "{low: 750.0, typical: 900.0, high: 1050.0}",
        "{low: §950.0, typical: 900.0, high: 1050.0}",
        "wells.nwell_sheet_resistance_ohm_sq.low",
        "expected low <= typical <= high, got 950, 900, 1050",
    ),
    (
        "high below typical",
        "{low: 750.0, typical: 900.0, high: 1050.0}",
        "{typical: 900.0, high: §105.0}",
        "wells.nwell_sheet_resistance_ohm_sq.high",
        "expected low <= typical <= high",
    ),
    (
        "assumption without a range",
        "nwell_doping_cm3: 2.0e+17",
        "nwell_doping_cm3: §{typical: 2.0e+17, assumption: true}",
        "wells.nwell_doping_cm3",
        "an assumption without its range",
    ),
    (
        "range without its middle",
        "  nwell_doping_cm3: 2.0e+17",
        "  §nwell_doping_cm3: {low: 2.0e+17}",
        "wells.nwell_doping_cm3.typical",
        "missing",
    ),
    (
        "wrong choice",
        "back_side: floating",
        "back_side: §grounded",
        "substrate.back_side",
        "got text `grounded`, expected `contacted` or `floating`",
    ),
    (
        "wrong severity",
        "untied-body: {severity: fail}",
        "untied-body: {severity: §error}",
        "rules.untied-body.severity",
        "expected `fail`, `watch` or `off`",
    ),
    ("wrong version", "format_version: 1", "format_version: §2", "format_version", "expected 1"),
    (
        "unknown rule",
        "  untied-body: {severity: fail}",
        "  §untied_body: {severity: fail}",
        "rules.untied_body",
        "unknown rule, expected `untied-body`",
    ),
    (
        "unknown role",
        "  injector: injector_marker",
        "  §injektor: injector_marker",
        "roles.injektor",
        "unknown role, expected `injector`",
    ),
    ("scalar for a block", "\nlabels:\n", "\nlabels: §none\nlabel:\n", "labels", "a mapping"),
    (
        "duplicate key",
        "  supply_v: 1.8\n",
        "  supply_v: 1.8\n  §supply_v: 3.3\n",
        "loop.supply_v",
        "key given twice, first in line",
    ),
    (
        "duplicate key in braces",
        "{severity: watch, max_ohm: 2000.0}",
        "{severity: watch, max_ohm: 2000.0, §max_ohm: 1.0}",
        "rules.well-resistance.max_ohm",
        "key given twice",
    ),
    (
        "no value",
        "supply_v: 1.8",
        "supply_v:§",
        "loop.supply_v",
        "no value, expected one or no such key",
    ),
    (
        "merge key",
        "untied-body: {severity: fail}",
        "untied-body: {§<<: {severity: fail}}",
        "rules.untied-body.<<",
        "merge keys are not supported",
    ),
    (
        "key that is a list",
        "untied-body: {severity: fail}",
        "untied-body: {§[a, b]: fail}",
        "rules.untied-body",
        "a key must be plain text",
    ),
    (
        "tag",
        "name: larch180",
        "name: §!!python/name:os.system larch180",
        "name",
        "tag `!!python/name:os.system` is not supported",
    ),
    (
        "undefined name, near one",
        "diffusion: active and not poly",
        "diffusion: active and not §polly",
        "derived.diffusion",
        "undefined name `polly`, expected `poly`",
    ),
    (
        "undefined name in quotes",
        "well_tap: active and nplus and nwell",
        "well_tap: 'active and nplus and §nwel'",
        "roles.well_tap",
        "undefined name `nwel`, expected `nwell`",
    ),
    (
        "undefined name in folded text",
        "well_tap: active and nplus and nwell",
        "well_tap: >\n    active and\n    nplus and\n      §swamp",
        "roles.well_tap",
        "undefined name `swamp`, expected a name from `layers` or `derived`",
    ),
    (
        "undefined name over two lines",
        "well_tap: active and nplus and nwell",
        "well_tap: active and nplus\n     and §swamp",
        "roles.well_tap",
        "undefined name `swamp`",
    ),
    (
        "undefined name behind an anchor",
        "well_tap: active and nplus and nwell",
        "well_tap: &tap active and §swamp",
        "roles.well_tap",
        "undefined name `swamp`",
    ),
    (
        "expression syntax",
        "pwell: not nwell ",
        "pwell: not nwell §nwell ",
        "roles.pwell",
        "expected `and` or `or` before `nwell`",
    ),
    (
        "expression that stops short",
        "contact: contact\n  buried",
        "contact: contact and§\n  buried",
        "roles.contact",
        "got the end",
    ),
    ("empty expression", "buried: deep_nwell", 'buried: "§"', "roles.buried", "got the end"),
    (
        "expression length out of range",
        "buried: deep_nwell",
        "buried: grow(deep_nwell, §5000)",
        "roles.buried",
        "at most 1000 um",
    ),
    (
        "cycle",
        "diffusion: active and not poly",
        "diffusion: §active and not channel\n  channel: poly and diffusion",
        "derived.diffusion",
        "derived from itself, expected no cycle: diffusion -> channel -> diffusion",
    ),
    (
        "derived from itself alone",
        "diffusion: active and not poly",
        "diffusion: §diffusion and not poly",
        "derived.diffusion",
        "diffusion -> diffusion",
    ),
    (
        "derived name that a layer has",
        "  diffusion: active and not poly",
        "  diffusion: active and not poly\n  §metal2: active",
        "derived.metal2",
        "already the name of a layer in line",
    ),
    (
        "layer with an operator's name",
        'via1: {gds: ["22/0"]}',
        'via1: {gds: ["22/0"]}\n  §grow: {gds: ["99/0"]}',
        "layers.grow",
        "`grow` is a word of expressions",
    ),
    (
        "layer name with capitals",
        'via1: {gds: ["22/0"]}',
        'via1: {gds: ["22/0"]}\n  §Via9: {gds: ["99/0"]}',
        "layers.Via9",
        "not a usable name",
    ),
    (
        "unclosed brace",
        "untied-body: {severity: fail}",
        "untied-body: {severity: fail",
        "",
        "not YAML",
    ),
    ("tabulator", "  supply_v: 1.8", "§\tsupply_v: 1.8", "", "not YAML"),
]


@pytest.fixture(scope="module")
def larch(repository: Path) -> str:
    return (repository / "techfiles" / "larch180.yaml").read_text()


@pytest.mark.parametrize(
    ("old", "new", "key", "message"), [case[1:] for case in PLANTED], ids=[c[0] for c in PLANTED]
)
def test_planted_fault(larch: str, old: str, new: str, key: str, message: str) -> None:
    text, line, column = plant(larch, old, new)
    problems = check_technology(text, "own.yaml")
    found = [p for p in problems if p.key == key and message in p.message]
    assert len(found) == 1, "\n".join(map(str, problems))
    if line:
        assert (found[0].line, found[0].column) == (line, column)
    if (old, new) not in FOLLOWED:
        assert len(problems) == 1, "\n".join(map(str, problems))


FOLLOWED = {
    ("\nlabels:\n", "\nlabels: §none\nlabel:\n"),
    ("diffusion: active and not poly", "diffusion: §diffusion and not poly"),
}
"""Faults that rightly bring a second problem with them."""


def test_a_right_file_has_no_problem(larch: str) -> None:
    technology, problems = validate(larch, "larch180.yaml")
    assert problems == []
    assert technology is not None
    assert technology.name == "larch180"


def test_all_faults_together_are_all_found(larch: str) -> None:
    text = larch
    faults = [
        ("supply_v: 1.8", "supply_v: 1e0"),
        ("back_side: floating", "back_side: up"),
        ("nwell_doping_cm3:", "nwell_doping_m3:"),
        ("not poly\n\nroles", "not polly\n\nroles"),
        ("max_gain: 1.0", "max_gain: 0"),
    ]
    for old, new in faults:
        text = plant(text, old, new)[0]
    problems = check_technology(text, "own.yaml")
    assert [p.key for p in problems] == [
        "derived.diffusion",
        "wells.nwell_doping_m3",
        "substrate.back_side",
        "loop.supply_v",
        "rules.loop-gain.max_gain",
    ]
    assert problems == sorted(problems)


def test_line_form() -> None:
    problem = Problem(file_name="own.yaml", line=3, column=7, key="loop.supply_v", message="odd")
    assert str(problem) == "own.yaml:3:7: loop.supply_v: odd"


@pytest.mark.parametrize(
    ("content", "line", "column", "message"),
    [
        ("", 1, 1, "the file is empty"),
        ("# only a comment\n", 1, 1, "the file is empty"),
        (b"", 1, 1, "the file is empty"),
        ("a: 1\n---\nb: 2\n", 2, 1, "not YAML"),
        ("- a\n- b\n", 1, 1, "got a list, expected a mapping with the keys format"),
        ("just words", 1, 1, "got text `just words`, expected a mapping"),
        ("name: \x07\n", 1, 7, "character 0x0007 is not allowed"),
        ('name: "\\U99999999"\n', 1, 1, "not YAML"),
        (b"name: a\ntext: \xff\xfe", 2, 7, "byte 0xff is not UTF-8"),
        ("name: é\n".encode("latin-1"), 1, 7, "byte 0xe9 is not UTF-8"),
        ("name: a\n".encode("utf-16"), 1, 1, "byte 0xff is not UTF-8"),
        ("a" * 250_001, 1, 1, "larger than 250000 bytes"),
        ("a:\n" + "- b\n" * 20_000, 9_999, 3, "more than 5000 keys and values"),
        ("[" * 2000, 1, 31, "nested too deep"),
        ("{a: " * 2000, 1, 1 + 4 * 30, "nested too deep"),
        ("name: !odd x\n", 1, 7, "tag `!odd` is not supported"),
        ("loop: &a\n  deeper: *a\n", 1, 7, "by an alias"),
    ],
)
def test_texts_that_are_no_technology(
    content: str | bytes, line: int, column: int, message: str
) -> None:
    problems = check_technology(content, "own.yaml")
    assert any((p.line, p.column) == (line, column) and message in p.message for p in problems), (
        "\n".join(map(str, problems))
    )


def test_aliases_are_followed(larch: str) -> None:
    text = larch.replace('"60/0"', '&pair "60/0"').replace('"DVSS*", "GND*"]', "*pair]")
    technology, problems = validate(text, "own.yaml")
    assert problems == []
    assert technology is not None
    assert technology.labels.ground_names == ("VSS*", "AVSS*", "60/0")


def test_many_aliases_are_capped() -> None:
    """Nine lists of nine aliases each stand for 9^9 values."""
    lines = ["a0: &a0 [x]"]
    lines += [f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 9)}]" for i in range(1, 10)]
    problems = check_technology("\n".join(lines), "own.yaml")
    assert sum("more than 5000 values" in p.message for p in problems) == 1


def test_severity_off_needs_no_quotes(larch: str) -> None:
    """YAML 1.1 reads a bare ``off`` as false, YAML 1.2 as text; here it is text."""
    technology, problems = validate(
        plant(larch, "untied-body: {severity: fail}", "untied-body: {severity: off}")[0], "own.yaml"
    )
    assert problems == []
    assert technology is not None
    assert technology.rules.untied_body.severity == "off"


def test_windows_line_ends_and_byte_order_mark_change_no_place(larch: str) -> None:
    text = plant(larch, "supply_v: 1.8", "supply_v: off")[0]
    expected = check_technology(text, "own.yaml")
    windows = ("\ufeff" + text.replace("\n", "\r\n")).encode()
    assert check_technology(windows, "own.yaml") == expected
    assert len(expected) == 1


def test_messages_stay_on_one_printable_line() -> None:
    problems = check_technology('"a\\nb\\e[31m\\uD800": 1\nname: "\\x07\\n"\n', "own.yaml")
    assert problems
    assert all(str(p).isprintable() for p in problems)
