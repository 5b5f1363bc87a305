"""The ``budget`` command; ``python -m budget`` is the same."""

from __future__ import annotations

import sys


def main() -> None:
    """Run the command line and leave with its exit status."""
    from budget.cli import run

    sys.exit(run(sys.argv[1:]))


if __name__ == "__main__":
    main()
