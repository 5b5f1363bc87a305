"""Every way to split items over filters within given currents, enumerated by sets instead of item by item.

A filter that takes the items A carries at least the sum of their least currents, and the other filters must be able to
carry what A leaves. Where the currents wanted of the filters are only just more than what all items draw, both sides
are tight: few sets A of all 2^K fit a filter. They are found by halving (Horowitz & Sahni, "Computing partitions with
applications to the knapsack problem", J. ACM 21, 1974): all sums of each half of the items, one half sorted. Splits
are then joined from such sets, some filters from the front and the others from the back, meeting at complements
(after Korf, "Multi-way number partitioning", IJCAI 2009, and Schreiber, Korf & Moffitt, "Optimal multi-way number
partitioning", J. ACM 65, 2018; from memory).

Sets are bit masks, the first item highest. Equal filters are counted once: their masks fall. So are equal items: they
go to filters that rise. Both at once are safe: of all renamings of a split, the one whose table of filters by items is
greatest when read row by row has both properties (others may have them too, and then it comes more than once).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Indices = NDArray[np.intp]
Masks = NDArray[np.int64]

MOST_ITEMS = 60
_SLACK = 1e-9  # relative; what rounding may not hide
_HALF, _SETS, _LOOKED = 1 << 17, 1_500_000, 150_000_000
_ENTRIES, _CHUNK = 3_000_000, 1_000_000
_CLASS = 12  # of more equal items than these, groups of so many are told apart


class TooWideError(Exception):
    """So many sets fit that the enumeration was not begun or not finished."""


@dataclass(frozen=True, slots=True)
class Split:
    """What is to be split: free items K (with their number of converters), filters F, cases C."""

    low: Floats  # (F, K, C) least currents, inf where not allowed
    base: Floats  # (F, C) what is on the filters already
    caps: Floats  # (F,) may be inf
    sizes: Indices  # (K,) converters
    most: Indices  # (F,) converters, less those there already
    apart: tuple[tuple[int, int], ...]  # items
    item_class: Indices  # (K,) equal numbers for equal items, which stand side by side
    filter_class: Indices  # (F,) equal numbers for equal filters, which stand side by side


@dataclass(frozen=True, slots=True)
class _Entries:
    """Partial splits: the items placed, where they came from, the set placed last, the largest share so far."""

    mask: Masks
    parent: Indices
    last: Masks
    share: Floats


def splits(split: Split, check: Callable[[], None], ceiling: Callable[[], float]) -> Iterator[Indices]:
    """Blocks (A, K) of indices of filters: every split whose least currents fit, up to renaming of equals.

    ``ceiling``: splits whose least share of the caps is above this number by then are left out. ``check`` is called
    often and may raise. Raises :class:`TooWideError`.
    """
    filters, count = split.caps.size, split.sizes.size
    if count > MOST_ITEMS:
        raise TooWideError
    if filters == 0 or count == 0:
        if count == 0:
            yield np.zeros((1, 0), dtype=np.intp)
        return
    sets = [_subsets(split, f, check) for f in range(filters)]
    if any(not s[0].size for s in sets):
        return
    equal = bool((split.filter_class == split.filter_class[0]).all())
    right = 1 if filters < 4 or (equal and filters > 4) else filters // 2
    cut = filters - right if filters > 1 else 1
    front = _chain(split, sets, list(range(cut)), True, check, ceiling)
    back = _chain(split, sets, list(range(filters - 1, cut - 1, -1)), False, check, ceiling)
    yield from _join(split, front, back, cut, check, ceiling)


def _bit(count: int, item: int) -> int:
    return 1 << (count - 1 - item)


def _subsets(split: Split, f: int, check: Callable[[], None]) -> tuple[Masks, Floats]:
    """Sets that fit filter ``f`` (S,), and the share (S,) of its cap that they take."""
    count, cases = split.sizes.size, split.base.shape[1]
    others = np.arange(split.caps.size) != f
    least = split.low[f]
    with np.errstate(invalid="ignore"):
        elsewhere = split.low[others].min(axis=0) if others.any() else np.full((count, cases), np.inf)
    may = np.isfinite(least).all(axis=1)
    must = ~np.isfinite(elsewhere).all(axis=1)
    cap = split.caps[f] * (1.0 + _SLACK) - split.base[f]
    room = ((split.caps[others] * (1.0 + _SLACK))[:, None] - split.base[others]).sum(axis=0)
    needed = np.where(must[:, None], 0.0, elsewhere)
    floor = needed.sum(axis=0) - room  # of the needs of the set, (C,)
    if (must & ~may).any() or (cap < 0.0).any():
        return np.zeros(0, dtype=np.int64), np.zeros(0)

    groups: list[list[int]] = []
    for k in range(count):
        if groups and split.item_class[k] == split.item_class[groups[-1][0]] and len(groups[-1]) < _CLASS:
            groups[-1].append(k)
        else:
            groups.append([k])
    options = [_options(group, count, may, must) for group in groups]
    weight = np.cumsum([np.log2(max(1, len(o))) for o in options])
    middle = int(np.searchsorted(weight, weight[-1] / 2.0)) + 1
    columns = np.concatenate(
        (np.where(may[:, None], least, 0.0), needed, split.sizes[:, None].astype(np.float64)), axis=1
    )
    top = np.concatenate((cap, np.full(cases, np.inf), [split.most[f] + 0.5]))
    one = _half(groups[:middle], options[:middle], count, columns, top)
    two = _half(groups[middle:], options[middle:], count, columns, top)

    dims = 2 * cases + 1
    best: tuple[int, int, Indices, Indices, Indices] | None = None
    ratio = np.ones((count, cases))
    np.divide(needed, least, out=ratio, where=(least > 0.0) & may[:, None])
    for c in range(cases):
        worst = ratio[may, c].max() if may.any() else 1.0
        bottom = floor[c] / worst if worst > 0.0 and floor[c] > 0.0 else -np.inf
        order = np.argsort(two[1][:, c], kind="stable")
        key = two[1][order, c]
        tiny = 1e-12 * abs(float(cap[c])) if np.isfinite(cap[c]) else 0.0
        first = np.searchsorted(key, bottom - tiny - one[1][:, c], side="left")
        last = np.searchsorted(key, cap[c] + tiny - one[1][:, c], side="right")
        number = np.maximum(last - first, 0)
        total = int(number.sum())
        if best is None or total < best[0]:
            best = (total, c, order, first.astype(np.intp), number.astype(np.intp))
    assert best is not None, dims
    total, _, order, first, number = best
    if total > _LOOKED:
        raise TooWideError
    masks, shares, held = [], [], 0
    two_sums = np.ascontiguousarray(two[1][order].T)
    one_sums = np.ascontiguousarray(one[1].T)
    two_masks = two[0][order]
    bottom_of = floor - np.abs(floor) * 1e-12
    for start, stop in _blocks(number, _CHUNK):
        check()
        left, right = _ranges(first, number, start, stop)
        for d in range(dims):
            sums = one_sums[d][left] + two_sums[d][right]
            fits = sums <= top[d] if d < cases or d == dims - 1 else sums >= bottom_of[d - cases]
            if not fits.all():
                left, right = left[fits], right[fits]
        share = np.zeros(left.size)
        if np.isfinite(split.caps[f]) and split.caps[f] > 0.0:
            for d in range(cases):
                share = np.maximum(share, (one_sums[d][left] + two_sums[d][right] + split.base[f, d]) / split.caps[f])
        mask = one[0][left] | two_masks[right]
        for a, b in split.apart:
            pair = _bit(count, a) | _bit(count, b)
            fine = (mask & pair) != pair
            mask, share = mask[fine], share[fine]
        masks.append(mask)
        shares.append(share)
        held += mask.size
        if held > _SETS:
            raise TooWideError
    if not masks:
        return np.zeros(0, dtype=np.int64), np.zeros(0)
    found, share = np.concatenate(masks), np.concatenate(shares)
    down = np.argsort(-found, kind="stable")
    return found[down], share[down]


def _options(group: list[int], count: int, may: Bools, must: Bools) -> list[tuple[int, ...]]:
    """What a filter may take of equal items: a run of them, which leaves the earlier and the later to others."""
    if not may[group[0]]:
        return [()]
    if must[group[0]]:
        return [tuple(group)]
    size = len(group)
    runs = [tuple(group[a:b]) for a in range(size) for b in range(a + 1, size + 1)]
    return [(), *runs]


def _half(
    groups: list[list[int]], options: list[list[tuple[int, ...]]], count: int, columns: Floats, top: Floats
) -> tuple[Masks, Floats]:
    """All choices (S,) of a half and their sums (S, dims), without those above ``top`` on their own."""
    masks, sums = np.zeros(1, dtype=np.int64), np.zeros((1, columns.shape[1]))
    for choices in options:
        bits = np.array([sum(_bit(count, k) for k in run) for run in choices], dtype=np.int64)
        add = np.array([columns[list(run)].sum(axis=0) for run in choices])
        masks = (masks[:, None] | bits[None]).ravel()
        sums = (sums[:, None] + add[None]).reshape(-1, columns.shape[1])
        fits = (sums <= top).all(axis=1)
        masks, sums = masks[fits], sums[fits]
        if masks.size > _HALF:
            raise TooWideError
    return masks, sums


def _blocks(number: Indices, size: int) -> Iterator[tuple[int, int]]:
    """Ranges of rows whose numbers add up to about ``size``."""
    ends = np.cumsum(number)
    start, done = 0, 0
    while start < number.size:
        stop = max(start + 1, int(np.searchsorted(ends, done + size, side="right")))
        if ends[stop - 1] > done:
            yield start, stop
        start, done = stop, int(ends[stop - 1])


def _ranges(first: Indices, number: Indices, start: int, stop: int) -> tuple[Indices, Indices]:
    """Rows ``start`` to ``stop``, each as often as its number, and the partners that count up from its first."""
    n = number[start:stop]
    left = np.repeat(np.arange(start, stop, dtype=np.intp), n)
    offset = np.arange(left.size, dtype=np.intp) - np.repeat(np.cumsum(n) - n, n)
    return left, np.repeat(first[start:stop], n) + offset


def _tables(values: Floats) -> list[Floats]:
    """For each byte of a mask of K items, from the lowest, the sums (256, C) of the values (K, C) it names."""
    count, cases = values.shape
    tables = []
    for shift in range(0, count, 8):
        table = np.zeros((1, cases))
        for k in range(8):
            item = count - 1 - shift - k
            add = values[item] if item >= 0 else np.zeros(cases)
            table = np.concatenate((table, table + add))
        tables.append(table)
    return tables


def _sums(masks: Masks, tables: list[Floats]) -> Floats:
    total: Floats = tables[0][masks & 255].copy()
    for k, table in enumerate(tables[1:], 1):
        total += table[(masks >> (8 * k)) & 255]
    return total


def _chain(
    split: Split,
    sets: list[tuple[Masks, Floats]],
    order: list[int],
    forward: bool,
    check: Callable[[], None],
    ceiling: Callable[[], float],
) -> list[_Entries]:
    """Partial splits over the filters of ``order``, one level after another."""
    count = split.sizes.size
    full = (1 << count) - 1
    levels = [_Entries(np.zeros(1, np.int64), np.zeros(1, np.intp), np.zeros(1, np.int64), np.zeros(1))]
    rest = np.ones(split.caps.size, dtype=np.bool_)
    runs = _run_tables(split, forward)
    for step, f in enumerate(order):
        rest[f] = False
        before = levels[-1]
        masks, shares = sets[f]
        linked = step > 0 and split.filter_class[f] == split.filter_class[order[step - 1]]
        remaining = np.flatnonzero(rest)
        tables: list[Floats] = []
        room = np.zeros(0)
        if remaining.size:
            tables = _tables(split.low[remaining].min(axis=0))
            room = ((split.caps[remaining] * (1.0 + _SLACK))[:, None] - split.base[remaining]).sum(axis=0)
            room = room * (1.0 + 1e-12)
        # Equal filters only are left: the next takes the first item that is not placed yet.
        same = forward and bool((split.filter_class[[f, *remaining]] == split.filter_class[f]).all())
        found: list[_Entries] = []
        held = 0
        for rows, candidates in _pairs(before.mask, masks, same, count):
            check()
            parents, chosen = _disjoint(before.mask, masks, rows, candidates)
            if linked:
                fine = (before.last[parents] >= masks[chosen]) if forward else (before.last[parents] <= masks[chosen])
                parents, chosen = parents[fine], chosen[fine]
            share = np.maximum(before.share[parents], shares[chosen])
            fine = share <= ceiling()
            parents, chosen, share = parents[fine], chosen[fine], share[fine]
            union = before.mask[parents] | masks[chosen]
            fine = np.ones(union.size, dtype=np.bool_)
            for shift, bits, good in runs:
                fine &= good[(union >> shift) & bits]
            if not tables:
                fine &= union == full
            else:
                fine &= (_sums(full ^ union, tables) <= room).all(axis=1)
            found.append(_Entries(union[fine], parents[fine], masks[chosen][fine], share[fine]))
            held += int(fine.sum())
            if held > _ENTRIES:
                raise TooWideError
        if not found:
            found = [_Entries(np.zeros(0, np.int64), np.zeros(0, np.intp), np.zeros(0, np.int64), np.zeros(0))]
        levels.append(
            _Entries(
                np.concatenate([e.mask for e in found]),
                np.concatenate([e.parent for e in found]),
                np.concatenate([e.last for e in found]),
                np.concatenate([e.share for e in found]),
            )
        )
    return levels


def _pairs(before: Masks, masks: Masks, same: bool, count: int) -> Iterator[tuple[Indices, Indices]]:
    """Blocks of rows and of sets to be tried with them."""
    if not same:
        every = np.arange(masks.size, dtype=np.intp)
        step = max(1, _CHUNK // max(1, masks.size))
        for start in range(0, before.size, step):
            yield np.arange(start, min(start + step, before.size), dtype=np.intp), every
        return
    full = (1 << count) - 1
    head = _highest(full ^ before)
    heads = _highest(masks)
    for bit in np.unique(head).tolist():
        rows, chosen = np.flatnonzero(head == bit), np.flatnonzero(heads == bit)
        if not chosen.size:
            continue
        step = max(1, _CHUNK // chosen.size)
        for start in range(0, rows.size, step):
            yield rows[start : start + step], chosen


def _highest(masks: Masks) -> Indices:
    """Number of the highest bit that is set, -1 for none."""
    # exact also above 2^53: what frexp may round up is looked at again
    exponent = np.frexp(masks.astype(np.float64))[1].astype(np.int64) - 1
    over = (masks >> np.maximum(exponent, 0)) == 0
    found: Indices = np.where(masks == 0, -1, exponent - (over & (masks != 0))).astype(np.intp)
    return found


def _disjoint(before: Masks, masks: Masks, rows: Indices, chosen: Indices) -> tuple[Indices, Indices]:
    apart = (before[rows][:, None] & masks[chosen][None]) == 0
    i, j = np.nonzero(apart)
    return rows[i], chosen[j]


def _run_tables(split: Split, forward: bool) -> list[tuple[int, int, Bools]]:
    """For each class of equal items: where it stands in a mask, and which of its patterns are runs from its end.

    From the front, equal items are placed in order; from the back, in reverse.
    """
    count, found, start = split.sizes.size, [], 0
    while start < count:
        stop = start + 1
        while stop < count and split.item_class[stop] == split.item_class[start] and stop - start < _CLASS:
            stop += 1
        size = stop - start
        if size > 1:
            good = np.zeros(1 << size, dtype=np.bool_)
            for taken in range(size + 1):
                low = (1 << taken) - 1
                good[low << (size - taken) if forward else low] = True
            found.append((count - stop, (1 << size) - 1, good))
        start = stop
    return found


def _join(
    split: Split,
    front: list[_Entries],
    back: list[_Entries],
    cut: int,
    check: Callable[[], None],
    ceiling: Callable[[], float],
) -> Iterator[Indices]:
    count, filters = split.sizes.size, split.caps.size
    full = (1 << count) - 1
    one, two = front[-1], back[-1]
    order = np.argsort(two.mask, kind="stable")
    key = two.mask[order]
    wanted = full ^ one.mask
    first = np.searchsorted(key, wanted, side="left").astype(np.intp)
    number = (np.searchsorted(key, wanted, side="right") - first).astype(np.intp)
    linked = cut < filters and split.filter_class[cut - 1] == split.filter_class[cut]
    for start, stop in _blocks(number, _CHUNK // 4):
        check()
        left, at = _ranges(first, number, start, stop)
        right = order[at]
        if linked:
            fine = one.last[left] >= two.last[right]
            left, right = left[fine], right[fine]
        share = np.maximum(one.share[left], two.share[right])
        best = np.argsort(share, kind="stable")
        for begin in range(0, best.size, 4096):
            part = best[begin : begin + 4096]
            part = part[share[part] <= ceiling()]
            if not part.size:
                break
            home = np.zeros((part.size, count), dtype=np.intp)
            _trace(home, front, left[part], list(range(cut)))
            _trace(home, back, right[part], list(range(filters - 1, cut - 1, -1)))
            yield home


def _trace(home: Indices, levels: list[_Entries], at: Indices, order: list[int]) -> None:
    """Write the filters of the entries ``at`` of the last level into ``home`` (A, K)."""
    count = home.shape[1]
    shifts = np.arange(count - 1, -1, -1, dtype=np.int64)
    for level, f in zip(reversed(levels[1:]), reversed(order), strict=True):
        home[((level.last[at][:, None] >> shifts) & 1) == 1] = f
        at = level.parent[at]
