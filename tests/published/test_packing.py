"""Bin packing, machines and generalised assignment, typed in as project files, against published or proven optima.

A bus of 10 V without resistance makes every current a tenth of the power, so that sizes are currents in A and the
capacity of a bin is rated_current x filter_load. Then the tasks of the literature are those of the program:

- bin packing (fewest bins) is ``--goal fewest``;
- identical machines, smallest makespan (P||Cmax) is ``--goal even`` with equal filters, uniform machines (Q||Cmax) with
  filters of different rating: the headroom is 1 - makespan / capacity;
- generalised assignment (least cost within capacities) is the last word between allocations that are equally good by
  the goal: a move costs 1, staying nothing. What a converter draws does not depend on the filter here, so that the
  instances of the OR-Library (gap1 and on), whose weights do, cannot be typed in; HiGHS proves the optima instead.
"""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import LinearConstraint, milp

from budget.cli import run
from budget.engine.allocate import allocate
from budget.engine.evaluate import evaluate_dc
from budget.engine.model import Bus, Case, Load, Project, Rules
from budget.engine.placing import Constraints
from tests.dc_trees import converter, table_filter

Floats = NDArray[np.float64]


def project_file(folder: Path, sizes: list[int], capacities: list[float], share: float = 0.8) -> Path:
    """A project whose converters draw these currents [A] behind filters that may carry these [A]."""
    text = [
        'format = 1\n[rules]\nfilter_load = "' + f"{share * 100:.17g}" + ' %"\nconverter_load = "100 %"\n',
        '[bus]\nlow = "10 V"\nnominal = "10 V"\nhigh = "10 V"\n',
    ]
    for k, capacity in enumerate(capacities):
        text.append(
            f'[[filter]]\nid = "F{k}"\nrated_current = "{capacity / share:.17g} A"\n'
            'resistance = "0 ohm"\nattenuation = [["10 kHz", 0, 0], ["10 MHz", 0, 0]]\n'
        )
    for k, size in enumerate(sizes):
        text.append(
            f'[[converter]]\nid = "C{k}"\nrated_power = "{10 * size} W"\nefficiency = "100 %"\n'
            f'output = [{{ voltage = "10 V", current = "{size} A" }}]\n'
        )
    path = folder / "packing.toml"
    path.write_text("\n".join(text), encoding="utf-8")
    return path


def answer(path: Path, capsys: pytest.CaptureFixture[str], *options: str) -> dict[str, Any]:
    """What ``budget allocate`` prints as JSON."""
    status = run(["allocate", str(path), "--format", "json", *options])
    told = capsys.readouterr()
    assert status == 0, told.err
    found: dict[str, Any] = json.loads(told.out)
    return found


def loads(allocation: dict[str, str], sizes: list[int]) -> dict[str, int]:
    found: dict[str, int] = {}
    for k, size in enumerate(sizes):
        home = allocation[f"C{k}"]
        found[home] = found.get(home, 0) + size
    return found


def best_by_goal(found: dict[str, Any]) -> dict[str, Any]:
    """No candidate is known to fail here, so the first is the best by the goal."""
    one: dict[str, Any] = found["candidates"][0]
    return one


# Sizes, optimum, capacity 100. First: the example of Martello & Toth, Knapsack Problems (1990), ch. 8, which is also
# p01 of the collection BIN_PACKING by J. Burkardt (its optimum there; the bound L2 of the book is 4 as well: derived).
# Second: p02 of that collection. Third and fourth: published worked examples with their optima (from memory). All four
# optima were also proved by a mixed-integer solver (derived).
BINS = [
    ([70, 60, 50, 33, 33, 33, 11, 7, 3], 4),
    ([99, 94, 79, 64, 50, 46, 43, 37, 32, 19, 18, 7, 6, 3], 7),
    ([50, 3, 48, 53, 53, 4, 3, 41, 23, 20, 52, 49], 4),
    ([8, 19, 40, 51, 21, 48, 85, 68, 86, 79, 93, 93, 21, 73, 72, 77, 7, 41, 14, 70], 12),
]


@pytest.mark.parametrize(("sizes", "optimum"), BINS)
def test_fewest_filters_is_the_optimum_of_bin_packing(
    sizes: list[int], optimum: int, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = project_file(tmp_path, sizes, [100.0] * (optimum + 2))
    found = answer(path, capsys, "--goal", "fewest", "--time", "20")
    best = best_by_goal(found)
    assert best["filters_used"] == optimum
    assert found["proved"] or found["gap_unit"] == "headroom"  # the number of filters is proved in any case
    filled = loads(best["allocation"], sizes)
    assert len(filled) == optimum
    assert max(filled.values()) <= 100
    assert math.isclose(best["headroom"], 1.0 - max(filled.values()) / 100, abs_tol=1e-12)


def triplets(bins: int, seed: int) -> list[int]:
    """Sizes of which three fill a bin of 1000, after the triplet class of E. Falkenauer, "A hybrid grouping genetic
    algorithm for bin packing", J. Heuristics 2 (1996) (from memory). The optimum is the number of bins: all are full.
    """
    rng = np.random.default_rng(seed)
    sizes = []
    for _ in range(bins):
        a = int(rng.integers(380, 491))
        b = int(rng.integers(250, (1000 - a) // 2))
        sizes += [a, b, 1000 - a - b]
    return [sizes[k] for k in rng.permutation(len(sizes))]


@pytest.mark.parametrize("bins", [4, 6, 8])
def test_triplets_fill_every_bin(bins: int, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    sizes = triplets(bins, bins)
    found = answer(project_file(tmp_path, sizes, [1000.0] * (bins + 1)), capsys, "--goal", "fewest", "--time", "30")
    best = best_by_goal(found)
    assert found["proved"]
    assert best["filters_used"] == bins
    assert set(loads(best["allocation"], sizes).values()) == {1000}
    assert best["headroom"] == pytest.approx(0.0, abs=1e-12)


def graham(machines: int) -> list[int]:
    """R. L. Graham, "Bounds on multiprocessing timing anomalies", SIAM J. Appl. Math. 17 (1969): for m machines the
    jobs 2m-1, 2m-1, ..., m+1, m+1, m, m, m, for which the longest first (LPT) takes 4m - 1 and the optimum 3m.
    """
    return [t for t in range(2 * machines - 1, machines, -1) for _ in range(2)] + [machines] * 3


@pytest.mark.parametrize("machines", [2, 3, 4, 5, 6])
def test_even_is_the_optimum_where_the_longest_first_is_at_its_worst(
    machines: int, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    sizes, capacity = graham(machines), 4.0 * machines
    assert sum(sizes) == 3 * machines**2  # so that none can be better than 3m
    found = answer(project_file(tmp_path, sizes, [capacity] * machines), capsys, "--goal", "even")
    best = best_by_goal(found)
    assert found["proved"]
    assert found["gap"] == 0.0
    assert set(loads(best["allocation"], sizes).values()) == {3 * machines}
    assert best["headroom"] == pytest.approx(1.0 - 3.0 * machines / capacity, abs=1e-12)


# -- a mixed-integer solver: HiGHS, by scipy.optimize.milp -------------------------------------------------------------


class Model:
    """The textbook model: x_fk = 1 where item k is at filter f, y_f = 1 where f is in use, z the largest share."""

    def __init__(self, weights: Floats, capacity: Floats, allowed: NDArray[np.bool_] | None = None) -> None:
        self.count, self.cases = weights.shape
        self.filters = capacity.size
        self.size = self.filters * self.count + self.filters + 1
        self.rows: list[Floats] = []
        self.low: list[float] = []
        self.high: list[float] = []
        self.top = np.ones(self.size)
        self.top[-1] = np.inf
        if allowed is not None:
            self.top[: self.filters * self.count] = allowed.T.ravel()
        for k in range(self.count):
            self.row({self.x(f, k): 1.0 for f in range(self.filters)}, 1.0, 1.0)
        for f in range(self.filters):
            for k in range(self.count):
                self.row({self.x(f, k): 1.0, self.y(f): -1.0}, -np.inf, 0.0)
            for c in range(self.cases):
                filled = {self.x(f, k): weights[k, c] for k in range(self.count)}
                self.row({**filled, self.z: -capacity[f]}, -np.inf, 0.0)

    def x(self, f: int, k: int) -> int:
        return f * self.count + k

    def y(self, f: int) -> int:
        return self.filters * self.count + f

    @property
    def z(self) -> int:
        return self.size - 1

    def row(self, terms: dict[int, float], low: float, high: float) -> None:
        row = np.zeros(self.size)
        for k, value in terms.items():
            row[k] = value
        self.rows.append(row)
        self.low.append(low)
        self.high.append(high)

    def least(self, cost: dict[int, float]) -> float | None:
        """The proven optimum; None where there is no solution."""
        whole, price = np.ones(self.size), np.zeros(self.size)
        whole[-1] = 0.0
        for k, value in cost.items():
            price[k] = value
        solved = milp(
            price,
            integrality=whole,
            bounds=(np.zeros(self.size), self.top),
            constraints=LinearConstraint(np.array(self.rows), np.array(self.low), np.array(self.high)),
            options={"mip_rel_gap": 0.0},
        )
        assert solved.status in (0, 2), solved.message
        return float(solved.fun) if solved.status == 0 else None


def bus(
    powers: list[float], ratings: list[float], cases: tuple[Case, ...] = (Case("full"),), homes: list[int] | None = None
) -> Project:
    filters = tuple(table_filter(f"F{k}", rated_current=r) for k, r in enumerate(ratings))
    units = tuple(converter(f"C{k}", p, f"F{homes[k]}" if homes else "") for k, p in enumerate(powers))
    return Project(Bus(10.0, 10.0, 10.0), filters, units, cases, Rules(filter_load=1.0))


@pytest.mark.parametrize("seed", range(8))
def test_fewest_is_what_a_mixed_integer_solver_finds(seed: int) -> None:
    """Filters of different rating, two load cases: first the fewest filters, then the smallest largest share."""
    rng = np.random.default_rng(seed)
    count, filters = 7 + seed % 4, 4 + seed % 2
    powers = rng.integers(2, 30, count).astype(float)
    shares = rng.uniform(0.2, 1.3, count)
    weights = np.stack([powers, powers * shares], axis=1) / 10.0
    filling = (0.35, 0.5, 0.8, 1.05)[seed % 4]
    ratings = rng.integers(8, 16, filters) * weights.sum(axis=0).max() / 12.0 / filters / filling
    load = tuple((f"C{k}", Load("share", float(x))) for k, x in enumerate(shares))
    project = bus(powers.tolist(), ratings.tolist(), (Case("a"), Case("b", load=load)))
    found = allocate(project, "fewest", finish=evaluate_dc, explain=False)
    assert found.proved

    model = Model(weights, ratings)
    model.row({model.z: 1.0}, 0.0, 1.0)  # within the ratings
    used = model.least({model.y(f): 1.0 for f in range(filters)})
    if used is None:
        assert not found.candidates
        return
    assert found.best is not None
    assert found.best.filters_used == round(used)
    model.row({model.y(f): 1.0 for f in range(filters)}, 0.0, round(used))
    share = model.least({model.z: 1.0})
    assert share is not None
    assert found.best.headroom == pytest.approx(1.0 - share, abs=1e-6)


@pytest.mark.parametrize("seed", range(8))
def test_the_fewest_moves_are_the_least_cost_of_a_generalised_assignment(seed: int) -> None:
    """Of all allocations with the largest headroom, what is proposed moves no more converters than it must.

    Small whole sizes have many such allocations. Some converters may not be behind some filters.
    """
    rng = np.random.default_rng(100 + seed)
    count, filters = 8 + seed % 3, 2 + seed % 3
    sizes = rng.integers(1, 5, count)
    homes = rng.integers(0, filters, count)
    ratings = rng.integers(5, 8, filters) * sizes.sum() / 5.0 / filters
    allowed = rng.random((count, filters)) > 0.2
    allowed[np.arange(count), homes] = True
    banned = tuple((f"C{k}", f"F{f}") for k, f in np.argwhere(~allowed).tolist())
    project = bus([10.0 * float(s) for s in sizes], ratings.tolist(), homes=homes.tolist())
    found = allocate(project, "even", Constraints(banned=banned), finish=evaluate_dc, explain=False)
    assert found.proved

    model = Model(sizes[:, None].astype(float), ratings, allowed)
    share = model.least({model.z: 1.0})
    assert share is not None
    if share > 1.0 + 1e-9:
        assert not found.candidates
        return
    assert found.best is not None
    assert found.best.headroom == pytest.approx(1.0 - share, abs=1e-7)
    model.row({model.z: 1.0}, 0.0, share + 1e-7)
    cost = {model.x(f, k): 1.0 for k in range(count) for f in range(filters) if f != homes[k]}
    moves = model.least(cost)
    assert moves is not None
    assert found.best.moves == round(moves)
