"""Baselines and x-heights of groups of letters, all groups at once.

A letter that is wider than an x-height, or a whole word of a running hand, is cut into upright
slices about an x-height wide. Most slices stand on the baseline and end at the x-height; a robust
fit finds both through those that reach below or above.

Glossary: U slices, G groups of letters (pieces of text lines, then text lines). Everything is in
the upright frame (`upright`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.neighbours import grouped_median
from scanclean.text.upright import Shapes

__all__ = ["Baselines", "Slices", "cut_slices", "fit_baselines", "line_x_heights"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_TIGHTENING = (0.6, 0.35, 0.2, 0.12)  # of the letters' height: what counts as near, pass by pass
# What a group's curve is believed to be beforehand, against letters that stand true to a tenth of
# their height: at `_BELIEVED_AT` heights from its middle the slope has made a height, each higher
# term half of one, and nearer by these powers of the distance. A word cannot tell its own slope; a
# whole line can, and its bends too.
_DEGREE = 4
_TRUE = 0.1
_BELIEVED_AT = 50.0
_BELIEVED = np.array([3.0, 1.0, 0.5, 0.5, 0.5])
_BELIEVED_POWER = np.array([0.0, 1.0, 1.3, 1.6, 2.0])
_END_SLOPE = 0.05  # a line runs on beyond its end at most so much steeper than its whole
_BINS = 60
_LOWEST, _HIGHEST = 0.3, 3.3  # heights looked at, of the group's median height
_STRONG = 0.45  # of the most frequent height: what may still be the x-height


@dataclass(frozen=True, eq=False)
class Slices:
    """Upright slices of letters and words; columns of length U.

    Parameters
    ----------
    component : (U,) int array
    x : (U,) float array
        Middle.
    top, bottom : (U,) float array
    """

    component: Ints
    x: Floats
    top: Floats
    bottom: Floats

    def keep(self, chosen: Bools) -> Slices:
        """The chosen slices."""
        return Slices(self.component[chosen], self.x[chosen], self.top[chosen], self.bottom[chosen])


def cut_slices(components: Components, shapes: Shapes, chosen: Bools, *, step: float) -> Slices:
    """Cut the chosen components into slices about `step` wide."""
    frame = shapes.frame
    count = np.where(chosen, np.maximum(np.rint(shapes.width / step), 1), 0).astype(np.int64)
    first = np.cumsum(count) - count
    used = chosen[components.run_label]
    runs, label = components.runs, components.run_label[used]
    left = components.box[:, 0]
    width = components.box[:, 2] - left
    middle = (runs.start[used] + runs.stop[used]) / 2
    piece = ((middle - left[label]) * (count / width)[label]).astype(np.int64)
    slice_ = first[label] + np.minimum(piece, count[label] - 1)
    # runs stand row by row: of those assigned to one slice the last assignment stays
    row = runs.row[used]
    top, bottom = np.full((2, int(count.sum())), -1.0)
    bottom[slice_] = row + 1.0
    top[slice_[::-1]] = row[::-1]
    component = np.repeat(np.arange(components.n), count)
    piece = np.arange(component.size) - first[component]
    x = left[component] + (piece + 0.5) * (width / np.maximum(count, 1))[component]
    some = bottom >= 0  # under a long bar a slice can be without a run of its own
    component, x, top, bottom = component[some], x[some], top[some], bottom[some]
    along, upper = frame.upright(x, top)
    _, lower = frame.upright(x, bottom)
    return Slices(component, along, upper, lower)


@dataclass(frozen=True, eq=False)
class Baselines:
    """A smooth curve under each of G groups, straight beyond its ends.

    Parameters
    ----------
    left, right : (G,) float array
        Where the group begins and ends.
    coefficients : (G, 5) float array
        Of the powers of t, which runs from -1 at the left end to 1 at the right one.
    height : (G,) float array
        Median height of the group's slices over the baseline.
    size : (G,) int array
        Slices in each.
    """

    left: Floats
    right: Floats
    coefficients: Floats
    height: Floats
    size: Ints

    @property
    def n(self) -> int:
        """G."""
        return self.left.size

    def at(self, group: Ints, x: Floats) -> Floats:
        """(P,) y of the baselines of P groups at P places."""
        half = np.maximum((self.right - self.left) / 2, 1.0)[group]
        t = (x - (self.left + self.right)[group] / 2) / half
        inside = np.clip(t, -1, 1)
        a = self.coefficients[group].T
        y = a[4]
        for k in (3, 2, 1, 0):
            y = y * inside + a[k]
        # the tangent at the end, kept near the slope of the whole
        steepest = _END_SLOPE * half
        bend = (2 * a[2] + 4 * a[4]) * np.sign(t) + 3 * a[3]
        beyond: Floats = (a[1] + np.clip(bend, -steepest, steepest)) * (t - inside)
        level: Floats = y + beyond
        return level

    def keep(self, chosen: Bools | Ints) -> Baselines:
        """The chosen groups, by a mask or in an order."""
        return Baselines(
            self.left[chosen],
            self.right[chosen],
            self.coefficients[chosen],
            self.height[chosen],
            self.size[chosen],
        )

    def with_groups(self, other: Baselines) -> Baselines:
        """These groups and then others."""
        return Baselines(
            np.concatenate((self.left, other.left)),
            np.concatenate((self.right, other.right)),
            np.concatenate((self.coefficients, other.coefficients)),
            np.concatenate((self.height, other.height)),
            np.concatenate((self.size, other.size)),
        )


def fit_baselines(
    slices: Slices, group: Ints, n: int, *, scale: float, rough: bool = False
) -> Baselines:
    """Robust curves through the slices' bottoms.

    Least squares first, of a straight line; then again with weights whose scale tightens: what
    reaches below the line ends with hardly any weight.

    Parameters
    ----------
    slices : Slices
    group : (U,) int array
    n : int
        G; every group has a slice.
    scale : float
        The page's x-height.
    rough : bool
        Fewer passes and parabolas at most: enough to tell what belongs together.

    References
    ----------
    Iteratively reweighted least squares: P. W. Holland and R. E. Welsch, "Robust regression using
    iteratively reweighted least-squares", Communications in Statistics A6(9), 1977; the weights
    here are the Cauchy weight squared, and the higher powers are held back as in ridge regression.
    """
    x, y = slices.x, slices.bottom
    left, right = np.full(n, np.inf), np.full(n, -np.inf)
    np.minimum.at(left, group, x)
    np.maximum.at(right, group, x)
    unit = np.maximum(grouped_median(group, n, y - slices.top, scale), 0.5 * scale)
    level = grouped_median(group, n, y, 0.0)
    half = np.maximum((right - left) / 2, 1.0)
    t = (x - (left + right)[group] / 2) / half[group]
    v = (y - level[group]) / unit[group]
    degree = 2 if rough else _DEGREE
    powers = _powers(t, 2 * degree)
    terms = np.arange(degree + 1)
    hankel = terms[:, None] + terms
    far = (half / unit / _BELIEVED_AT)[:, None]
    belief = (_TRUE / (_BELIEVED[terms] * far ** _BELIEVED_POWER[terms])) ** 2
    straight = belief + np.where(terms > 1, 1e9, 0.0)
    fit = np.zeros((n, degree + 1))
    for near in (None, *(_TIGHTENING[1::2] if rough else _TIGHTENING)):
        weight = np.ones_like(t)
        if near is not None:
            residual = v - np.einsum("ku,uk->u", powers[: degree + 1], fit[group])
            weight = 1 / (1 + (residual / near) ** 2) ** 2
        sums = np.stack([np.bincount(group, weight * power, n) for power in powers], axis=1)
        moment = np.stack(
            [np.bincount(group, weight * v * power, n) for power in powers[: degree + 1]], axis=1
        )
        normal = sums[:, hankel]
        normal[:, terms, terms] += straight if near is None else belief
        fit = np.linalg.solve(normal, moment[:, :, None])[:, :, 0]
    coefficients = np.zeros((n, _DEGREE + 1))
    coefficients[:, : degree + 1] = fit * unit[:, None]
    coefficients[:, 0] += level
    lines = Baselines(left, right, coefficients, unit, np.bincount(group, minlength=n))
    height = grouped_median(group, n, lines.at(group, x) - slices.top, scale)
    return Baselines(left, right, coefficients, np.maximum(height, 1.0), lines.size)


def _powers(t: Floats, highest: int) -> Floats:
    """(highest + 1, U) the powers of t from 0."""
    powers = np.empty((highest + 1, t.size))
    powers[0] = 1
    for k in range(highest):
        np.multiply(powers[k], t, out=powers[k + 1])
    return powers


def line_x_heights(slices: Slices, group: Ints, lines: Baselines) -> Floats:
    """(G,) x-height of each group: the lowest height over the baseline that many slices share.

    A group of capitals or figures alone has no such letters; it gives their height.
    """
    n = lines.n
    over = lines.at(group, slices.x) - slices.top
    bins = ((over / lines.height[group] - _LOWEST) * (_BINS / (_HIGHEST - _LOWEST))).astype(
        np.int64
    )
    seen = (bins >= 0) & (bins < _BINS)
    count = np.bincount(group[seen] * _BINS + bins[seen], minlength=n * _BINS).reshape(n, _BINS)
    padded = np.pad(count, ((0, 0), (2, 2)))
    smooth = np.zeros((n, _BINS))
    for k, weight in enumerate((1, 2, 3, 2, 1)):
        smooth += weight * padded[:, k : k + _BINS]
    peak = np.zeros((n, _BINS), bool)
    peak[:, 1:-1] = (smooth[:, 1:-1] >= smooth[:, :-2]) & (smooth[:, 1:-1] >= smooth[:, 2:])
    peak &= smooth >= _STRONG * smooth.max(axis=1, keepdims=True)
    lowest = np.argmax(peak, axis=1)
    height = (_LOWEST + (lowest + 0.5) * (_HIGHEST - _LOWEST) / _BINS) * lines.height
    near = np.abs(over / height[group] - 1) < 0.12
    return grouped_median(group[near], n, over[near], height)
