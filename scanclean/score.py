"""Quality of a cleaned page against a page whose truth is known.

Three families of measures, all on plain arrays with ink True:

- `contest_measures`: those of the document binarization contests, pixel by pixel;
- `match_boxes` and `match_regions`: glyph and word boxes, and text lines, found or not;
- `cleaning_losses`: what cleaning did to ink, rules, small marks and dirt.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "CleaningLosses",
    "ContestMeasures",
    "Matching",
    "box_iou",
    "cleaning_losses",
    "contest_measures",
    "glyphs_broken",
    "match_boxes",
    "match_regions",
    "reciprocal_distance_distortion",
    "share_kept",
]

Mask = NDArray[np.bool_]
Labels = NDArray[np.integer[Any]]

_DRD_REACH = 2  # the distortion of a pixel is weighed over 5 x 5 neighbours
_DRD_BLOCK = 8
_IOU_CELLS = 4_000_000  # boxes are compared in blocks of at most so many pairs, to bound memory


@dataclass(frozen=True)
class ContestMeasures:
    """The measures of the binarization contests.

    Attributes
    ----------
    precision, recall, f_measure : float
        Per cent. 0 where nothing was found or nothing is there.
    psnr : float
        Decibels; infinite for a perfect page.
    drd : float
        Distance reciprocal distortion; nan when the truth is blank or has no mixed block.
    nrm : float
        Negative rate metric, 0 (best) to 1; nan when the truth is all ink or all paper.
    """

    precision: float
    recall: float
    f_measure: float
    psnr: float
    drd: float
    nrm: float


@dataclass(frozen=True)
class Matching:
    """One-to-one pairs between things found and things that are there.

    Attributes
    ----------
    found, truth : int array, shape (P,)
        Indices of the pairs.
    score : float array, shape (P,)
        Their overlap, intersection over union.
    n_found, n_truth : int
    """

    found: NDArray[np.intp]
    truth: NDArray[np.intp]
    score: NDArray[np.float64]
    n_found: int
    n_truth: int

    @property
    def recall(self) -> float:
        """Share of what is there that was found (the contests' detection rate DR)."""
        return len(self.truth) / self.n_truth if self.n_truth else 1.0

    @property
    def precision(self) -> float:
        """Share of what was found that is there (the contests' recognition accuracy RA)."""
        return len(self.found) / self.n_found if self.n_found else 1.0

    @property
    def f1(self) -> float:
        """Harmonic mean of recall and precision (the contests' FM)."""
        total = self.recall + self.precision
        return 2 * self.recall * self.precision / total if total else 0.0


@dataclass(frozen=True)
class CleaningLosses:
    """What cleaning did to a page.

    Attributes
    ----------
    ink_kept : float
        Share of the true ink that is still ink.
    ink_added : float
        Ink where there is neither ink, rule, dirt nor the rim of one, as a share of the true ink.
    rule_left : float
        Share of rule pixels away from ink that are still ink.
    ink_lost_at_rules : float
        Share of the ink on and beside rules that was lost.
    glyphs_hurt, glyphs_broken, glyphs : int
        Glyphs that lost more than a tenth of their ink; that fell into more pieces; all.
    marks_lost, marks : int
        Small marks that lost more than half of their ink; all.
    specks_left, specks : int
        Pieces of dirt, clear of ink, of which more than half is still there; all.
    """

    ink_kept: float
    ink_added: float
    rule_left: float
    ink_lost_at_rules: float
    glyphs_hurt: int
    glyphs_broken: int
    glyphs: int
    marks_lost: int
    marks: int
    specks_left: int
    specks: int


def contest_measures(result: Mask, truth: Mask) -> ContestMeasures:
    """Compare two bitonal pages as the document binarization contests do.

    Parameters
    ----------
    result, truth : bool array, shape (H, W)
        Ink True.

    Returns
    -------
    ContestMeasures

    Raises
    ------
    ValueError
        When the shapes differ.

    References
    ----------
    Pratikakis, Gatos and Ntirogiannis, "ICDAR 2013 document image binarization contest",
    ICDAR 2013, section IV (F-measure, PSNR, DRD). Gatos, Ntirogiannis and Pratikakis, "ICDAR 2009
    document image binarization contest", ICDAR 2009 (NRM).
    """
    result, truth = _pair(result, truth)
    hits = int(np.count_nonzero(result & truth))
    false = int(np.count_nonzero(result)) - hits
    missed = int(np.count_nonzero(truth)) - hits
    paper = truth.size - hits - false - missed
    precision = hits / (hits + false) if hits else 0.0
    recall = hits / (hits + missed) if hits else 0.0
    f_measure = 2 * precision * recall / (precision + recall) if hits else 0.0
    wrong = false + missed
    two_sided = hits + missed > 0 and false + paper > 0
    return ContestMeasures(
        precision=100 * precision,
        recall=100 * recall,
        f_measure=100 * f_measure,
        psnr=10 * math.log10(truth.size / wrong) if wrong else math.inf,
        drd=reciprocal_distance_distortion(result, truth),
        nrm=(missed / (hits + missed) + false / (false + paper)) / 2 if two_sided else math.nan,
    )


def reciprocal_distance_distortion(result: Mask, truth: Mask) -> float:
    """Distance reciprocal distortion (DRD): wrong pixels weigh less beside ink of their own kind.

    Each wrong pixel counts the weights of the pixels of the truth around it, in 5 x 5, that
    differ from what it was turned into; the sum is divided by the number of 8 x 8 blocks of the
    truth that are neither all ink nor all paper.

    Parameters
    ----------
    result, truth : bool array, shape (H, W)
        Ink True.

    Returns
    -------
    float
        nan when the truth has no mixed block.

    Notes
    -----
    As in the contests' published program, neighbours outside the page add nothing and only whole
    blocks are counted.

    References
    ----------
    Lu, Kot and Shi, "Distance-reciprocal distortion measure for binary document images", IEEE
    Signal Processing Letters 11(2), 2004, 228-231.
    """
    result, truth = _pair(result, truth)
    blocks = _mixed_blocks(truth)
    if not blocks:
        return math.nan
    rows, columns = np.nonzero(result != truth)
    turned_into = result[rows, columns]
    steps = np.arange(-_DRD_REACH, _DRD_REACH + 1)
    distance = np.hypot(steps[:, None], steps[None, :])
    weights = np.divide(1.0, distance, out=np.zeros_like(distance), where=distance > 0)
    weights /= weights.sum()
    height, width = truth.shape
    total = 0.0
    for dy in steps:
        for dx in steps:
            y, x = rows + dy, columns + dx
            inside = (y >= 0) & (y < height) & (x >= 0) & (x < width)
            differing = truth[y[inside], x[inside]] != turned_into[inside]
            total += weights[dy + _DRD_REACH, dx + _DRD_REACH] * int(np.count_nonzero(differing))
    return total / blocks


def _mixed_blocks(truth: Mask) -> int:
    size = _DRD_BLOCK
    down, across = truth.shape[0] // size, truth.shape[1] // size
    whole = truth[: down * size, : across * size].reshape(down, size, across, size)
    ink = np.count_nonzero(whole, axis=(1, 3))
    return int(np.count_nonzero((ink > 0) & (ink < size * size)))


def box_iou(first: ArrayLike, second: ArrayLike) -> NDArray[np.float64]:
    """Intersection over union of every box with every other.

    Parameters
    ----------
    first : array_like, shape (A, 4)
    second : array_like, shape (B, 4)
        Boxes ``[left, top, right, bottom]``, right and bottom exclusive.

    Returns
    -------
    float array, shape (A, B)
        0 where a box is empty.
    """
    a = np.asarray(first, np.float64).reshape(-1, 1, 4)
    b = np.asarray(second, np.float64).reshape(1, -1, 4)
    shared = np.minimum(a[..., 2:], b[..., 2:]) - np.maximum(a[..., :2], b[..., :2])
    overlap: NDArray[np.float64] = np.clip(shared, 0, None).prod(axis=-1)
    areas = _area(a) + _area(b)
    union = areas - overlap
    return np.divide(overlap, union, out=np.zeros_like(overlap), where=union > 0)


def _area(box: NDArray[np.float64]) -> NDArray[np.float64]:
    area: NDArray[np.float64] = np.clip(box[..., 2:] - box[..., :2], 0, None).prod(axis=-1)
    return area


def match_boxes(found: ArrayLike, truth: ArrayLike, *, min_iou: float = 0.75) -> Matching:
    """Pair found boxes with true ones, each at most once, the best overlaps first.

    Parameters
    ----------
    found : array_like, shape (A, 4)
    truth : array_like, shape (B, 4)
        Boxes ``[left, top, right, bottom]``, right and bottom exclusive.
    min_iou : float
        A pair overlaps at least so much; above 0.

    Returns
    -------
    Matching

    References
    ----------
    Everingham et al., "The PASCAL visual object classes (VOC) challenge", International Journal
    of Computer Vision 88, 2010, section 4.2 (a true box is found once, at IoU above a limit).
    """
    if not 0 < min_iou <= 1:
        raise ValueError(f"min_iou must be above 0 and at most 1, got {min_iou}")
    first = np.asarray(found, np.float64).reshape(-1, 4)
    second = np.asarray(truth, np.float64).reshape(-1, 4)
    rows, columns, scores = [], [], []
    step = max(1, _IOU_CELLS // max(1, len(second)))
    for start in range(0, len(first), step):
        iou = box_iou(first[start : start + step], second)
        row, column = np.nonzero(iou >= min_iou)
        rows.append(row + start)
        columns.append(column)
        scores.append(iou[row, column])
    none = np.zeros(0)
    return _one_to_one(
        np.concatenate([none.astype(np.intp), *rows]),
        np.concatenate([none.astype(np.intp), *columns]),
        np.concatenate([none, *scores]),
        len(first),
        len(second),
    )


def match_regions(
    found: Labels, truth: Labels, *, points: Mask | None = None, min_score: float = 0.95
) -> Matching:
    """Pair found text lines (or words, or glyphs) with true ones by the ink they share.

    The MatchScore of two regions is the number of points in both over the number in either; a
    pair counts from `min_score` on.

    Parameters
    ----------
    found, truth : int array, shape (H, W)
        1 + the index of the region at each pixel, 0 for none.
    points : bool array, shape (H, W), optional
        The pixels that count; by default those in a true region.
    min_score : float
        Acceptance threshold, above 0. The contests take 0.95 for lines and 0.90 for words.

    Returns
    -------
    Matching
        Its `recall`, `precision` and `f1` are the contests' DR, RA and FM.

    References
    ----------
    Stamatopoulos, Gatos, Louloudis, Pal and Alaei, "ICDAR 2013 handwriting segmentation contest",
    ICDAR 2013, 1402-1406, section III.
    """
    if not 0 < min_score <= 1:
        raise ValueError(f"min_score must be above 0 and at most 1, got {min_score}")
    if found.shape != truth.shape:
        raise ValueError(f"the maps must be of one shape, got {found.shape} and {truth.shape}")
    n_found, n_truth = int(found.max(initial=0)), int(truth.max(initial=0))
    counted = truth > 0 if points is None else points
    first, second = found[counted].astype(np.int64), truth[counted].astype(np.int64)
    pairs, shared = np.unique(first * (n_truth + 1) + second, return_counts=True)
    left, right = pairs // (n_truth + 1), pairs % (n_truth + 1)
    in_found = np.bincount(first, minlength=n_found + 1)
    in_truth = np.bincount(second, minlength=n_truth + 1)
    score = shared / (in_found[left] + in_truth[right] - shared)
    good = (left > 0) & (right > 0) & (score >= min_score)
    # regions without a point on the counted pixels are not there at all
    return _one_to_one(
        left[good] - 1,
        right[good] - 1,
        score[good],
        int(np.count_nonzero(in_found[1:])) + _unseen(found, in_found),
        int(np.count_nonzero(in_truth[1:])),
    )


def _unseen(found: Labels, counted: NDArray[np.int64]) -> int:
    """Number of found regions none of whose pixels are counted: found where nothing is."""
    sizes = np.bincount(found.ravel(), minlength=len(counted))
    return int(np.count_nonzero((sizes[1:] > 0) & (counted[1:] == 0)))


def _one_to_one(
    found: NDArray[np.intp],
    truth: NDArray[np.intp],
    score: NDArray[np.float64],
    n_found: int,
    n_truth: int,
) -> Matching:
    """Choose among candidate pairs, the best scores first, each side at most once."""
    order = np.lexsort((truth, found, -score))
    found, truth, score = found[order], truth[order], score[order]
    kept: list[NDArray[np.intp]] = []
    open_pairs = np.arange(len(found))
    # a pair that comes first for both its sides is one that taking the best first would choose
    while len(open_pairs):
        a, b = found[open_pairs], truth[open_pairs]
        first_a = np.unique(a, return_index=True)[1]
        first_b = np.unique(b, return_index=True)[1]
        chosen = np.intersect1d(first_a, first_b)
        kept.append(open_pairs[chosen])
        clash = np.isin(a, a[chosen]) | np.isin(b, b[chosen])
        open_pairs = open_pairs[~clash]
    taken = np.sort(np.concatenate([np.zeros(0, np.intp), *kept]))
    return Matching(found[taken], truth[taken], score[taken], n_found, n_truth)


def share_kept(cleaned: Mask, regions: Labels) -> NDArray[np.float64]:
    """Share of each region's pixels that are ink on the cleaned page.

    Parameters
    ----------
    cleaned : bool array, shape (H, W)
    regions : int array, shape (H, W)
        1 + the index of the region at each pixel, 0 for none.

    Returns
    -------
    float array, shape (number of regions,)
        nan for a region without a pixel.
    """
    count = int(regions.max(initial=0))
    size = np.bincount(regions.ravel(), minlength=count + 1)[1:].astype(np.float64)
    left = np.bincount(regions[cleaned], minlength=count + 1)[1:].astype(np.float64)
    share = np.full(count, np.nan)
    np.divide(left, size, out=share, where=size > 0)
    return share


def glyphs_broken(cleaned: Mask, ink: Mask, glyphs: Labels, *, min_piece: int = 4) -> Mask:
    """Which glyphs lie in more pieces on the cleaned page than in the truth.

    Parameters
    ----------
    cleaned, ink : bool array, shape (H, W)
        The cleaned page and the true ink.
    glyphs : int array, shape (H, W)
        1 + the index of the glyph at each pixel of ink, 0 for none.
    min_piece : int
        Pieces of which fewer pixels lie on the glyph's true ink are not counted.

    Returns
    -------
    bool array, shape (number of glyphs,)
    """
    return _pieces(cleaned, glyphs, min_piece) > np.maximum(_pieces(ink, glyphs, min_piece), 1)


def _pieces(mask: Mask, glyphs: Labels, min_piece: int) -> NDArray[np.int64]:
    """Number of 8-connected pieces of the mask that lie on each glyph."""
    from scipy import ndimage

    labels, _ = ndimage.label(mask, np.ones((3, 3)))
    on_both = (labels > 0) & (glyphs > 0)
    base = int(labels.max(initial=0)) + 1
    keys = glyphs[on_both].astype(np.int64) * base + labels[on_both]
    pairs, sizes = np.unique(keys, return_counts=True)
    owners = pairs[sizes >= min_piece] // base
    return np.bincount(owners, minlength=int(glyphs.max(initial=0)) + 1)[1:]


def cleaning_losses(
    cleaned: Mask,
    ink: Mask,
    *,
    glyphs: Labels,
    marks: Labels,
    rules: Labels | None = None,
    dirt: Labels | None = None,
    rim: int = 2,
    beside: int = 2,
    hurt: float = 0.1,
) -> CleaningLosses:
    """What cleaning did to ink, rules, marks and dirt, given the truth about each.

    Parameters
    ----------
    cleaned, ink : bool array, shape (H, W)
        The cleaned page and the true ink.
    glyphs, marks : int array, shape (H, W)
        1 + the index of the glyph, or of the small mark, at each pixel of ink; else 0.
    rules, dirt : int array, shape (H, W), optional
        1 + the index of the rule, or of the piece of dirt, at each pixel; else 0.
    rim : int
        Rule pixels and dirt count as clear of ink from more than this many pixels away, and ink
        added counts only from more than this many pixels away from all that is there: where the
        optics mix two things no pixel is right.
    beside : int
        Ink within this many pixels of a rule is beside it.
    hurt : float
        A glyph that loses more than this share of its ink is hurt.

    Returns
    -------
    CleaningLosses
    """
    cleaned, ink = _pair(cleaned, ink)
    rules = np.zeros(ink.shape, np.int32) if rules is None else rules
    dirt = np.zeros(ink.shape, np.int32) if dirt is None else dirt
    rule, near_ink = rules > 0, _grown(ink, rim)
    # dirt lies over rules: what is dirt there is not a rule that was left
    rule_alone = rule & ~near_ink & ~_grown(dirt > 0, rim)
    ink_at_rules = ink & _grown(rule, beside)
    glyph_share, mark_share = share_kept(cleaned, glyphs), share_kept(cleaned, marks)
    alone = share_kept(near_ink | _grown(rule, rim), dirt) == 0
    anything = near_ink | _grown(rule | (dirt > 0), rim)
    return CleaningLosses(
        ink_kept=_share(cleaned, ink, empty=1.0),
        ink_added=int(np.count_nonzero(cleaned & ~anything)) / max(1, int(np.count_nonzero(ink))),
        rule_left=_share(cleaned, rule_alone, empty=0.0),
        ink_lost_at_rules=1 - _share(cleaned, ink_at_rules, empty=1.0),
        glyphs_hurt=int(np.count_nonzero(glyph_share < 1 - hurt)),
        glyphs_broken=int(np.count_nonzero(glyphs_broken(cleaned, ink, glyphs))),
        glyphs=int(np.count_nonzero(~np.isnan(glyph_share))),
        marks_lost=int(np.count_nonzero(mark_share < 0.5)),
        marks=int(np.count_nonzero(~np.isnan(mark_share))),
        specks_left=int(np.count_nonzero(alone & (share_kept(cleaned, dirt) > 0.5))),
        specks=int(np.count_nonzero(alone)),
    )


def _share(cleaned: Mask, region: Mask, *, empty: float) -> float:
    size = int(np.count_nonzero(region))
    return int(np.count_nonzero(cleaned & region)) / size if size else empty


def _grown(mask: Mask, reach: int) -> Mask:
    """The mask and all within so many pixels of it, diagonal steps counting one."""
    from scipy import ndimage

    if reach == 0 or not mask.any():
        return mask
    size = 2 * reach + 1
    return np.asarray(ndimage.maximum_filter(mask, size=size, mode="constant"), bool)


def _pair(result: Mask, truth: Mask) -> tuple[Mask, Mask]:
    result, truth = np.asarray(result, bool), np.asarray(truth, bool)
    if result.shape != truth.shape or result.ndim != 2:
        raise ValueError(f"two pages of one shape are needed, got {result.shape} and {truth.shape}")
    return result, truth
