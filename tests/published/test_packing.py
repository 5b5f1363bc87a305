"""Bin packing: how many filters it takes at least, against published and proven optima.

A bus of 1 V without resistance makes current equal power, and the capacity of a bin is rating x filter_load.
"""

from __future__ import annotations

import math

import pytest

from budget.engine.allocate import allocate
from budget.engine.evaluate import evaluate_dc
from budget.engine.model import Bus, Case, Project, Rules
from tests.dc_trees import converter, table_filter

CAPACITY = 100

# Sizes, optimum. First: the example of Martello & Toth, Knapsack Problems (1990), ch. 8, which is also p01 of the
# collection BIN_PACKING by J. Burkardt (its optimum there; the bound L2 of the book is 4 as well: derived). Second: p02
# of that collection. Third and fourth: published worked examples with their optima (from memory). All four optima were
# also proved by a mixed-integer solver (derived).
INSTANCES = [
    ([70, 60, 50, 33, 33, 33, 11, 7, 3], 4),
    ([99, 94, 79, 64, 50, 46, 43, 37, 32, 19, 18, 7, 6, 3], 7),
    ([50, 3, 48, 53, 53, 4, 3, 41, 23, 20, 52, 49], 4),
    ([8, 19, 40, 51, 21, 48, 85, 68, 86, 79, 93, 93, 21, 73, 72, 77, 7, 41, 14, 70], 12),
]


@pytest.mark.parametrize(("sizes", "optimum"), INSTANCES)
def test_fewest_filters_is_the_optimum_of_bin_packing(sizes: list[int], optimum: int) -> None:
    share = 0.8
    filters = tuple(table_filter(f"F{k}", rated_current=CAPACITY / share) for k in range(optimum + 2))
    units = tuple(converter(f"C{k}", float(size)) for k, size in enumerate(sizes))
    project = Project(Bus(1.0, 1.0, 1.0), filters, units, (Case("full"),), Rules(filter_load=share))
    found = allocate(project, "fewest", finish=evaluate_dc, time_limit=20.0)
    assert found.best is not None
    assert found.best.filters_used == optimum
    assert found.proved or found.gap_unit == "headroom"  # the number of filters is proved in any case
    loads: dict[str, float] = {}
    for (_, home), size in zip(found.best.allocation, sizes, strict=True):
        loads[home] = loads.get(home, 0.0) + size
    assert max(loads.values()) <= CAPACITY
    assert math.isclose(found.best.headroom or 0.0, 1.0 - max(loads.values()) / CAPACITY, abs_tol=1e-12)
