"""Strips of neighbouring points averaged into one, as the picture's optics need fewer points and better ones."""

from dataclasses import replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.network.jointfit import OFFSET, Observed, Priors
from vasohm.network.strips import Overlaps, Strips

ROWS = 4  # strips in one: over so few px an axis .3 px off by a wave of 50 px widens the blur by less than .2 %


def choose_segments(radius: FloatArray, length: IntArray, usable: BoolArray, most_points: int) -> IntArray:
    """Choose segments, widest first and evenly down the sizes, that hold about `most_points` points."""
    order = np.flatnonzero(usable)[np.argsort(-radius[usable], kind="stable")]
    stride = max(int(np.ceil(length[order].sum() / most_points)), 1)
    return np.sort(order[::stride])


def blocks_of(offsets: IntArray) -> tuple[IntArray, IntArray]:
    """Cut each segment into blocks of `ROWS` points: first point of each, and the offsets of segments among them."""
    counts = np.diff(offsets)
    n_blocks = -(-counts // ROWS)
    block_offsets = np.concatenate([[0], np.cumsum(n_blocks)]).astype(np.int64)
    place = np.arange(block_offsets[-1]) - np.repeat(block_offsets[:-1], n_blocks)
    return np.repeat(offsets[:-1], n_blocks) + ROWS * place, block_offsets


def widest_of_block(values: FloatArray, first: IntArray) -> FloatArray:
    """Give every point (n_points,) the largest value of its block."""
    return np.repeat(np.maximum.reduceat(values, first), np.diff(first, append=len(values)))


def mean_of_block(values: FloatArray, first: IntArray) -> FloatArray:
    """Means (n_blocks, ...) of (n_points, ...) values."""
    counts = np.diff(first, append=len(values)).astype(np.float64)
    return np.asarray(np.add.reduceat(values, first, axis=0) / counts.reshape(-1, *(1,) * (values.ndim - 1)))


def pool(observed: Observed, first: IntArray, block_offsets: IntArray, covariance: FloatArray) -> Observed:
    """Average the strips of each block, weighted; all strips of a block must be equally wide and hold no neighbours.

    Parameters
    ----------
    first, block_offsets : as of `blocks_of`.
    covariance : of pixels of noise by squared distance: rows that share noise average to more than rows that do not.
    """
    n_rows = np.diff(first, append=observed.n_points)
    block = np.repeat(np.arange(len(first)), n_rows)
    used = np.bincount(block, observed.row_scale > 0, len(first))
    lag = np.arange(1, ROWS)
    shared = np.array([1.0 + 2.0 * np.sum(np.clip(1 - lag / n, 0, None) * covariance[lag**2]) / covariance[0]
                       for n in range(1, ROWS + 1)])  # fmt: skip
    scale = np.bincount(block, observed.row_scale, len(first)) / np.maximum(used, 1)
    scale *= shared[np.clip(used.astype(np.int64) - 1, 0, ROWS - 1)]
    strips, weights = [], []
    for rows, w in zip(observed.strips, observed.weights, strict=True):
        start = np.flatnonzero(np.diff(block[rows.points], prepend=-1))
        total = np.add.reduceat(w, start, axis=0)
        light = np.add.reduceat(w * rows.y, start, axis=0)
        y = np.divide(light, total, out=np.zeros_like(light), where=total > 0)
        members = block[rows.points[start]]
        strips.append(Strips(rows.half_width, members, y, np.add.reduceat(rows.precision, start, axis=0)))
        weights.append(total)
    segment = np.repeat(np.arange(observed.n_segments), np.diff(block_offsets))
    nothing = tuple(Overlaps.nothing() for _ in strips)
    return Observed(block_offsets, segment, tuple(strips), nothing, tuple(weights), scale)


def spaced(priors: Priors) -> Priors:
    """Return priors that were made for points 1 px apart as they are for points `ROWS` px apart."""
    spacing = np.full(priors.hold.shape[1], 1.0 / ROWS)
    spacing[OFFSET] = 1.0 / ROWS**3  # a bend; all others are steps
    return replace(priors, diagonals=priors.diagonals * spacing, bend=priors.bend / ROWS**3)
