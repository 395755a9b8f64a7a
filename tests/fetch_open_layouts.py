"""Fetch the open layouts that the tests scan: cells of an open 130 nm BiCMOS process.

They are the data files of the wheel ``ihp-gdsfactory`` 2.0.1 (Apache-2.0) from the Python
package index.  Only ``ihp/gds/*.gds`` is unpacked; no code of the wheel is installed or run.
"""

from __future__ import annotations

import hashlib
import subprocess
import sys
import tempfile
import zipfile
from pathlib import Path

WHEEL = "ihp-gdsfactory==2.0.1"
SHA256 = "5731d5e3cea186b8ad026b8057a2be31eec20e007d838bda9d9d6a31578d2d63"
TARGET = Path(__file__).parent / ".data" / "open130"


def fetch(target: Path) -> None:
    """Download the wheel, check its hash and unpack the layouts."""
    if (target / "sha256").is_file() and (target / "sha256").read_text() == SHA256:
        return
    with tempfile.TemporaryDirectory() as folder:
        command = [
            sys.executable,
            "-m",
            "pip",
            "download",
            "--quiet",
            "--no-deps",
            "--dest",
            folder,
        ]
        command += ["--python-version", "3.12", "--only-binary=:all:", WHEEL]
        subprocess.run(command, check=True)
        (wheel,) = Path(folder).glob("*.whl")
        found = hashlib.sha256(wheel.read_bytes()).hexdigest()
        if found != SHA256:
            raise SystemExit(f"{wheel.name}: expected sha256 {SHA256}, got {found}")
        target.mkdir(parents=True, exist_ok=True)
        with zipfile.ZipFile(wheel) as archive:
            for name in archive.namelist():
                if name.startswith("ihp/gds/") and name.endswith(".gds"):
                    (target / Path(name).name).write_bytes(archive.read(name))
    (target / "sha256").write_text(SHA256)


if __name__ == "__main__":
    fetch(TARGET)
