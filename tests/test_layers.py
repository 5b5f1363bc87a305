"""The layers, proved at run time: a fresh process imports or runs something, then tells which modules it has loaded."""

from __future__ import annotations

import json
import pkgutil
import subprocess
import sys
from functools import cache
from pathlib import Path

import pytest

import budget.engine

ROOT = Path(__file__).parent.parent
DEMO = str(ROOT / "projects" / "heron.toml")
SCREEN = {"textual", "rich"}
ENGINE = [f"budget.engine.{module.name}" for module in pkgutil.iter_modules(budget.engine.__path__)]

# What the interpreter had loaded before (a site hook, an editor's plug-in) is not the program's doing.
_PROBE = """\
import sys
before = set(sys.modules)
status = None
try:
    exec(compile(sys.argv[1], "probe", "exec"))
except SystemExit as leaving:
    status = leaving.code
import json
print("LOADED" + json.dumps([status, sorted(set(sys.modules) - before)]))
"""


@cache
def loaded_by(code: str) -> frozenset[str]:
    """Names of the modules that running ``code`` loads, in full; its exit status must be none, 0 or 1."""
    run = subprocess.run(
        [sys.executable, "-c", _PROBE, code], capture_output=True, text=True, cwd=ROOT, check=False, timeout=60
    )
    assert run.returncode == 0, run.stderr
    status, modules = json.loads(run.stdout.rpartition("LOADED")[2])
    assert status in (None, 0, 1), run.stderr
    return frozenset(modules)


def tops(modules: frozenset[str]) -> set[str]:
    return {name.partition(".")[0] for name in modules}


def outside(modules: frozenset[str]) -> set[str]:
    """Installed packages among the modules; what compiled numpy modules register for themselves is numpy's."""
    names = tops(modules) - set(sys.stdlib_module_names) - {"budget"}
    return {name for name in names if not name.startswith(("_cython", "cython_runtime"))}


def command(*arguments: str) -> str:
    return f"from budget.cli import run; sys.exit(run({list(arguments)!r}))"


def test_the_probe_sees_what_is_loaded() -> None:
    assert outside(loaded_by("import numpy")) == {"numpy"}
    assert {"textual", "rich"} <= outside(loaded_by("import textual.app"))


@pytest.mark.parametrize("module", ENGINE)
def test_the_engine_stands_on_numpy_alone(module: str) -> None:
    modules = loaded_by(f"import {module}")
    assert outside(modules) <= {"numpy"}
    assert "tomllib" not in modules
    own = {name for name in modules if name.partition(".")[0] == "budget"}
    assert all(name == "budget" or name.startswith("budget.engine") for name in own), own


@pytest.mark.parametrize(
    "arguments", [("--help",), ("check", "--help"), ("new", "--help"), ("--version",)], ids=" ".join
)
def test_help_loads_nothing_heavy(arguments: tuple[str, ...]) -> None:
    assert outside(loaded_by(command(*arguments))) == set()


def test_the_project_needs_no_engine_of_numbers_and_no_screen() -> None:
    code = "import budget.project.build, budget.project.edits, budget.project.starter, budget.project.store"
    assert outside(loaded_by(code)) <= {"tomli_w"}


def test_session_and_reports_need_no_screen() -> None:
    assert outside(loaded_by("import budget.session")) <= {"tomli_w"}
    assert outside(loaded_by("import budget.report.words, budget.report.change")) == set()
    assert outside(loaded_by("import budget.report.text, budget.report.tables")) <= {"numpy"}


def test_the_first_paint_waits_for_neither_numbers_nor_units() -> None:
    code = (
        "import budget.ui.app\n"
        "from budget.session import open_demo\n"
        "from budget.ui.desk import Desk\n"
        "from budget.ui.paint import frame\n"
        "assert len(frame(Desk(open_demo()), 80, 24)) == 24"
    )
    modules = loaded_by(code)
    assert {"textual", "rich"} <= tops(modules)
    assert not {"numpy", "pint"} & tops(modules)


@pytest.mark.parametrize("form", ["text", "json", "markdown", "csv"])
def test_check_loads_neither_screen_nor_units_library(form: str) -> None:
    modules = loaded_by(command("check", DEMO, "--format", form))
    assert outside(modules) <= {"numpy", "tomli_w"}
    assert "budget.engine.evaluate" in modules
    assert not any(name.startswith("budget.ui") for name in modules)


def test_only_one_module_of_the_screen_imports_textual() -> None:
    names = sorted(path.stem for path in (ROOT / "budget" / "ui").glob("*.py") if "textual" in _imports(path))
    assert names == ["app"]


def _imports(path: Path) -> set[str]:
    lines = (line.split() for line in path.read_text(encoding="utf-8").splitlines())
    return {words[1].partition(".")[0] for words in lines if len(words) > 1 and words[0] in ("import", "from")}
