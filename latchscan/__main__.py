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
    from latchscan.cli import run

    sys.exit(run())


if __name__ == "__main__":
    main()
