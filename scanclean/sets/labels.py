"""Connected components of a page, and their measures as columns.

Glossary: N runs, C components. A component is a tree-like patchwork of runs: two runs of
neighbouring rows that touch are joined, and since each such contact is one stretch, the Euler
number of a component is its runs minus its contacts.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.runs import RunSet, one_shape

__all__ = ["Components", "label"]

Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Components:
    """The connected components of a page; columns of length C, computed on first use.

    Components stand in the raster order of their first points.

    Parameters
    ----------
    runs : RunSet
        The page.
    run_label : (N,) int32 array
        The component of each run, from 0.
    n : int
        C.
    connectivity : {8, 4}
    contacts : (C,) int64 array
        Pairs of touching runs in neighbouring rows.
    """

    runs: RunSet
    run_label: NDArray[np.int32]
    n: int
    connectivity: int
    contacts: Ints

    @cached_property
    def n_runs(self) -> Ints:
        """(C,) int64: runs of each component."""
        return np.bincount(self.run_label, minlength=self.n)

    @cached_property
    def area(self) -> Ints:
        """(C,) int64: pixels of each component."""
        return self._sum(self.runs.length)

    @cached_property
    def box(self) -> Ints:
        """(C, 4) int64: left, top, right, bottom; right and bottom exclusive."""
        if self.n == 0:
            return np.empty((0, 4), np.int64)
        order, first = self._by_component
        row = self.runs.row[order]
        columns = (
            np.minimum.reduceat(self.runs.start[order], first),
            row[first],  # runs of one component stand in raster order
            np.maximum.reduceat(self.runs.stop[order], first),
            row[np.append(first[1:], row.size) - 1] + 1,
        )
        return np.stack(columns, axis=1)

    @cached_property
    def centroid(self) -> NDArray[np.float64]:
        """(C, 2) float: mean x and y of the pixels' centres, in page coordinates (+ 0.5)."""
        length = self.runs.length
        twice_x = self._sum((self.runs.start + self.runs.stop) * length)
        y = self._sum(self.runs.row * length)
        return np.stack((twice_x / 2 / self.area, y / self.area + 0.5), axis=1)

    @cached_property
    def euler(self) -> Ints:
        """(C,) int64: one minus the holes of each component.

        References
        ----------
        S. B. Gray, "Local properties of binary images in two dimensions", IEEE Trans. Computers
        C-20(5), 1971; the numbers are his, counted on runs instead of on 2 x 2 windows.
        """
        return self.n_runs - self.contacts

    @cached_property
    def holes(self) -> Ints:
        """(C,) int64: background holes, the background taken with the other connectivity."""
        return 1 - self.euler

    def keep(self, chosen: NDArray[np.bool_]) -> RunSet:
        """The page with the chosen components only.

        Parameters
        ----------
        chosen : (C,) bool array
        """
        return RunSet(
            self.runs.shape, self.runs.bounds.reshape(-1, 2)[chosen[self.run_label]].ravel()
        )

    def select(self, chosen: NDArray[np.bool_]) -> Components:
        """The chosen components alone, in their order, numbered anew.

        Parameters
        ----------
        chosen : (C,) bool array
        """
        number = np.cumsum(chosen, dtype=np.int32) - 1
        mine = chosen[self.run_label]
        return Components(
            self.keep(chosen),
            number[self.run_label[mine]],
            int(chosen.sum()),
            self.connectivity,
            self.contacts[chosen],
        )

    def touching(self, other: RunSet) -> NDArray[np.bool_]:
        """(C,) bool: which components share a point with another page of the same shape."""
        one_shape((self.runs, other))
        # runs lo..hi-1 of this page overlap each run of the other
        lo = np.searchsorted(self.runs.bounds[1::2], other.bounds[0::2], side="right")
        hi = np.searchsorted(self.runs.bounds[0::2], other.bounds[1::2], side="left")
        depth = np.zeros(self.runs.n_runs + 1, np.int64)
        met = lo < hi
        np.add.at(depth, lo[met], 1)
        np.add.at(depth, hi[met], -1)
        touched = np.zeros(self.n, bool)
        touched[self.run_label[np.cumsum(depth[:-1]) > 0]] = True
        return touched

    @cached_property
    def _by_component(self) -> tuple[Ints, Ints]:
        """Runs ordered by component, and where each component's begin."""
        order = np.argsort(self.run_label, kind="stable")
        first = np.cumsum(self.n_runs) - self.n_runs
        return order, first

    def _sum(self, of_run: Ints) -> Ints:
        # sums of integers below 2**53 are exact in float64
        return np.bincount(self.run_label, weights=of_run, minlength=self.n).astype(np.int64)


def label(a: RunSet, *, connectivity: int = 8) -> Components:
    """Find the connected components of a page.

    Parameters
    ----------
    a : RunSet
    connectivity : {8, 4}
        8 joins points that touch at corners, as ink does; 4 only those that share a side.

    Raises
    ------
    ValueError
        If the connectivity is neither.

    References
    ----------
    Labelling by runs after L. He, Y. Chao and K. Suzuki, "A run-based two-scan labeling
    algorithm", IEEE TIP 17(5), 2008; equivalences are resolved as the components of a graph.
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    if connectivity not in (4, 8):
        raise ValueError(f"connectivity must be 4 or 8, got {connectivity}")
    n = a.n_runs
    if n == 0:
        return Components(a, np.empty(0, np.int32), 0, connectivity, np.empty(0, np.int64))
    # each run touches a stretch lo..hi-1 of the runs one row (W + 1 positions) further on
    start, stop, below = a.bounds[0::2], a.bounds[1::2], a.shape[1] + 1
    corners = connectivity == 8
    lo = np.searchsorted(stop, start + below, side="left" if corners else "right")
    hi = np.searchsorted(start, stop + below, side="right" if corners else "left")
    count = hi - lo
    pointer = np.concatenate(([0], np.cumsum(count)))
    lower = np.arange(pointer[-1]) - np.repeat(pointer[:-1] - lo, count)
    graph = csr_array((np.ones(lower.size, np.int8), lower, pointer), shape=(n, n))
    n_components, run_label = connected_components(graph, directed=False)
    contacts = np.bincount(run_label, weights=count, minlength=n_components).astype(np.int64)
    return Components(a, run_label, int(n_components), connectivity, contacts)
