"""For all tests: what the program remembers of its user goes into a folder of the test run, not the user's own."""

from __future__ import annotations

import os
from collections.abc import Iterator
from pathlib import Path

import pytest


@pytest.fixture(scope="session", autouse=True)
def state_of_the_tests(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """The state folder of the run; programs that a test starts should be given it in ``XDG_STATE_HOME``."""
    folder = tmp_path_factory.mktemp("state")
    before = os.environ.get("XDG_STATE_HOME")
    os.environ["XDG_STATE_HOME"] = str(folder)
    yield folder
    if before is None:
        del os.environ["XDG_STATE_HOME"]
    else:
        os.environ["XDG_STATE_HOME"] = before
