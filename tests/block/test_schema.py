"""The JSON Schema of block files: valid itself, and of one mind with the check.

Reference: the ``jsonschema`` library's implementation of draft 2020-12.
"""

from __future__ import annotations

import json

import jsonschema
import pytest

from latchscan.block.check import check_block
from latchscan.block.schema import block_schema

GOOD = {
    "format": "latchscan-block",
    "format_version": 1,
    "top": "chip",
    "supplies": {"VDD": {"low_v": 1.6, "typical_v": 1.8, "high_v": 2.0}},
    "grounds": ["VSS"],
    "pins": {"A": {"kind": "signal", "supply": "VDD"}},
    "joined": [["VSS", "A"]],
    "leave_out": [{"box_um": [0, 0, 1, 1], "reason": "seal ring"}],
}


def test_schema_is_one() -> None:
    schema = block_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    assert schema["title"] == "latchscan block"
    json.dumps(schema)


@pytest.mark.parametrize(
    ("change", "valid"),
    [
        ({}, True),
        ({"top": None}, False),
        ({"format": "latchscan-technology"}, False),
        ({"supplies": {"VDD": {"low_v": 1.6, "typical_v": 1.8}}}, False),
        ({"supplies": {"VDD": {"low_v": -1, "typical_v": 1.8, "high_v": 2.0}}}, False),
        ({"pins": {"A": {"kind": "output"}}}, False),
        ({"pins": {"A": {"kind": "signal", "test_current_a": 11}}}, False),
        ({"leave_out": [{"box_um": [0, 0, 1], "reason": "x"}]}, False),
        ({"leave_out": [{"box_um": [0, 0, 1, 1]}]}, False),
        ({"colour": "red"}, False),
    ],
)
def test_schema_and_check_agree(change: dict[str, object], valid: bool) -> None:
    data = GOOD | change
    schema = jsonschema.Draft202012Validator(block_schema())
    assert schema.is_valid(data) == valid
    assert (check_block(json.dumps(data), "own.yaml") == []) == valid
