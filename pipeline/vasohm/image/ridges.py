"""Ridge lines of a bank's response, kept by their summed excess over the noise."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse

from vasohm.arrays import AnyArray, BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.image.bank import N_ANGLES, ScaleResponse

RIDGE_STEP_PX = 0.55  # a ridge passes through a pixel if the Newton step to it is no longer than this
LOW_THRESHOLD = 3.8  # in noise units: where a line may begin and end
JOIN_THRESHOLD = 3.2  # in noise units: weaker places break a line
CHUNK = 100_000  # pixels looked at together
CLEAR_SHARE, CLEARLY_SEEN = 0.6, 12.0  # of the strongest scale, and in noise units: enough to speak on width


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
    """Merged response of a group of scales on one grid (that of `level`), and the scales it came from."""

    level: int
    bright: Float32Array
    dark: Float32Array
    scales: tuple[ScaleResponse, ...]

    def __post_init__(self) -> None:
        freeze(self)


def merge_scales(responses: Sequence[ScaleResponse]) -> Strength:
    """Merge by adjacent pairs of scales, on the finest level among them.

    A pair's mean suppresses what answers at one scale only (speckle); the factor sigma^-1/4 lets a thin line stand
    beside a wide one.
    """
    level = min(response.level for response in responses)
    shape = next(response.bright.shape for response in responses if response.level == level)
    weights = [np.float32((r.sigma_px / responses[0].sigma_px) ** -0.25) for r in responses]
    sides = []
    for side in ("bright", "dark"):
        finer = weights[0] * _to_grid(getattr(responses[0], side), shape)
        best = finer.copy() if len(responses) == 1 else np.full(shape, -np.inf, np.float32)
        for response, weight in zip(responses[1:], weights[1:], strict=True):
            wider = weight * _to_grid(getattr(response, side), shape)
            finer += wider
            finer *= np.float32(0.5)
            np.maximum(best, finer, out=best)
            finer = wider
        sides.append(best)
    return Strength(level, sides[0], sides[1], tuple(responses))


def _to_grid(values: Float32Array, shape: tuple[int, ...]) -> Float32Array:
    """Upsample a level to a finer grid; pixel k of a level sits on pixel 2k of the one below."""
    while values.shape != shape:
        factor = round(shape[0] / values.shape[0])
        finer = tuple(-(-n // (factor // 2)) for n in shape)
        for axis in (0, 1):
            values = _doubled(values, finer[axis], axis)
    return values


def _doubled(values: Float32Array, n: int, axis: int) -> Float32Array:
    """Twice as many samples along one axis, the new ones on the cubic through the four nearest of the old.

    Straight lines between the old samples would have no ridge on the new ones, and lines would break there.
    """
    values = np.moveaxis(values, axis, 0)
    finer = np.empty((n, *values.shape[1:]), np.float32)
    finer[::2] = values
    around = np.concatenate((values[:1], values, values[-1:], values[-1:]))
    between = around[1:-2] + around[2:-1]
    between *= np.float32(9)
    between -= around[:-3]
    between -= around[3:]
    between *= np.float32(1 / 16)
    finer[1::2] = between[: n // 2]
    return np.moveaxis(finer, 0, axis)


def _scale_and_angle(found: Strength, row: IntArray, column: IntArray) -> tuple[FloatArray, AnyArray]:
    """Width and angle at some pixels: of the scale with the greatest contrast of those well above their noise.

    Noise falls with scale, so that the clearest answer to a strong thin vessel is too wide.
    """
    strength, contrast, angle = [], [], []
    for response in found.scales:
        factor = 2 ** (response.level - found.level)
        near_row = np.minimum((row + factor // 2) // factor, response.bright.shape[0] - 1)
        near_column = np.minimum((column + factor // 2) // factor, response.bright.shape[1] - 1)
        strength.append(response.bright[near_row, near_column])
        contrast.append(response.contrast_at(near_row, near_column))
        angle.append(response.angle[near_row, near_column])
    clear = np.minimum(CLEAR_SHARE * np.max(strength, axis=0), CLEARLY_SEEN)
    best = np.argmax(np.where(np.array(strength) >= clear, contrast, -np.inf), axis=0)
    sigma = np.array([response.sigma_px for response in found.scales])
    return sigma[best], np.take_along_axis(np.array(angle), best[None], 0)[0]


def ridge_lines(strength: Float32Array, found: Strength, where: BoolArray) -> RidgePixels:
    """Trace the ridges of `strength` (bright or dark side of `found`) above the low threshold inside `where`.

    Lines are joined over weak places where both gain more than the join costs them.
    """
    padded = np.pad(strength, 2, mode="edge")
    row, column = np.nonzero((strength > JOIN_THRESHOLD) & where)
    found_at = [
        _on_ridge(padded, found, row[i : i + CHUNK], column[i : i + CHUNK]) for i in range(0, len(row) or 1, CHUNK)
    ]
    row, column, x_px, y_px, normal_x, normal_y, sigma, excess = (
        np.concatenate(part) for part in zip(*found_at, strict=True)
    )
    line = _joined(neighbours(strength.shape, row, column), excess)
    n_lines = int(line.max(initial=-1)) + 1
    lines = RidgePixels(row, column, x_px, y_px, normal_x, normal_y, sigma, excess, line, n_lines)
    return lines.keep(line >= 0)


def _on_ridge(padded: Float32Array, found: Strength, row: IntArray, column: IntArray) -> tuple[AnyArray, ...]:
    """Those of some pixels through which a ridge passes: row, column, x, y, normal, scale, excess."""
    sigma, angle = _scale_and_angle(found, row, column)
    normal_x, normal_y = -np.sin(np.pi / N_ANGLES * angle), np.cos(np.pi / N_ANGLES * angle)
    centre = padded[row + 2, column + 2].astype(np.float64)
    ahead = _at(padded, row + 2 + normal_y, column + 2 + normal_x)
    behind = _at(padded, row + 2 - normal_y, column + 2 - normal_x)
    bend = ahead - 2 * centre + behind
    step = np.where(bend < 0, -(ahead - behind) / (2 * np.where(bend < 0, bend, -1)), np.inf)
    here = np.abs(step) <= RIDGE_STEP_PX
    row, column, step, normal_x, normal_y = (part[here] for part in (row, column, step, normal_x, normal_y))
    x_px, y_px, excess = column + step * normal_x, row + step * normal_y, centre[here] - LOW_THRESHOLD
    return row, column, x_px, y_px, normal_x, normal_y, sigma[here], excess


def _joined(pairs: IntArray, excess: FloatArray) -> IntArray:
    """Number of the line that each ridge pixel belongs to, -1 for weak pixels that join nothing.

    Strong pixels that touch are a line. Weak ones that touch are a bridge; it costs what its pixels lack. Lines are
    joined over it whose summed excess is more than that cost, if there are two.
    """
    strong = excess > 0
    same = strong[pairs[:, 0]] == strong[pairs[:, 1]]
    n_pieces, piece = connected(pairs[same], len(excess))
    total = np.bincount(piece, weights=excess, minlength=n_pieces)
    is_line = np.bincount(piece, weights=strong, minlength=n_pieces) > 0
    ends = pairs[~same]
    ends = np.where(strong[ends[:, :1]], ends, ends[:, ::-1])
    touching = np.unique(piece[ends], axis=0).reshape(-1, 2)  # (line, bridge)
    worth = total[touching[:, 0]] + total[touching[:, 1]] > 0
    useful = np.bincount(touching[worth, 1], minlength=n_pieces) > 1
    worth &= useful[touching[:, 1]]
    _, line = connected(touching[worth], n_pieces)
    return np.where(is_line | useful, line, -1)[piece]


def connected(pairs: IntArray, n: int) -> tuple[int, IntArray]:
    """How many pieces n pixels fall into, and the number of each pixel's."""
    graph = sparse.coo_array((np.ones(len(pairs), dtype=bool), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    count, label = sparse.csgraph.connected_components(graph, directed=False)
    return int(count), label.astype(np.int64)


def neighbours(shape: tuple[int, ...], row: IntArray, column: IntArray) -> IntArray:
    """Pairs of chosen pixels that touch, (n_pairs, 2)."""
    number = np.full((shape[0] + 2, shape[1] + 2), -1, dtype=np.int32)
    here = np.arange(len(row))
    number[row + 1, column + 1] = here
    pairs = []
    for down, right in ((0, 1), (1, -1), (1, 0), (1, 1)):
        other = number[row + 1 + down, column + 1 + right]
        pairs.append(np.column_stack((here[other >= 0], other[other >= 0])))
    return np.concatenate(pairs).astype(np.int64)


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
