"""Scored examples in, intervals of scores with their weights out: the compiled half of the AUC.

A summary of one stream of scores holds two arrays:

    points  float64[B, 2]  margin, signed weight (positive example: +w, negative: -w), as they came
    items   float64[C, 4]  lowest margin, highest margin, weight of positives, weight of negatives

`items` says that so much weight lies somewhere in that interval; intervals may overlap. When the B
points are full they are sorted and merged with the items, neighbours joining as long as the new item

- holds at most 6/C of the mass (weight of positives / theirs in all + the same of negatives), and
- is not much wider than cells near by: the widest interval allowed grows by SLOPE per unit of distance
  from where the mass lies dense. Without this rule an item on the thin flank of a moving stream
  spans a gap that later fills, and every later score in it is undecided.

The first rule alone leaves at most 2C/3 + 1 items, so where the second would leave more than C it is
relaxed, then dropped. Work depends on the points and their order only.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import kernel, small

__all__ = ["append", "append_all", "ascending", "compare_pairs", "compress", "joined", "sorted_points"]

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]

LO, HI, POSITIVE, NEGATIVE = 0, 1, 2, 3
SLOPE = 0.05
RELAXED_SLOPE = 0.5
SIGN_BIT = np.uint64(1 << 63)
DIGIT_BITS = 8
DIGIT_MASK = np.uint64((1 << DIGIT_BITS) - 1)


@kernel
def ascending(values: Floats) -> npt.NDArray[np.int32]:
    """Order that sorts finite `values`: radix sort, values of equal bits stay in their order."""
    n = len(values)
    order, spare_order = np.arange(n).astype(np.int32), np.empty(n, np.int32)
    if np.all(values[1:] >= values[:-1]):
        return order
    keys, spare_keys = np.empty(n, np.uint64), np.empty(n, np.uint64)
    counts = np.zeros((64 // DIGIT_BITS, 1 << DIGIT_BITS), np.uint64)
    bits = values.view(np.uint64)
    for i in range(n):
        key = ~bits[i] if bits[i] & SIGN_BIT else bits[i] | SIGN_BIT
        keys[i] = key
        for place in range(len(counts)):
            counts[place, key >> np.uint64(place * DIGIT_BITS) & DIGIT_MASK] += np.uint64(1)
    for place in range(len(counts)):
        shift, starts = np.uint64(place * DIGIT_BITS), counts[place]
        if starts[keys[0] >> shift & DIGIT_MASK] == n:
            continue
        start = np.uint64(0)
        for digit in range(len(starts)):
            start, starts[digit] = start + starts[digit], start
        for i in range(n):
            digit_of_key = keys[i] >> shift & DIGIT_MASK
            to = starts[digit_of_key]
            starts[digit_of_key] = to + np.uint64(1)
            spare_keys[to] = keys[i]
            spare_order[to] = order[i]
        keys, spare_keys = spare_keys, keys
        order, spare_order = spare_order, order
    return order


@kernel
def sorted_points(points: Floats) -> Floats:
    """Points float64[n, 2] as items in order of the margin, equal margins as one: float64[<= n, 4]."""
    result = np.zeros((len(points), 4))
    count = 0
    for i in ascending(points[:, 0].copy()):
        margin, signed = points[i, 0], points[i, 1]
        if count == 0 or result[count - 1, LO] != margin:
            result[count, LO] = margin
            result[count, HI] = margin
            count += 1
        result[count - 1, POSITIVE if signed > 0.0 else NEGATIVE] += abs(signed)
    return result[:count]


@kernel
def joined(fresh: Floats, items: Floats) -> Floats:
    """`fresh`, made by `sorted_points`, and `items` by the middle of the interval; equal points are one."""
    middles = np.empty(len(items))
    for i in range(len(items)):
        lo, hi = items[i, LO], items[i, HI]
        middles[i] = lo if lo == hi else 0.5 * lo + 0.5 * hi
    order = ascending(middles)
    result = np.empty((len(fresh) + len(items), 4))
    count, point, at, old = 0, -1, 0, 0
    while at < len(fresh) or old < len(items):
        if old == len(items) or (at < len(fresh) and fresh[at, LO] <= middles[order[old]]):
            entry = fresh[at]
            at += 1
        else:
            entry = items[order[old]]
            old += 1
        if entry[LO] == entry[HI]:
            if point >= 0 and result[point, LO] == entry[LO]:
                result[point, POSITIVE] += entry[POSITIVE]
                result[point, NEGATIVE] += entry[NEGATIVE]
                continue
            point = count
        for column in range(4):
            result[count, column] = entry[column]
        count += 1
    return result[:count]


@kernel
def _masses(entries: Floats) -> Floats:
    """Mass of each entry: its share of the positives plus its share of the negatives."""
    positive, negative = 0.0, 0.0
    for i in range(len(entries)):
        positive += entries[i, POSITIVE]
        negative += entries[i, NEGATIVE]
    masses = np.zeros(len(entries))
    for i in range(len(entries)):
        if positive > 0.0:
            masses[i] += entries[i, POSITIVE] / positive
        if negative > 0.0:
            masses[i] += entries[i, NEGATIVE] / negative
    return masses


@kernel
def _merge(entries: Floats, masses: Floats, most: float, widest: Floats, merged: Floats) -> int:
    """Joins neighbours up to mass `most` and twice the smallest `widest` among them; how many came out.

    Writes rows of `merged` as far as they go; the count may be larger, and is then useless.
    """
    count, first = 0, 0
    while first < len(entries):
        lo, hi = entries[first, LO], entries[first, HI]
        positive, negative = entries[first, POSITIVE], entries[first, NEGATIVE]
        mass, limit = masses[first], widest[first]
        last = first + 1
        while last < len(entries):
            limit = min(limit, widest[last])
            new_lo, new_hi = min(lo, entries[last, LO]), max(hi, entries[last, HI])
            if mass + masses[last] > most or new_hi - new_lo > 2.0 * limit:
                break
            lo, hi = new_lo, new_hi
            positive += entries[last, POSITIVE]
            negative += entries[last, NEGATIVE]
            mass += masses[last]
            last += 1
        if count < len(merged):
            merged[count, LO] = lo
            merged[count, HI] = hi
            merged[count, POSITIVE] = positive
            merged[count, NEGATIVE] = negative
        count += 1
        first = last
    return count


@kernel
def _widest(entries: Floats, masses: Floats, most: float, slope: float) -> Floats:
    """Widest interval allowed at each entry: that of its cell by mass alone, graded by `slope`.

    An entry that is a cell of its own and a single margin sets no limit: ties ask for no finer cells.
    """
    n = len(entries)
    widest = np.full(n, np.inf)
    first = 0
    while first < n:
        lo, hi, mass = entries[first, LO], entries[first, HI], masses[first]
        last = first + 1
        while last < n and mass + masses[last] <= most:
            lo, hi = min(lo, entries[last, LO]), max(hi, entries[last, HI])
            mass += masses[last]
            last += 1
        if hi > lo:
            widest[first:last] = hi - lo
        first = last
    for i in range(1, n):
        widest[i] = min(widest[i], widest[i - 1] + slope * _distance(entries, i))
    for i in range(n - 2, -1, -1):
        widest[i] = min(widest[i], widest[i + 1] + slope * _distance(entries, i + 1))
    return widest


@small
def _distance(entries: Floats, i: int) -> float:
    """Between the middles of entry i and the one before it."""
    distance: float = 0.5 * abs((entries[i, LO] - entries[i - 1, LO]) + (entries[i, HI] - entries[i - 1, HI]))
    return distance


@kernel
def compress(fresh: Floats, items: Floats, into: Floats) -> int:
    """Joins `fresh` (see `joined`) and `items` to fewer items in `into`, which may hold `items`.

    Returns how many rows of `into` are in use.
    """
    entries = joined(fresh, items)
    masses = _masses(entries)
    most = 6.0 / len(into)
    for slope in (SLOPE, RELAXED_SLOPE):
        count = _merge(entries, masses, most, _widest(entries, masses, most, slope), into)
        if count <= len(into):
            return count
    return _merge(entries, masses, most, np.full(len(entries), np.inf), into)


@small
def append(
    points: Floats, fill: Int64s, items: Floats, used: Int64s, scope: int, margin: float, signed: float
) -> None:
    """One scored example into summary `scope` of points[S, B, 2], fill[S], items[S, C, 4], used[S]."""
    at = fill[scope]
    points[scope, at, 0] = margin
    points[scope, at, 1] = signed
    fill[scope] = at + 1
    if at + 1 == points.shape[1]:
        used[scope] = compress(sorted_points(points[scope]), items[scope, : used[scope]], items[scope])
        fill[scope] = 0


@kernel
def append_all(
    points: Floats, fill: Int64s, items: Floats, used: Int64s, scope: int, new_points: Floats
) -> None:
    """`append` for points float64[n, 2], one after the other."""
    for i in range(len(new_points)):
        append(points, fill, items, used, scope, new_points[i, 0], new_points[i, 1])


@kernel
def compare_pairs(entries: Floats) -> tuple[float, float, float, float]:
    """Weight of (positive, negative) pairs in what `joined` gave: won, undecided, tied among those, all.

    Won: the positive's interval lies above the negative's. Undecided: they touch or overlap.
    Tied: both are known to have the same margin.
    With whole-number weights every sum is exact up to 2**53.
    """
    n = len(entries)
    lows, highs = entries[:, LO].copy(), entries[:, HI].copy()
    by_low, by_high = ascending(lows), ascending(highs)
    won, undecided, tied = 0.0, 0.0, 0.0
    below, at = 0.0, 0  # weight of negatives wholly below entry i
    lost_to = np.empty(n)
    for i in by_low:
        while at < n and highs[by_high[at]] < lows[i]:
            below += entries[by_high[at], NEGATIVE]
            at += 1
        lost_to[i] = below
        won += entries[i, POSITIVE] * below
        if lows[i] == highs[i]:
            tied += entries[i, POSITIVE] * entries[i, NEGATIVE]
    reached, at = 0.0, 0  # weight of negatives that begin at or below the end of entry i
    for i in by_high:
        while at < n and lows[by_low[at]] <= highs[i]:
            reached += entries[by_low[at], NEGATIVE]
            at += 1
        undecided += entries[i, POSITIVE] * max(reached - lost_to[i], 0.0)
    positive, negative = 0.0, 0.0
    for i in range(n):
        positive += entries[i, POSITIVE]
        negative += entries[i, NEGATIVE]
    return won, undecided, tied, positive * negative
