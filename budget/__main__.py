"""The ``budget`` command; ``python -m budget`` is the same."""

from __future__ import annotations

import contextlib
import os
import sys

# The matrices here are small: several threads on one of them wait for each other longer than they calculate.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


def main() -> None:
    """Run the command line and leave with its exit status."""
    from budget.cli import run

    status = run(sys.argv[1:])
    if "budget.ui.app" in sys.modules:
        # The sheet has threads that may be busy for long. All is closed and written by now; the interpreter's own way
        # out could wait for ever for a lock that one of them holds, or die of a terminal that is gone.
        for stream in (sys.stdout, sys.stderr):
            with contextlib.suppress(OSError, ValueError):
                stream.flush()
        os._exit(status)
    sys.exit(status)


if __name__ == "__main__":
    main()
