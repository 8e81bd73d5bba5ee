"""Ridge lines of a bank's response, kept by their summed excess over the noise."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy import ndimage

from vasohm.arrays import AnyArray, BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.image.bank import N_ANGLES, ScaleResponse

RIDGE_STEP_PX = 0.55  # a ridge passes through a pixel if the Newton step to it is no longer than this
LOW_THRESHOLD = 4.1  # in noise units: where a line may begin and end
CLEAR_SHARE, CLEARLY_SEEN = 0.6, 12.0  # of the strongest scale, and in noise units: enough to speak on width
EIGHT = np.ones((3, 3), dtype=int)


@dataclass(frozen=True, slots=True, eq=False)
class RidgePixels:
    """Pixels through which a ridge line passes; x, y are on the ridge, normals point across it."""

    row: IntArray
    column: IntArray
    x_px: FloatArray
    y_px: FloatArray
    normal_x: FloatArray
    normal_y: FloatArray
    sigma_px: FloatArray  # the scale that answered most
    excess: FloatArray  # response minus LOW_THRESHOLD
    line: IntArray  # label of the connected line, from 0
    n_lines: int

    def __post_init__(self) -> None:
        freeze(self)

    def keep(self, which: BoolArray) -> "RidgePixels":
        """Only the chosen pixels, lines numbered anew (a line that falls apart stays one number)."""
        _, line = np.unique(self.line[which], return_inverse=True)
        return RidgePixels(
            self.row[which], self.column[which], self.x_px[which], self.y_px[which], self.normal_x[which],
            self.normal_y[which], self.sigma_px[which], self.excess[which], line.astype(np.int64),
            int(line.max()) + 1 if len(line) else 0,
        )  # fmt: skip


@dataclass(frozen=True, slots=True, eq=False)
class Strength:
    """Merged response of a group of scales on one grid (that of `level`)."""

    level: int
    bright: Float32Array
    dark: Float32Array
    angle: AnyArray
    sigma_px: Float32Array

    def __post_init__(self) -> None:
        freeze(self)


def merge_scales(responses: list[ScaleResponse]) -> Strength:
    """Merge by adjacent pairs of scales, on the finest level among them.

    A pair's mean suppresses what answers at one scale only (speckle); the factor sigma^-1/4 lets a thin line stand
    beside a wide one. Width and angle are those of the scale with the greatest contrast among those that stand well
    above their noise: noise falls with scale, so that the clearest answer to a strong thin vessel is too wide.
    """
    level = min(response.level for response in responses)
    shape = next(response.bright.shape for response in responses if response.level == level)
    bright = [_to_grid(r.bright, shape, 1) for r in responses]
    weight = [np.float32((r.sigma_px / responses[0].sigma_px) ** -0.25) for r in responses]
    best, flipped = weight[0] * bright[0], weight[0] * _to_grid(responses[0].dark, shape, 1)
    if len(responses) > 1:
        dark = [w * _to_grid(r.dark, shape, 1) for w, r in zip(weight, responses, strict=True)]
        weighted = [w * z for w, z in zip(weight, bright, strict=True)]
        best = np.max([a + b for a, b in pairwise(weighted)], axis=0) / 2
        flipped = np.max([a + b for a, b in pairwise(dark)], axis=0) / 2
    clear = np.minimum(CLEAR_SHARE * np.max(bright, axis=0), CLEARLY_SEEN)
    contrast = np.full(shape, -np.inf, np.float32)
    angle, sigma = np.zeros(shape, np.uint8), np.zeros(shape, np.float32)
    for response, strength in zip(responses, bright, strict=True):
        height = np.where(strength >= clear, strength * _to_grid(response.unit, shape, 1), -np.inf)
        higher = height > contrast
        contrast = np.where(higher, height, contrast)
        angle = np.where(higher, _to_grid(response.angle, shape, 0), angle)
        sigma = np.where(higher, np.float32(response.sigma_px), sigma)
    return Strength(level, best, flipped, angle, sigma)


def _to_grid(values: AnyArray, shape: tuple[int, int], order: int) -> AnyArray:
    """Upsample a level to a finer grid; pixel k of a level sits on pixel 2k of the one below."""
    if values.shape == shape:
        return values
    factor = round(shape[0] / values.shape[0])
    if order == 0:
        half = factor // 2
        rows = np.minimum((np.arange(shape[0]) + half) // factor, values.shape[0] - 1)
        columns = np.minimum((np.arange(shape[1]) + half) // factor, values.shape[1] - 1)
        return values[np.ix_(rows, columns)]
    for axis in (0, 1):
        position = np.arange(shape[axis]) / factor
        low = np.minimum(position.astype(np.int64), values.shape[axis] - 1)
        high = np.minimum(low + 1, values.shape[axis] - 1)
        share = (position - low).astype(np.float32)
        share = share[:, None] if axis == 0 else share[None, :]
        values = np.take(values, low, axis) * (1 - share) + np.take(values, high, axis) * share
    return values


def ridge_lines(strength: Float32Array, found: Strength, where: BoolArray) -> RidgePixels:
    """Trace the ridges of `strength` (bright or dark side of `found`) above the low threshold inside `where`."""
    padded = np.pad(strength, 2, mode="edge")
    row, column = np.nonzero((strength > LOW_THRESHOLD) & where)
    theta = np.pi / N_ANGLES * found.angle[row, column]
    normal_x, normal_y = -np.sin(theta), np.cos(theta)
    centre = padded[row + 2, column + 2].astype(np.float64)
    ahead = _at(padded, row + 2 + normal_y, column + 2 + normal_x)
    behind = _at(padded, row + 2 - normal_y, column + 2 - normal_x)
    bend = ahead - 2 * centre + behind
    step = np.where(bend < 0, -(ahead - behind) / (2 * np.where(bend < 0, bend, -1)), np.inf)
    on_ridge = np.abs(step) <= RIDGE_STEP_PX
    row, column, step = row[on_ridge], column[on_ridge], step[on_ridge]
    normal_x, normal_y, centre = normal_x[on_ridge], normal_y[on_ridge], centre[on_ridge]
    grid = np.zeros(strength.shape, dtype=bool)
    grid[row, column] = True
    labels, n_lines = ndimage.label(grid, structure=EIGHT)
    return RidgePixels(
        row.astype(np.int64), column.astype(np.int64), column + step * normal_x, row + step * normal_y,
        normal_x, normal_y, found.sigma_px[row, column].astype(np.float64), centre - LOW_THRESHOLD,
        labels[row, column].astype(np.int64) - 1, int(n_lines),
    )  # fmt: skip


def _at(padded: Float32Array, y: FloatArray, x: FloatArray) -> FloatArray:
    """Bilinear look-up; positions stay inside the padding."""
    row, column = y.astype(np.int64), x.astype(np.int64)
    fy, fx = y - row, x - column
    upper = padded[row, column] * (1 - fx) + padded[row, column + 1] * fx
    lower = padded[row + 1, column] * (1 - fx) + padded[row + 1, column + 1] * fx
    return np.asarray(upper * (1 - fy) + lower * fy, dtype=np.float64)


def summed_excess(lines: RidgePixels) -> FloatArray:
    """Sum the excess of each line: long faint lines and short strong ones count alike."""
    return np.bincount(lines.line, weights=lines.excess, minlength=lines.n_lines)
