"""The ink ledger: what became of every pixel of a page.

Two laws hold for every ledger. The cleaned ink is what is booked as ink or mended; the thresholded
ink is what is booked as ink, speck, rule, edge or shade. So the thresholded page can always be
given back, bit for bit.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.runs import RunSet, union

__all__ = ["CLAIMS", "CLASSES", "PALETTE", "Ledger"]

CLASSES: Mapping[str, int] = MappingProxyType(
    {"paper": 0, "ink": 1, "mended": 2, "speck": 3, "rule": 4, "edge": 5, "shade": 6}
)
CLAIMS = ("speck", "rule", "edge", "shade")  # the reasons for which ink is taken out

# Colours from the set that colour-blind readers tell apart, published by M. Okabe and K. Ito,
# "Color Universal Design", 2008
PALETTE: tuple[tuple[int, int, int], ...] = (
    (255, 255, 255),  # paper
    (0, 0, 0),  # ink
    (0, 158, 115),  # mended: bluish green
    (213, 94, 0),  # speck: vermillion
    (86, 180, 233),  # rule: sky blue
    (230, 159, 0),  # edge: orange
    (204, 121, 167),  # shade: reddish purple
)


@dataclass(frozen=True)
class Ledger:
    """Claims on the thresholded ink, and what was mended.

    Parameters
    ----------
    thresholded : RunSet
    claims : mapping of str to RunSet
        For each of `CLAIMS` that took anything: disjoint parts of `thresholded`.
    mended : RunSet
        Disjoint from `thresholded`.

    Raises
    ------
    ValueError
        If a claim has no known reason or one of the laws would not hold.
    """

    thresholded: RunSet
    claims: Mapping[str, RunSet]
    mended: RunSet

    def __post_init__(self) -> None:
        unknown = set(self.claims) - set(CLAIMS)
        if unknown:
            raise ValueError(f"a claim is one of {', '.join(CLAIMS)}, got {sorted(unknown)}")
        total = sum(taken.area for taken in self.claims.values())
        if self.taken.area != total:
            raise ValueError("two claims share a pixel")
        if not self.taken <= self.thresholded:
            raise ValueError("a claim reaches beyond the thresholded ink")
        if self.mended & self.thresholded:
            raise ValueError("a mended pixel was thresholded as ink")

    @cached_property
    def taken(self) -> RunSet:
        """All that was taken out."""
        return union(RunSet.empty(self.thresholded.shape), *self.claims.values())

    @cached_property
    def ink(self) -> RunSet:
        """The cleaned page: what was kept, and what was mended."""
        return self.kept | self.mended

    @cached_property
    def kept(self) -> RunSet:
        """The thresholded ink that stays."""
        return self.thresholded - self.taken

    def counts(self) -> dict[str, int]:
        """Pixels by name, paper left out."""
        parts = {"ink": self.kept, "mended": self.mended, **self.claims}
        return {
            name: parts[name].area if name in parts else 0 for name in CLASSES if name != "paper"
        }

    def to_array(self) -> NDArray[np.uint8]:
        """(H, W) uint8 array of `CLASSES`."""
        height, width = self.thresholded.shape
        parts = {"ink": self.kept, "mended": self.mended, **self.claims}
        starts = np.concatenate([part.bounds[0::2] for part in parts.values()])
        stops = np.concatenate([part.bounds[1::2] for part in parts.values()])
        value = np.repeat(
            np.array([CLASSES[name] for name in parts], np.uint8),
            [part.n_runs for part in parts.values()],
        )
        # the parts are disjoint, so sorted by start they and the paper between them fill the page
        order = np.argsort(starts, kind="stable")
        classes = np.zeros(2 * order.size + 1, np.uint8)
        classes[1::2] = value[order]
        bounds = np.stack((starts[order], stops[order]), axis=1).ravel()
        lengths = np.diff(bounds, prepend=0, append=height * (width + 1))
        return np.repeat(classes, lengths).reshape(height, width + 1)[:, :width]

    @classmethod
    def from_array(cls, array: NDArray[np.uint8]) -> Ledger:
        """Read a (H, W) array of `CLASSES`.

        Raises
        ------
        ValueError
            If a value stands for no class.
        """
        if array.size and int(array.max()) >= len(CLASSES):
            raise ValueError(f"{int(array.max())} stands for no class of the ledger")
        present = np.bincount(array.ravel(), minlength=len(CLASSES))
        mended = RunSet.from_mask(array == CLASSES["mended"])
        claims = {
            name: RunSet.from_mask(array == CLASSES[name])
            for name in CLAIMS
            if present[CLASSES[name]]
        }
        thresholded = RunSet.from_mask((array != CLASSES["paper"]) & (array != CLASSES["mended"]))
        return cls(thresholded, claims, mended)
