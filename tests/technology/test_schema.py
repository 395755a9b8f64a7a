"""The JSON Schema: valid itself, and of one mind with the check.

Reference: the ``jsonschema`` library's implementation of draft 2020-12.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import jsonschema
import pytest
import yaml

from latchscan.technology.check import check_technology
from latchscan.technology.schema import technology_schema

SHIPPED = ("larch180", "open130")


class Yaml12(yaml.SafeLoader):
    """YAML as editors read it since version 1.2: `on` and `off` are text, not booleans."""


Yaml12.yaml_implicit_resolvers = {
    first: [(tag, form) for tag, form in forms if not (tag.endswith("bool") and first in "oOyYnN")]
    for first, forms in yaml.SafeLoader.yaml_implicit_resolvers.items()
}


def data_of(text: str) -> Any:
    return yaml.load(text, Loader=Yaml12)


def text_of(repository: Path, name: str) -> str:
    return (repository / "techfiles" / f"{name}.yaml").read_text()


def accepts(text: str) -> bool:
    schema = technology_schema()
    return bool(jsonschema.Draft202012Validator(schema).is_valid(data_of(text)))


def test_schema_is_one() -> None:
    schema = technology_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    json.dumps(schema)


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_files_are_valid(repository: Path, name: str) -> None:
    text = text_of(repository, name)
    jsonschema.Draft202012Validator(technology_schema()).validate(data_of(text))
    assert check_technology(text, name) == []


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("supply_v: 1.8", "supply_v: 1e0"),
        ("supply_v: 1.8", "supply: 1.8"),
        ("supply_v: 1.8", "supply_v: -1.0"),
        ("supply_v: 1.8", "supply_v:"),
        ("nwell_doping_cm3: 2.0e+17", "nwell_doping_cm3: 2.0e+7"),
        ("nwell_doping_cm3: 2.0e+17", "nwell_doping_cm3: {low: 1.0e+17}"),
        ("nwell_doping_cm3: 2.0e+17", "nwell_doping_cm3: {typical: 2.0e+17, hihg: 3.0e+17}"),
        ("nwell_doping_cm3: 2.0e+17", "nwell_doping_cm3: {typical: 2.0e+17, high: 3.0e+27}"),
        ("back_side: floating", "back_side: grounded"),
        ("name: larch180", "name: Larch"),
        ('gds: ["15/0"]', 'gds: ["15"]'),
        ('gds: ["15/0"]', "gds: []"),
        ("  buried: deep_nwell", "  buried: 3"),
        ("  untied-body: {", "  untied: {"),
        ("format_version: 1", "format_version: 2"),
        ("metal1, sheet_resistance_ohm_sq: 0.08", "metal1, sheet_resistance_ohm_sq: 8.0e+7"),
        ("metal1, sheet_resistance_ohm_sq: 0.08", "metal1, texts: [text]"),
        ("    metal1: {shape: metal1,", "    metal1: {"),
        ("kind: poly", "kind: polly"),
        ("joins: [metal1, metal2]", "joins: [metal1]"),
        ("on: metal4", "onto: metal4"),
        ("  pads: {shape: pad, on", "  pad: {shape: pad, on"),
        ("least_coverage: 0.5", "least_coverage: 50"),
        ("min_share: 0.5", "min_share: 50"),
        ("n_injector: [majority]", "n_injector: [double]"),
        ("ring-gap: {severity: fail, max_um: 0.0}", "ring-gap: {severity: fail, max_um: -1.0}"),
    ],
)
def test_schema_and_check_refuse_the_same(repository: Path, old: str, new: str) -> None:
    text = text_of(repository, "larch180")
    assert text.count(old) == 1
    wrong = text.replace(old, new)
    assert not accepts(wrong)
    assert check_technology(wrong, "own.yaml")


def test_a_quantity_is_a_number_or_a_mapping(repository: Path) -> None:
    text = text_of(repository, "larch180")
    for form in ("3.0e+17", "{typical: 3.0e+17}", "{low: 1.0e+17, typical: 2.0e+17, source: a}"):
        right = text.replace("nwell_doping_cm3: 2.0e+17", f"nwell_doping_cm3: {form}")
        assert accepts(right)
        assert check_technology(right, "own.yaml") == []


def _fields(part: Any, where: str = "") -> Iterator[tuple[str, dict[str, Any]]]:
    if isinstance(part, dict):
        for key, value in part.get("properties", {}).items():
            yield f"{where}/{key}", value
        for key, value in part.items():
            yield from _fields(value, f"{where}/{key}")
    elif isinstance(part, list):
        for index, item in enumerate(part):
            yield from _fields(item, f"{where}/{index}")


def test_editors_find_a_description_for_every_key() -> None:
    schema = technology_schema()
    fields = dict(_fields(schema))
    assert len(fields) > 60
    silent = [
        where
        for where, field in fields.items()
        if not (field.get("description") or "$ref" in field)
    ]
    assert silent == []
