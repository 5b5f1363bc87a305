"""Hostile inputs, a few hundred of them: hypothesis draws the choices of the mutators, so that a failure gets small.

A hundred thousand are a matter of ``python -m tests.fuzz.run``, which uses the same targets and mutators.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from random import Random

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.fuzz import mutate, run
from tests.fuzz.targets import TARGETS, said
from tests.fuzz.watch import ROOT

# How many of each; a view or a whole calculation costs a hundred times as much as a cell.
COUNTS = {
    "file text": 120,
    "file bytes": 80,
    "shelf file": 50,
    "trials file": 30,
    "cell": 250,
    "quantity": 250,
    "path": 250,
    "saving": 80,
    "command line": 60,
    "views": 5,
    "keys": 25,
    "everything": 12,
}


@pytest.mark.parametrize("name", TARGETS)
def test_hostile_inputs_are_answered(name: str) -> None:
    target = TARGETS[name]

    @settings(max_examples=COUNTS[name], deadline=None, suppress_health_check=list(HealthCheck))
    @given(st.sampled_from(target.seeds), st.randoms(use_true_random=False))
    def answered(seed: bytes, rng: Random) -> None:
        target.run(target.mutate(rng, seed))

    answered()


@pytest.mark.parametrize("name", TARGETS)
def test_good_inputs_are_good(name: str) -> None:
    """The seeds themselves, so that a target that refuses everything is seen."""
    for seed in TARGETS[name].seeds:
        TARGETS[name].run(seed)


@settings(max_examples=200, deadline=None)
@given(st.text())
def test_any_text_is_a_quantity_or_a_sentence(typed: str) -> None:
    TARGETS["quantity"].run(typed.encode("utf-8", "replace"))


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=300))
def test_any_bytes_are_a_project_or_a_sentence(data: bytes) -> None:
    TARGETS["file bytes"].run(data)


def test_every_target_is_named_where_the_long_run_chooses() -> None:
    assert tuple(TARGETS) == run.NAMES == tuple(COUNTS)


def test_what_is_made_gets_past_the_first_check() -> None:
    """Of the files made, a good part can be read, and calculated in part; else all of this would test a parser."""
    from budget.project import store
    from budget.project.build import build
    from budget.project.problems import ProjectError

    rng = Random(1)
    read = calculated = 0
    for _ in range(150):
        try:
            loaded = store.parse(mutate.project(rng), None, "x.toml")
        except ProjectError:
            continue
        read += 1
        calculated += build(loaded.document, loaded.shelves).project is not None
    assert read > 75
    assert calculated > 50


@pytest.mark.parametrize("text", ["a\x1bb", "a\x9bb", "a\u202eb", "a\u200bb", "a\tb", "a\u2028b", "a\ue000b"])
def test_what_is_said_is_looked_at(text: str) -> None:
    with pytest.raises(AssertionError):
        said(text)


def test_the_long_run_finds_and_tells(tmp_path: Path) -> None:
    """A short one without atheris: it counts, times and keeps; a file that offends can be tried again."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    command = [sys.executable, "-m", "tests.fuzz.run", "--engine", "random", "--target", "quantity", "--count", "50"]
    done = subprocess.run(
        [*command, "--out", str(tmp_path)], capture_output=True, text=True, env=environment, timeout=120, check=False
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "none" in done.stdout.splitlines()[-1]
    assert json.loads((tmp_path / "quantity.json").read_text())["runs"] == 50
    lap = run.Lap("quantity", tmp_path, 10.0)

    def offend(data: bytes) -> None:
        raise ZeroDivisionError(str(data))

    lap.target = mutate_target(offend)
    lap.once(b"1 V")
    lap.once(b"2 V")
    (what,) = lap.kept
    assert "ZeroDivisionError" in what
    assert Path(lap.kept[what]).read_bytes() == b"1 V"
    assert "ZeroDivisionError" in Path(lap.kept[what] + ".txt").read_text()


def mutate_target(offend: object) -> object:
    from dataclasses import replace

    return replace(TARGETS["quantity"], run=offend)  # type: ignore[arg-type]


def test_an_input_that_hangs_is_interrupted(tmp_path: Path) -> None:
    lap = run.Lap("quantity", tmp_path, 0.05)

    def hang(data: bytes) -> None:
        while True:
            try:
                sum(range(1000))
            except Exception:
                continue

    lap.target = mutate_target(hang)  # type: ignore[assignment]
    lap.once(b"1 V")
    assert any("HangError" in what for what in lap.kept)
