"""The workers of a dask scheduler as an executor, for a sweep that outgrows one machine; an optional extra."""

from __future__ import annotations

import contextlib
import gc
import threading
from collections.abc import Iterator
from concurrent.futures import Executor
from importlib import import_module
from typing import Any

from budget import __version__
from budget.project.problems import ProjectError, found, printable

CONNECT = 5.0  # s to wait for a scheduler to answer
_MUTE = 5.0  # s more for what takes the call but is no scheduler


@contextlib.contextmanager
def workers_of(address: str | None) -> Iterator[tuple[Executor | None, int | None]]:
    """The executor of a scheduler's workers, and how many calls they work on at once; (None, None) without an address.

    Raises ProjectError, a sentence, where there is no scheduler, or one whose workers do not have this program.
    """
    if address is None:
        yield None, None
        return
    client = _client(address)
    try:
        threads = client.nthreads()
        if not threads:
            raise ProjectError(f"the scheduler at {found(address)} has no workers; one or more were expected.")
        _compare(client, address)
        yield client.get_executor(), sum(threads.values())
    finally:
        with contextlib.suppress(Exception):  # the answers are there; a scheduler that has gone since does no harm
            client.close()


def _client(address: str) -> Any:
    """A client of the scheduler. What answers there may be anything, and may fail in any way."""
    try:
        distributed = import_module("distributed")
    except ImportError:
        raise ProjectError("a scheduler needs the package distributed; the extra budget[dask] brings it.") from None
    came: list[Any] = []

    def connect() -> None:
        try:
            came.append(distributed.Client(address, timeout=CONNECT, set_as_default=False))
        except Exception as error:
            came.append(printable(str(error), 200).rstrip("."))
        gc.collect()  # a client that failed takes its leave with a traceback if it is left to the end of the program

    thread = threading.Thread(target=connect, name="scheduler", daemon=True)
    thread.start()
    thread.join(CONNECT + _MUTE)
    if not came or isinstance(came[0], str):
        why = came[0] if came else "something takes the call there and does not answer"
        raise ProjectError(f"no scheduler was found at {found(address)}, such as tcp://host:8786 was expected: {why}.")
    return came[0]


def version() -> str:
    """What a worker runs."""
    return __version__


def _compare(client: Any, address: str) -> None:
    """Raise ProjectError unless all workers have this program, in this version."""
    try:
        versions = sorted(set(client.run(version).values()))
    except Exception as error:
        raise ProjectError(
            f"the workers of {found(address)} cannot run this program; budget {__version__} has to be installed where "
            f"they are: {printable(str(error), 200).rstrip('.')}."
        ) from None
    if versions != [__version__]:
        there = printable(", ".join(versions), 80)
        raise ProjectError(f"the workers of {found(address)} have budget {there}; {__version__} was expected, as here.")
