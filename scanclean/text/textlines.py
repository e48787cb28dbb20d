"""The text lines of a page, found from its letters.

Plan. (1) Letters, the components of a letter's size, are linked to the letter beside them in their
row, where both choose each other: pieces of lines. (2) The pieces give the slope of the lines; if
the page stands more than a little out of true, the frame is turned and (1) done again. (3) Each
piece gets a robust baseline; pieces that continue each other are joined, first across gaps that
the rows above and below do not share, then across those that part cells of a table; gutters
between columns stay. (4) Pieces that stand within a longer line go to it. (5) What is left over
and has the structure of letters is taken as type of another size, and the whole is done with it.

Components then belong to lines by where they stand (`LineSet.assign`), not by how they were found.

Glossary: C components, L lines, S pieces of lines, P points. Everything but the arguments is in
the upright frame (`upright`).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.baselines import cut_slices
from scanclean.text.clutter import is_hair, is_lump
from scanclean.text.lineset import LineSet
from scanclean.text.neighbours import weighted_median
from scanclean.text.pieces import Joining, first_pieces, slope_of_pieces
from scanclean.text.textmeasure import Spread, TextMeasures, measure_spread, measure_text
from scanclean.text.upright import Frame, Shapes, place
from scanclean.units import Resolution

__all__ = ["LineSet", "find_lines"]

Bools = NDArray[np.bool_]

_SMALLEST_BODY = 0.45  # letters, in x-heights
_LARGEST_BODY = 10.0
_RIGHT_SCALE = (0.75, 1.35)  # lines found with a measure further out are looked for again
_SLOPE_TO_TURN = 0.012  # 0.7 degrees: below it rows are found as they stand
_SIZES = 3  # sizes of type that are looked for one after the other
_LETTERS_OF_A_SIZE = 12  # fewer left over are no further size
_LETTERS_OF_A_LINE = 3  # and fewer are no line of one


def find_lines(
    components: Components,
    measures: TextMeasures,
    resolution: Resolution | None = None,
    *,
    skew_degrees: float = 0.0,
    spread: Spread | None = None,
) -> LineSet:
    """The text lines of a page.

    Parameters
    ----------
    components : Components
        Of the ink without edges and rules; dirt may still be there.
    measures : TextMeasures
        Of `textmeasure.measure_text`.
    resolution : Resolution, optional
        Matters where x and y differ.
    skew_degrees : float
        Of the text if it is known; found from the letters otherwise.
    spread : Spread, optional
        If it is known already.
    """
    spread = spread or measure_spread(components)
    slope = float(np.tan(np.radians(skew_degrees)))
    frame = Frame.at(slope, resolution)
    found = LineSet.empty(frame)
    shapes = place(components, spread, frame)
    free = ~(is_lump(components, shapes, measures) | is_hair(components, shapes, measures))
    for _ in range(_SIZES):
        if measures.letters < (_LETTERS_OF_A_SIZE if found.n else 1):
            break
        lines = _lines_of_one_size(components, spread, found, measures, free)
        found = found.with_lines(lines)
        free &= ~_taken(found, place(components, spread, found.frame))
        measures = measure_text(components, resolution, spread=spread, among=free)
    return found


def _lines_of_one_size(
    components: Components, spread: Spread, known: LineSet, measures: TextMeasures, free: Bools
) -> LineSet:
    """Lines of the free components whose letters are about as large as measured."""
    frame, x_height = known.frame, measures.x_height_px
    plain = components.n_runs < 1.25 * (components.box[:, 3] - components.box[:, 1])
    for attempt in range(2):
        for _ in range(3):
            shapes = place(components, spread, frame)
            letters = np.flatnonzero(_bodies(shapes, x_height) & free)
            if letters.size == 0:
                return LineSet.empty(frame)
            n, piece = first_pieces(shapes, letters, x_height)
            turn = slope_of_pieces(shapes, letters, n, piece)
            if known.n or abs(turn) < _SLOPE_TO_TURN:
                break
            frame = Frame((frame.slope + turn) / (1 - frame.slope * turn), frame.aspect)
        chosen = np.zeros(components.n, bool)
        chosen[letters] = True
        slices = cut_slices(components, shapes, chosen, step=1.2 * x_height)
        pieces = Joining(shapes, slices, letters, n, piece, x_height, plain)
        # small type beside large is easily taken for marks of the large, and the other way round
        lines = pieces.to_lines(least=_LETTERS_OF_A_LINE if known.n else 1)
        if lines.n == 0 or attempt:
            break
        on_lines = weighted_median(lines.x_height, lines.baselines.size)
        if _RIGHT_SCALE[0] < on_lines / x_height < _RIGHT_SCALE[1]:
            break
        x_height = on_lines
    return lines


def _taken(lines: LineSet, shapes: Shapes) -> Bools:
    """(C,) which components are letters of the lines: they stand about the middle of one."""
    line = lines.assign(shapes)
    on_line = np.flatnonzero(line >= 0)
    level = lines.levels(line[on_line], shapes.x[on_line], shapes.y[on_line])
    taken = np.zeros(line.size, bool)
    taken[on_line] = (level > -0.3) & (level < 1.2)
    return taken


def _bodies(shapes: Shapes, x_height: float) -> Bools:
    """(C,) which components have the size of letters, not of marks or pictures."""
    sized = (shapes.core >= _SMALLEST_BODY * x_height) & (shapes.core <= _LARGEST_BODY * x_height)
    like_mark = (shapes.width < _SMALLEST_BODY * x_height) & (shapes.core < 0.6 * x_height)
    return sized & ~like_mark
