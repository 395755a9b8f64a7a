"""The built wheel carries the technologies and the sample and works away from the project.

Source of the expectation: the Python packaging standards (wheel, console entry point); the
scan's own numbers are checked elsewhere.
"""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest


def run(command: list[str], folder: Path, path: Path) -> subprocess.CompletedProcess[str]:
    """Run a command in `folder` with `path` before all other packages."""
    environment = {**os.environ, "PYTHONPATH": str(path)}
    return subprocess.run(
        command, cwd=folder, env=environment, capture_output=True, text=True, check=False
    )


@pytest.fixture(scope="module")
def installed(repository: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder into which the built wheel is unpacked as an installer would."""
    folder = tmp_path_factory.mktemp("wheel")
    command = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--no-build-isolation"]
    subprocess.run([*command, "--wheel-dir", str(folder), str(repository)], check=True)
    (wheel,) = folder.glob("*.whl")
    with zipfile.ZipFile(wheel) as archive:
        archive.extractall(folder / "site")
    return folder / "site"


def test_scan_by_shipped_name(installed: Path, tmp_path: Path) -> None:
    sample = installed / "latchscan" / "shipped" / "samples" / "valve_driver.gds"
    command = [sys.executable, "-m", "latchscan", "scan", str(sample), "--tech", "larch180"]
    window = ["--window", "421", "180", "475", "220"]
    done = run([*command, *window, "--out", "out", "--jobs", "1"], tmp_path, installed)
    assert done.returncode == 1, done.stderr
    assert "loop-gain" in done.stdout
    assert max(map(len, done.stdout.splitlines())) <= 80
    written = {path.name for path in (tmp_path / "out").iterdir()}
    assert written == {"scan.json", "emitters.csv", "heatmap.svg"}


def test_it_is_the_installed_package_that_runs(installed: Path, tmp_path: Path) -> None:
    code = "import latchscan; print(latchscan.__file__)"
    done = run([sys.executable, "-c", code], tmp_path, installed)
    assert done.stdout.startswith(str(installed))


def test_every_schema_and_technology_is_in_the_wheel(installed: Path, tmp_path: Path) -> None:
    for name in ("larch180", "open130"):
        command = [sys.executable, "-m", "latchscan", "tech", "check"]
        file = installed / "latchscan" / "shipped" / "techfiles" / f"{name}.yaml"
        done = run([*command, str(file)], tmp_path, installed)
        assert done.returncode == 0, done.stdout + done.stderr
    assert (installed / "latchscan" / "report" / "scan.schema.json").is_file()
