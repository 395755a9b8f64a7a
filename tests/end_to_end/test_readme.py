"""What the README says of commands, files and rules is so."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from click.testing import CliRunner

from latchscan.block.check import check_block
from latchscan.cli import commands
from latchscan.rules import RULES
from latchscan.technology.check import check_technology


@pytest.fixture(scope="module")
def readme(repository: Path) -> str:
    """Text of the README."""
    return (repository / "README.md").read_text()


def test_links_lead_somewhere(readme: str, repository: Path) -> None:
    targets = re.findall(r"\]\(([^)#]+)\)", readme)
    assert targets
    for target in targets:
        assert (repository / target).exists(), target


def test_every_rule_is_in_the_table(readme: str) -> None:
    assert sorted(re.findall(r"^\| `([a-z-]+)` \|", readme, flags=re.MULTILINE)) == sorted(RULES)


def test_every_option_of_the_scan_is_told(readme: str) -> None:
    told = set(re.findall(r"(--[a-z-]+)", readme))
    options = {option for one in commands.commands["scan"].params for option in one.opts}
    assert {option for option in options if option.startswith("--")} <= told | {"--help"}


def test_the_block_file_that_is_shown_has_no_problem(readme: str) -> None:
    (shown,) = re.findall(r"^```yaml\n(format: latchscan-block.*?)^```", readme, re.S | re.M)
    assert check_block(shown, "block.yaml") == []


def test_the_conductors_that_are_shown_have_no_problem(readme: str, repository: Path) -> None:
    (shown,) = re.findall(r"^```yaml\n(conductors:.*?)^```", readme, re.S | re.M)
    shipped = (repository / "techfiles" / "larch180.yaml").read_text()
    whole = re.sub(r"^conductors:.*?(?=^[a-z])", lambda _: shown + "\n", shipped, flags=re.S | re.M)
    assert shown in whole
    assert check_technology(whole, "my_process.yaml") == []


def test_both_commands_are_those_that_are_tested(readme: str, repository: Path) -> None:
    sample = "latchscan scan samples/valve_driver.gds --tech techfiles/larch180.yaml --out out/"
    assert readme.count(sample) == 1
    assert "```sh\nbash tests/run\n```" in readme
    assert "exec bash tests/run" in (repository / ".ci" / "run").read_text()


def test_the_check_says_what_the_readme_shows(
    readme: str, repository: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (shown,) = re.findall(r"^my_process.yaml:.*$", readme, flags=re.MULTILINE)
    text = (repository / "techfiles" / "larch180.yaml").read_text()
    wrong = text.replace("nwell_sheet_resistance_ohm_sq", "nwell_sheet_resistence_ohm_sq", 1)
    (tmp_path / "my_process.yaml").write_text(wrong)
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(commands, ["tech", "check", "my_process.yaml"])
    assert shown in result.output.splitlines()
