"""Entry of ``python -m latchscan`` and of the installed command."""

from __future__ import annotations

import os
import sys


def main() -> None:
    """Run the command line and leave with its exit status."""
    # the work is split over processes; threads below it would only fight for the same cores
    # and could make sums depend on their number
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    _open_standard_streams()
    from latchscan.cli import run

    sys.exit(run())


def _open_standard_streams() -> None:
    """Lead a closed standard stream nowhere, before a file takes its number."""
    for number, name in enumerate(("stdin", "stdout", "stderr")):
        if getattr(sys, name) is None:
            handle = os.open(os.devnull, os.O_RDWR)
            if handle != number:
                os.dup2(handle, number)
            setattr(sys, name, os.fdopen(number, "r" if name == "stdin" else "w", encoding="utf-8"))


if __name__ == "__main__":
    main()
