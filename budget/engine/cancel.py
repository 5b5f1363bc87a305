"""How a long calculation is told to stop: it asks now and then, and ends with an error that nobody has to show."""

from __future__ import annotations


class CancelledError(Exception):
    """The caller asked to stop; there is no result."""
