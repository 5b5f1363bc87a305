"""The ``budget`` command; ``python -m budget`` is the same."""

from __future__ import annotations

import os
import sys

# The matrices here are small: several threads on one of them wait for each other longer than they calculate.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


def main() -> None:
    """Run the command line and leave with its exit status."""
    from budget.cli import run

    sys.exit(run(sys.argv[1:]))


if __name__ == "__main__":
    main()
