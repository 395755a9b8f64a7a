"""The check of block files: every slip of the pen is one line that says where and what.

Source of the expectations: common practice for messages (place, what is wrong, what was
expected), no published source.  The columns are counted by hand.
"""

from __future__ import annotations

import time

import pytest

from latchscan.block.check import check_block, validate_block
from latchscan.block.model import Block, BlockPin, Supply

GOOD = """\
format: latchscan-block
format_version: 1
top: valve_driver
temperature_c: 125.0
supplies:
  VDD: {low_v: 1.62, typical_v: 1.8, high_v: 1.98, test_v: 2.97}
  VDDIO: {low_v: 2.97, typical_v: 3.3, high_v: 3.63}
grounds: [VSS, VSSIO]
pins:
  OUT1: {kind: signal, supply: VDDIO, test_current_a: 0.2}
  VDD: {kind: supply}
  VSS: {kind: ground}
  n_bias: {kind: internal}
  SPARE: {kind: not_bonded}
joined: [[VSS, VSSIO]]
leave_out:
  - {box_um: [0, 0, 10, 10.5], reason: "seal ring"}
internal_injectors: true
"""


def problems(text: str) -> list[str]:
    return [str(problem) for problem in check_block(text, "own.yaml")]


def changed(old: str, new: str) -> str:
    assert GOOD.count(old) == 1, f"{old!r} must stand once in the good file"
    return GOOD.replace(old, new)


def test_the_good_file_is_read_as_it_is_meant() -> None:
    _, block, found = validate_block(GOOD, "own.yaml")
    assert found == []
    assert block is not None
    assert block.supplies["VDD"] == Supply(low_v=1.62, typical_v=1.8, high_v=1.98, test_v=2.97)
    assert block.pins["OUT1"] == BlockPin(kind="signal", supply="VDDIO", test_current_a=0.2)
    assert block.grounds == ("VSS", "VSSIO")
    assert block.joined == (("VSS", "VSSIO"),)
    assert block.leave_out[0].box_um == (0.0, 0.0, 10.0, 10.5)
    assert (block.top, block.temperature_c, block.internal_injectors) == ("valve_driver", 125, True)


def test_what_is_not_given_has_the_usual_values() -> None:
    """JESD78: over-voltage test at 1.5 x the highest supply, 100 mA into pins; from memory."""
    _, block, found = validate_block("format: latchscan-block\nformat_version: 1\n", "own.yaml")
    assert found == []
    assert block is not None
    assert Block().model_dump().items() <= block.model_dump().items()
    assert BlockPin(kind="signal").test_current_a == 0.1
    assert Supply(low_v=3, typical_v=3.3, high_v=3.6).test_level_v == pytest.approx(5.4)
    assert Supply(low_v=3, typical_v=3.3, high_v=3.6, test_v=4).test_level_v == 4


ONE_SLIP = {
    "low above typical": (
        "low_v: 1.62, typical_v: 1.8",
        "low_v: 1.82, typical_v: 1.8",
        "6:33: supplies.VDD.typical_v: voltages the wrong way round, expected low_v <= typical_v"
        " <= high_v, got low_v 1.82 and typical_v 1.8",
    ),
    "low and high the wrong way round": (
        "low_v: 2.97, typical_v: 3.3, high_v: 3.63",
        "low_v: 3.63, typical_v: 3.3, high_v: 2.97",
        "7:35: supplies.VDDIO.typical_v: voltages the wrong way round, expected low_v <="
        " typical_v <= high_v, got low_v 3.63 and typical_v 3.3",
    ),
    "typical above high": (
        "high_v: 3.63",
        "high_v: 3.2",
        "7:48: supplies.VDDIO.high_v: voltages the wrong way round, expected low_v <= typical_v"
        " <= high_v, got typical_v 3.3 and high_v 3.2",
    ),
    "test level within the range": (
        "test_v: 2.97",
        "test_v: 1.98",
        "6:60: supplies.VDD.test_v: test level not above the supply's range, expected more than"
        " high_v 1.98, got 1.98",
    ),
    "negative voltage": (
        "low_v: 2.97",
        "low_v: -1",
        "7:18: supplies.VDDIO.low_v: out of range, expected at least 0, got -1",
    ),
    "millivolts": (
        "test_v: 2.97",
        "test_v: 2970",
        "6:60: supplies.VDD.test_v: out of range, expected at most 1000, got 2970",
    ),
    "not a number": (
        "test_v: 2.97",
        "test_v: .nan",
        "6:60: supplies.VDD.test_v: got the number nan, expected a finite number",
    ),
    "number with its unit": (
        "test_v: 2.97",
        "test_v: 2.97 V",
        "6:60: supplies.VDD.test_v: got text `2.97 V`, expected the number alone; its unit is the"
        " key's",
    ),
    "missing voltage": (
        "typical_v: 3.3, ",
        "",
        "7:3: supplies.VDDIO.typical_v: missing, expected usual voltage [V]",
    ),
    "wrong unit": (
        "low_v: 1.62",
        "low_mv: 1620",
        "6:9: supplies.VDD.low_mv: wrong unit `mv` in the key, expected `low_v` with the number"
        " in V",
    ),
    "misspelt section": (
        "grounds: [VSS, VSSIO]\npins:",
        "grounds: [VSS, VSSIO]\npin:",
        "9:1: pin: unknown key, expected `pins`",
    ),
    "a supply that is a bare number": (
        "VDDIO: {low_v: 2.97, typical_v: 3.3, high_v: 3.63}",
        "VDDIO: 3.3",
        "7:10: supplies.VDDIO: got the number 3.3, expected a mapping with the keys low_v,"
        " typical_v, high_v, test_v",
    ),
    "unknown supply of a pin, one near": (
        "supply: VDDIO",
        "supply: VDDI0",
        "10:32: pins.OUT1.supply: unknown supply `VDDI0`, expected `VDDIO`",
    ),
    "unknown supply of a pin, none near": (
        "supply: VDDIO",
        "supply: core",
        "10:32: pins.OUT1.supply: unknown supply `core`, expected a name from `supplies`",
    ),
    "unknown kind": (
        "{kind: signal,",
        "{kind: output,",
        "10:16: pins.OUT1.kind: got text `output`, expected `signal`, `supply`, `ground`,"
        " `internal` or `not_bonded`",
    ),
    "no kind": (
        "{kind: signal, ",
        "{",
        "10:3: pins.OUT1.kind: missing, expected what the pin is: signal, supply, ground, internal"
        " or not_bonded",
    ),
    "no test current": (
        "test_current_a: 0.2",
        "test_current_a: 0",
        "10:55: pins.OUT1.test_current_a: out of range, expected more than 0, got 0",
    ),
    "milliamperes": (
        "test_current_a: 0.2",
        "test_current_a: 200",
        "10:55: pins.OUT1.test_current_a: out of range, expected at most 10, got 200",
    ),
    "pin of kind supply that is none": (
        "n_bias: {kind: internal}",
        "n_bias: {kind: supply}",
        "13:18: pins.n_bias.kind: unknown supply `n_bias`: `supplies` does not list it, expected"
        " its voltages there",
    ),
    "pin of kind ground that is none": (
        "n_bias: {kind: internal}",
        "n_bias: {kind: ground}",
        "13:18: pins.n_bias.kind: unknown ground `n_bias`: `grounds` does not list it, expected it"
        " there",
    ),
    "a supply that is a signal": (
        "VDD: {kind: supply}",
        "VDD: {kind: signal}",
        "11:15: pins.VDD.kind: signal, but `VDD` is a supply under `supplies`, expected one kind",
    ),
    "a ground that is a supply": (
        "VSS: {kind: ground}",
        "VSS: {kind: supply}",
        "12:15: pins.VSS.kind: supply, but `VSS` is a ground under `grounds`, expected one kind",
    ),
    "both supply and ground": (
        "grounds: [VSS, VSSIO]",
        "grounds: [VSS, VSSIO, VDD]",
        "8:23: grounds[2]: `VDD` is a supply in line 6, expected it in one place",
    ),
    "a ground twice": (
        "grounds: [VSS, VSSIO]",
        "grounds: [VSS, VSSIO, VSS]",
        "8:23: grounds[2]: `VSS` given twice, first in line 8",
    ),
    "no name joined": (
        "[[VSS, VSSIO]]",
        "[[]]",
        "15:10: joined[0]: got no names, expected those that are one net outside",
    ),
    "names without a group": (
        "[[VSS, VSSIO]]",
        "[VSS]",
        "15:10: joined[0]: got text `VSS`, expected a list: [VSS]",
    ),
    "unknown name joined": (
        "[[VSS, VSSIO]]",
        "[[VSS, VSSI0]]",
        "15:16: joined[0][1]: unknown name `VSSI0`, expected `VSSIO`",
    ),
    "a name in two groups": (
        "[[VSS, VSSIO]]",
        "[[VSS, VSSIO], [OUT1, SPARE, OUT1]]",
        "15:38: joined[1][2]: `OUT1` is already joined in line 15, expected it once",
    ),
    "supply joined with ground": (
        "[[VSS, VSSIO]]",
        "[[VSS, VDD]]",
        "15:16: joined[0][1]: joins `VDD` with `VSS`, a supply with a ground, expected names of"
        " one kind",
    ),
    "supplies of different voltages joined": (
        "[[VSS, VSSIO]]",
        "[[VDD, VDDIO]]",
        "15:16: joined[0][1]: joins `VDDIO` with `VDD`, which have different voltages, expected"
        " the same",
    ),
    "box the wrong way round": (
        "[0, 0, 10, 10.5]",
        "[10, 0, 0, 10.5]",
        "17:14: leave_out[0].box_um: corners the wrong way round, expected x0 < x1 and y0 < y1,"
        " got 10, 0, 0, 10.5",
    ),
    "box of no height": (
        "[0, 0, 10, 10.5]",
        "[0, 3, 10, 3]",
        "17:14: leave_out[0].box_um: corners the wrong way round, expected x0 < x1 and y0 < y1,"
        " got 0, 3, 10, 3",
    ),
    "box of three numbers": (
        "[0, 0, 10, 10.5]",
        "[0, 0, 10]",
        "17:14: leave_out[0].box_um: got 3 numbers, expected four: [x0, y0, x1, y1]",
    ),
    "box without end": (
        "[0, 0, 10, 10.5]",
        "[0, 0, .inf, 10.5]",
        "17:21: leave_out[0].box_um[2]: got the number inf, expected a finite number",
    ),
    "no reason": (
        'reason: "seal ring"',
        'reason: " "',
        "17:40: leave_out[0].reason: empty, expected some text",
    ),
    "empty name": (
        "SPARE:",
        '"":',
        "14:3: pins.: empty, expected a name as the layout writes it",
    ),
    "name with white space": (
        "SPARE:",
        '"SPARE 1":',
        "14:3: pins.SPARE 1: `SPARE 1` has white space in it, expected a name without any",
    ),
    "ground with white space": (
        "grounds: [VSS, VSSIO]",
        "grounds: [VSS, VSSIO, V SS]",
        "8:23: grounds[2]: `V SS` has white space in it, expected a name without any",
    ),
    "a name that YAML takes for a number": (
        "grounds: [VSS, VSSIO]",
        "grounds: [VSS, VSSIO, 0]",
        '8:23: grounds[2]: got the number 0, expected text; write it in quotes: "0"',
    ),
    "a name twice": (
        "SPARE:",
        "OUT1:",
        "14:3: pins.OUT1: key given twice, first in line 10",
    ),
    "empty top": ("top: valve_driver", 'top: ""', "3:6: top: empty, expected some text"),
    "too hot": (
        "temperature_c: 125.0",
        "temperature_c: 398",
        "4:16: temperature_c: out of range, expected at most 200, got 398",
    ),
    "a switch that is text": (
        "internal_injectors: true",
        "internal_injectors: yes",
        "18:21: internal_injectors: got text `yes`, expected true",
    ),
    "another file": (
        "format: latchscan-block",
        "format: latchscan-technology",
        "1:9: format: got text `latchscan-technology`, expected `latchscan-block`",
    ),
    "a later version": (
        "format_version: 1",
        "format_version: 2",
        "2:17: format_version: got the number 2, expected 1",
    ),
    "no version": (
        "format_version: 1\n",
        "",
        "1:1: format_version: missing, expected 1, the version of the file's own format",
    ),
}


@pytest.mark.parametrize("slip", ONE_SLIP)
def test_one_slip_is_one_line(slip: str) -> None:
    old, new, line = ONE_SLIP[slip]
    assert problems(changed(old, new)) == [f"own.yaml:{line}"]


@pytest.mark.parametrize(
    ("text", "line"),
    [
        ("", "1:1: the file is empty, expected a block"),
        ("x" * 1_000_001, "1:1: larger than 1000000 bytes, expected a block file"),
        ("[" * 40, "1:31: nested too deep, expected at most 30 levels"),
        (
            "- a\n",
            "1:1: got a list, expected a mapping with the keys top, temperature_c, supplies,",
        ),
        ("a: [1, 2\nb: 3\n", "2:2: not YAML: "),
        ("a: \x01", "1:4: character 0x0001 is not allowed in YAML"),
    ],
)
def test_what_is_no_block_at_all(text: str, line: str) -> None:
    (found,) = problems(text)
    assert found.startswith(f"own.yaml:{line}")


def test_bytes_that_are_no_text() -> None:
    (found,) = check_block(b"top: \xff", "own.yaml")
    assert str(found) == "own.yaml:1:6: byte 0xff is not UTF-8 text, expected a UTF-8 file"


def test_a_file_of_aliases_is_refused_at_once() -> None:
    nested = "a0: &a0 [x, x, x, x, x, x, x, x, x]\n"
    nested += "".join(f"a{i}: &a{i} [{', '.join([f'*a{i - 1}'] * 9)}]\n" for i in range(1, 8))
    assert any("more than 20000 values, expected a block file" in line for line in problems(nested))


def test_all_problems_are_told_at_once_in_the_files_order() -> None:
    text = changed("high_v: 3.63", "high_v: 3.2").replace("supply: VDDIO", "supply: VDD10")
    text = text.replace("[VSS, VSSIO]]", "[VSS, VDD]]").replace("true", "maybe")
    assert [line.split(": ")[1] for line in problems(text)] == [
        "supplies.VDDIO.high_v",
        "pins.OUT1.supply",
        "joined[0][1]",
        "internal_injectors",
    ]


def test_a_supply_that_is_internal_or_not_bonded_is_no_contradiction() -> None:
    assert problems(changed("VDD: {kind: supply}", "VDD: {kind: internal}")) == []
    assert problems(changed("VSS: {kind: ground}", "VSS: {kind: not_bonded}")) == []


def test_supplies_of_equal_voltages_may_be_joined() -> None:
    """The test level that is not given counts as 1.5 x the highest voltage."""
    old = "{low_v: 2.97, typical_v: 3.3, high_v: 3.63}"
    text = changed(old, "{low_v: 1.62, typical_v: 1.8, high_v: 1.98}")
    text = text.replace("[[VSS, VSSIO]]", "[[VSS, VSSIO], [VDD, VDDIO]]")
    assert problems(text) == []
    assert len(problems(text.replace("test_v: 2.97", "test_v: 2.5"))) == 1


def test_words_that_yaml_reads_otherwise_are_names() -> None:
    """Keys and words such as `no` are names as they stand (YAML 1.2, core schema)."""
    text = changed("SPARE:", "no: {kind: signal}\n  1e3: {kind: signal}\n  010:")
    _, block, found = validate_block(text, "own.yaml")
    assert found == []
    assert block is not None
    assert {"no", "1e3", "010"} <= set(block.pins)


def test_thousands_of_wrong_names_are_told_in_seconds() -> None:
    """Measured at 4 s, almost all of it the YAML reader; comparing all with all takes minutes."""
    supplies = "".join(f"  VDD_{i}: {{low_v: 1, typical_v: 2, high_v: 3}}\n" for i in range(1500))
    pins = "".join(f"  P_{i}: {{kind: signal, supply: VDDX_{i}}}\n" for i in range(3000))
    text = f"format: latchscan-block\nformat_version: 1\nsupplies:\n{supplies}pins:\n{pins}"
    started = time.process_time()
    assert len(problems(text)) == 3000
    assert time.process_time() - started < 20.0
