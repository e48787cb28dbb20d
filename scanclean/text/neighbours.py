"""Who stands beside whom: neighbours along rows, mutual choices and the chains they make.

Text lines are found from below: each letter looks for the letter that stands next to it in its
own row, and two letters that choose each other are linked. The links of a page are paths, never
a mesh, so one stray touch between two lines cannot run them together.

Glossary: N things with a box; K pairs of them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "beside",
    "best_of_both",
    "chains",
    "grouped_median",
    "keyed_best",
    "repeat_range",
    "weighted_median",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


def beside(order: Floats, top: Floats, bottom: Floats, *, band: float) -> tuple[Ints, Ints]:
    """Pairs that follow each other along some level of the page.

    The page is cut into level bands. In each band the things that reach into it stand in order,
    and each makes a pair with the next: what is hidden behind a third is not its neighbour.

    Parameters
    ----------
    order : (N,) float array
        Place along the lines, such as the x of the centre.
    top, bottom : (N,) float array
        The stretch of levels that each thing holds.
    band : float
        Height of the bands: a fraction of the smallest letter's.

    Returns
    -------
    i, j : (K,) int arrays
        The earlier and the later of each pair; each pair once.
    """
    n = order.size
    by_order = np.argsort(order, kind="stable")
    first = np.rint(top[by_order] / band).astype(np.int64)
    last = np.maximum(np.rint(bottom[by_order] / band).astype(np.int64), first + 1)
    entry, level = repeat_range(first, last)
    if entry.size == 0:
        return entry, entry
    level -= level.min()
    # a stable sort keeps the order within each band; 16 bits sort by radix
    by_level = np.argsort(
        level.astype(np.uint16 if level.max() < 1 << 16 else np.int64), kind="stable"
    )
    level, entry = level[by_level], entry[by_level]
    same = level[1:] == level[:-1]
    pair = np.unique(entry[:-1][same] * n + entry[1:][same])
    return by_order[pair // n], by_order[pair % n]


def repeat_range(start: Ints, stop: Ints) -> tuple[Ints, Ints]:
    """All whole numbers of N ranges: which range each is of, and the number."""
    count = stop - start
    owner = np.repeat(np.arange(start.size), count)
    value = np.arange(owner.size) + np.repeat(start - (np.cumsum(count) - count), count)
    return owner, value


def best_of_both(i: Ints, j: Ints, cost: Floats) -> Bools:
    """(K,) which pairs are the cheapest both for their earlier and for their later member."""
    return keyed_best(i, cost) & keyed_best(j, cost)


def keyed_best(key: Ints, cost: Floats) -> Bools:
    """(K,) True for one entry of each key, the cheapest; of equals the first."""
    order = np.lexsort((cost, key))
    new = np.ones(key.size, bool)
    new[1:] = key[order][1:] != key[order][:-1]
    best = np.zeros(key.size, bool)
    best[order[new]] = True
    return best


def chains(i: Ints, j: Ints, n: int) -> tuple[int, Ints]:
    """How many connected groups n things make by their pairs, and the group of each."""
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    if n == 0:
        return 0, np.empty(0, np.int64)
    graph = csr_array((np.ones(i.size, np.int8), (i, j)), shape=(n, n))
    count, group = connected_components(graph, directed=False)
    return int(count), group.astype(np.int64)


def grouped_median(group: Ints, n: int, values: Floats, default: Floats | float) -> Floats:
    """(n,) median of the values of each group; the default for a group without any."""
    order = np.lexsort((values, group))
    count = np.bincount(group, minlength=n)
    start = np.cumsum(count) - count
    out = np.array(np.broadcast_to(np.asarray(default, np.float64), (n,)))
    some = count > 0
    first, size, ranked = start[some], count[some], values[order]
    out[some] = (ranked[first + size // 2] + ranked[first + (size - 1) // 2]) / 2
    return out


def weighted_median(values: Floats, weights: Floats | Ints) -> float:
    """The value at which half the weight is reached; of at least one value."""
    order = np.argsort(values, kind="stable")
    total = np.cumsum(weights[order])
    return float(values[order][np.searchsorted(total, total[-1] / 2)])


def keyed_neighbours(key: Ints, place: Floats, among: Ints, asked: Ints, count: int) -> Ints:
    """(2 count, M) things of the same key next before and next behind others, or -1.

    Parameters
    ----------
    key, place : (N,) int, float array
        Row of each thing and its place in it.
    among : (A,) int array
        Things that count as neighbours.
    asked : (M,) int array
        Things whose neighbours are looked for; itself is none.
    count : int
        How many on each side; the nearest first, those before it, then those behind.
    """
    found = np.full((2 * count, asked.size), -1, np.int64)
    if among.size == 0 or asked.size == 0:
        return found
    span = float(np.ptp(place[among])) + float(np.ptp(place[asked])) + 1.0
    low = min(float(place[among].min()), float(place[asked].min()))
    rank = key * (2 * span) + (place - low)
    order = among[np.argsort(rank[among], kind="stable")]
    at = np.searchsorted(rank[order], rank[asked], side="left")
    itself = (order[np.minimum(at, order.size - 1)] == asked) & (at < order.size)
    for side, first, step in ((0, at - 1, -1), (count, at + itself, 1)):
        for k in range(count):
            i = first + k * step
            there = (i >= 0) & (i < order.size)
            thing = order[np.clip(i, 0, order.size - 1)]
            there &= key[thing] == key[asked]
            found[side + k, there] = thing[there]
    return found
