"""The house plan of DEVELOPERS.md, held by reading the source.

Source of the limits: this project's own plan; nothing here is a physical check.
"""

from __future__ import annotations

import ast
from pathlib import Path

import pytest
from valve_driver import draw_block

from latchscan.rules import RULES

PACKAGE = Path(__file__).parent.parent / "latchscan"
MODULES = sorted(PACKAGE.rglob("*.py"))

RANK = {
    "errors": 0,
    "constants": 0,
    "caveats": 0,
    "tasks": 0.5,
    "technology": 1,
    "block": 1.5,
    "layout": 2,
    "fields": 2,
    "parasitics": 3,
    "pnpn": 4,
    "rules": 5,
    "block_fit": 6,
    "draft": 6,
    "scan": 6,
    "report": 7,
    "cli_terminal": 7.3,
    "cli_block": 7.6,
    "cli": 8,
    "__main__": 9,
}
"""A room may import rooms of a lower rank, never one of its own rank or above."""

DOORS = {
    "gdstk": {"layout"},
    "rtree": {"layout"},
    "yaml": {"technology"},
    "pydantic": {"technology", "block"},
    "scipy": {"fields", "pnpn", "layout", "parasitics"},
    "shapely": {"layout", "parasitics", "pnpn", "rules", "report"},
    "click": {"cli", "cli_block", "cli_terminal", "__main__"},
    "tqdm": {"cli_terminal"},
}
"""The only rooms that may import a third party."""

MOST_LINES_FILE = 500
MOST_LINES_FUNCTION = 60


def room(path: Path) -> str:
    """Top-level room of a module of the package."""
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def imports(path: Path) -> set[str]:
    """Full names of all modules that a module imports, wherever the statement stands."""
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            found.add(str(node.module))
            found.update(f"{node.module}.{alias.name}" for alias in node.names)
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_imports_go_down_only(path: Path) -> None:
    here = room(path)
    for name in imports(path):
        parts = name.split(".")
        if parts[0] != "latchscan" or len(parts) < 2 or parts[1] not in RANK or here == "__init__":
            continue
        target = parts[1]
        assert target == here or RANK[target] < RANK[here], f"{here} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_third_parties_come_in_by_their_door(path: Path) -> None:
    for name in imports(path):
        allowed = DOORS.get(name.split(".", maxsplit=1)[0])
        assert allowed is None or room(path) in allowed, f"{room(path)} imports {name}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_files_and_functions_stay_small(path: Path) -> None:
    text = path.read_text()
    assert len(text.splitlines()) <= MOST_LINES_FILE
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef):
            assert node.end_lineno is not None
            code = node.body[1:] if ast.get_docstring(node) else node.body
            first = code[0].lineno if code else node.lineno
            lines = node.end_lineno - first + 1
            assert lines <= MOST_LINES_FUNCTION, f"{node.name}: {lines} lines"


def test_every_rule_has_a_page_a_test_and_a_planted_fault() -> None:
    _, faults, _ = draw_block()
    planted = {fault.rule for fault in faults}
    tests = "".join(path.read_text() for path in (PACKAGE.parent / "tests" / "rules").glob("*.py"))
    for rule in RULES:
        module = PACKAGE / "rules" / f"{rule.replace('-', '_')}.py"
        page = ast.get_docstring(ast.parse(module.read_text()))
        assert page is not None
        assert len(page) > 300, f"{rule}: the page says too little"
        assert rule in planted, f"{rule}: no planted fault in the sample"
        assert rule.replace("-", "_") in tests or rule in tests, f"{rule}: no test"
