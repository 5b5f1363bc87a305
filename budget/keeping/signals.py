"""Signals that end the program: what was accepted is brought to the disk, then the program leaves, or is made to.

The handlers are plain ones, not those of the event loop: a stalled link to the terminal stops the loop, and its
handlers would never run. A thread that was started beforehand ends the process if it cannot leave in time. Nothing that
a handler does takes a lock that the interrupted code may hold.
"""

from __future__ import annotations

import contextlib
import os
import queue
import signal
import threading
import time
from collections.abc import Callable
from types import FrameType
from typing import Any

GRACE = 1.5  # seconds to leave in
ENDING = (signal.SIGHUP, signal.SIGTERM, signal.SIGINT)


class Signals:
    """Handlers for the signals that end a program, from ``install`` to ``restore``; both in the main thread.

    ``flush`` is called in the handler, with the time it may take; ``leave`` then, with the exit status. ``status`` is
    that of the signal that came, or of the loss of the terminal; 0 before.
    """

    def __init__(self, flush: Callable[[float], object], leave: Callable[[int], object]) -> None:
        self.status = 0
        self._flush = flush
        self._leave = leave
        self._before: dict[signal.Signals, Any] = {}
        self._late: queue.SimpleQueue[int] = queue.SimpleQueue()  # its put may be interrupted by a signal

    def install(self) -> None:
        """Handle the signals from now on, also those that were ignored: without its terminal the sheet is of no use."""
        threading.Thread(target=self._end_late, name="watchdog", daemon=True).start()
        for number in ENDING:
            self._before[number] = signal.signal(number, self._on_signal)

    def restore(self) -> None:
        """As it was before."""
        for number, handler in self._before.items():
            if handler is not None:
                signal.signal(number, handler)
        self._before.clear()

    def hurry(self, status: int) -> None:
        """The program is about to leave with this status, and must have left before long."""
        if not self.status:
            self.status = status
            self._late.put(status)

    def _on_signal(self, number: int, _: FrameType | None) -> None:
        self.hurry(128 + number)
        self._flush(GRACE * 2 / 3)
        with contextlib.suppress(RuntimeError):  # the event loop may be closed already
            self._leave(self.status)

    def _end_late(self) -> None:
        status = self._late.get()
        time.sleep(GRACE)
        os._exit(status)
