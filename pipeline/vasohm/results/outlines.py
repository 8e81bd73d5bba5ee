"""Centrelines thinned to what the eye sees, for drawing on a page."""

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray

ROUNDS = 40  # each halves the pieces of a line or ends; a line of 2^40 points is none


def seen_points(x: FloatArray, y: FloatArray, radius: FloatArray, offsets: IntArray, tolerance: float) -> BoolArray:
    """Choose the points that keep every line, and its width, within a tolerance of the whole one.

    Parameters
    ----------
    x, y, radius : of the points (n,), line after line, in one unit.
    offsets : first point of each line, and the number of all points (n_lines + 1,).
    tolerance : how far a point left out may lie from the straight piece in its place.

    Returns
    -------
    Kept points (n,); the two ends of every line are among them. All lines are divided at once, each where it strays
    most from the straight pieces so far.

    References
    ----------
    Douglas DH, Peucker TK. Algorithms for the reduction of the number of points required to represent a digitized
    line. Cartographica 1973;10:112-122. doi:10.3138/FM57-6770-U75U-7727.
    """
    n = len(x)
    kept = np.zeros(n, dtype=bool)
    if not n:
        return kept
    first, last = offsets[:-1], offsets[1:] - 1
    whole = last >= first
    kept[first[whole]] = kept[last[whole]] = True
    place = np.column_stack([x, y, radius])
    open_ = np.flatnonzero(~kept)  # points whose piece is not yet known to be straight
    for _ in range(ROUNDS):
        if not open_.size:
            break
        knots = np.flatnonzero(kept)
        piece = np.searchsorted(knots, open_) - 1
        away = _distance(place[open_], place[knots[piece]], place[knots[piece + 1]])
        begins = np.flatnonzero(np.diff(piece, prepend=-1))
        lengths = np.diff(begins, append=len(piece))
        most = np.repeat(np.maximum.reduceat(away, begins), lengths)
        strays = most > tolerance
        at_most = np.flatnonzero(strays & (away == most))
        kept[open_[at_most[np.flatnonzero(np.diff(piece[at_most], prepend=-1))]]] = True  # the first of equal ones
        open_ = open_[strays & ~kept[open_]]
    return kept


def _distance(point: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Distance (n,) of points from straight pieces, all (n, 3)."""
    along = end - start
    square = np.maximum((along**2).sum(axis=1), np.finfo(float).tiny)
    share = np.clip(((point - start) * along).sum(axis=1) / square, 0.0, 1.0)
    return np.asarray(np.linalg.norm(point - start - share[:, None] * along, axis=1))
