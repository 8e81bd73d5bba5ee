"""First guesses of radius, contrast and offset along each centreline, by comparing strips with a bank of profiles."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray, freeze
from vasohm.network.profiles import ProfileTable, ln_area, tube_strips
from vasohm.network.strips import CHUNK, Frame, Owners, Picture, TubeLines, find_overlaps, sample_strips

EVERY = 4  # a guess each so many points
SEARCH = (0.4, 2.5)  # radii looked for, in seed radii
RADIUS_STEP = 0.08  # of ln r in the bank
OFFSETS_PX = np.array([-1.5, -0.75, 0.0, 0.75, 1.5])
WINDOW_PX, WINDOW_RADII = 9.0, 3.0  # strips averaged for a guess: the longer of the two


@dataclass(frozen=True, slots=True, eq=False)
class Guess:
    """Starting values at every point."""

    ln_r: FloatArray  # (n_points,)
    ln_contrast: FloatArray
    ln_photometric: FloatArray  # ln of the area under the profile: known where radius and contrast are not
    offset_px: FloatArray
    level: FloatArray
    detected: FloatArray  # score in standard deviations of the noise

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Windows:
    """Means of neighbouring strips of equal width, and the sums of their weights."""

    half_width: int
    points: IntArray  # (n,)
    mean: FloatArray  # (n, 2 half_width + 1)
    weight: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


def average_strips(
    picture: Picture, frame: Frame, lines: TubeLines, table: ProfileTable, owners: Owners
) -> tuple[Windows, ...]:
    """Average strips along every segment, leaving out samples that lie on other segments."""
    n, shape = lines.n_points, picture.precision.shape
    seed = np.maximum(lines.seed_radius_px, 0.5)
    typical = segment_quantile(seed, lines.offsets, 0.8)
    s = table.optics.s_px
    half = np.minimum(np.ceil(2.2 * typical + 3 * s + 3), table.half_px - 3)[frame.segment]
    rows = np.flatnonzero((np.arange(n) - lines.offsets[frame.segment]) % 2 == 0)
    windows = []
    for strips in sample_strips(picture, frame, half[rows], rows):
        overlaps = find_overlaps(strips, frame, lines, owners, (shape[0], shape[1]))
        weights = strips.precision.copy()
        covered = np.abs(overlaps.distance_px) < seed[overlaps.point] + s
        weights.reshape(-1)[overlaps.sample[covered]] = 0.0
        for low, high in _whole_segments(frame.segment[strips.points]):
            part = slice(low, high)
            means = _windows(strips.points[part], strips.y[part], weights[part], frame, seed)
            windows.append(Windows(strips.half_width, *means))
    return tuple(windows)


def guess_radii(windows: tuple[Windows, ...], frame: Frame, lines: TubeLines, table: ProfileTable) -> Guess:
    """Guess radius, contrast and offset at every point."""
    seed = np.maximum(lines.seed_radius_px, 0.5)
    found = np.full((5, lines.n_points), np.nan)
    for some in windows:
        found[:, some.points] = _match(table, some.half_width, some.mean, some.weight, seed[some.points])
    return _spread(found, table, lines, frame, seed)


def segment_quantile(values: FloatArray, offsets: IntArray, q: float) -> FloatArray:
    """Quantile (nearest rank) of (n_points,) values in each segment."""
    counts = np.diff(offsets)
    segment = np.repeat(np.arange(len(counts)), counts)
    order = np.lexsort((values, segment))
    return np.asarray(values[order][offsets[:-1] + np.floor(q * np.maximum(counts - 1, 0)).astype(np.int64)])


def _whole_segments(segment: IntArray) -> list[tuple[int, int]]:
    """Cut rows into pieces of about CHUNK that end where segments end."""
    ends = np.flatnonzero(np.diff(segment, append=-1)) + 1
    pieces, low = [], 0
    while low < len(segment):
        k = min(int(np.searchsorted(ends, low + CHUNK)), len(ends) - 1)
        pieces.append((low, int(ends[k])))
        low = int(ends[k])
    return pieces


def _windows(
    points: IntArray, y: AnyArray, weight: AnyArray, frame: Frame, seed: FloatArray
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Weighted means of strips around every `EVERY`-th point: its index, mean (n, samples) and weight."""
    segment = frame.segment[points]
    starts = np.flatnonzero(np.diff(segment, prepend=-1))
    first = np.repeat(starts, np.diff(starts, append=len(points)))
    last = np.repeat(np.append(starts[1:], len(points)), np.diff(starts, append=len(points)))
    row = np.arange(len(points))
    centre = row[(row - first) % (EVERY // 2) == 0]
    reach = np.ceil(np.maximum(WINDOW_PX, WINDOW_RADII * seed[points[centre]]) / 4).astype(np.int64)
    low, high = np.maximum(centre - reach, first[centre]), np.minimum(centre + reach + 1, last[centre])
    total_w = np.vstack([np.zeros(y.shape[1]), np.cumsum(weight, axis=0, dtype=np.float64)])
    total_y = np.vstack([np.zeros(y.shape[1]), np.cumsum(weight * y, axis=0, dtype=np.float64)])
    w = np.maximum(total_w[high] - total_w[low], 0.0)
    w[w < 1e-6 * w.max(initial=0.0)] = 0.0
    mean = np.divide(total_y[high] - total_y[low], w, out=np.zeros_like(w), where=w > 0)
    # rows stand 2 px apart: each strip stands for two
    return points[centre], mean, 2.0 * w


def _match(table: ProfileTable, half_width: int, y: FloatArray, w: FloatArray, seed: FloatArray) -> FloatArray:
    """Best profile of the bank for each strip: (5, n) ln r, ln area, offset, level, score; NaN where none fits."""
    s = table.optics.s_px
    widest = max(half_width - 2 * s - 1, 1.0)
    low, high = np.log(SEARCH[0] * seed.min()), np.log(min(SEARCH[1] * seed.max(), widest))
    ln_r = np.arange(low, max(high, low + RADIUS_STEP) + RADIUS_STEP, RADIUS_STEP)
    bank_r, bank_d = (a.ravel() for a in np.meshgrid(ln_r, OFFSETS_PX, indexing="ij"))
    bank = tube_strips(table, half_width, bank_r, -ln_area(table.optics, bank_r)[0], bank_d)[:, 0].astype(np.float64)
    x = np.arange(-half_width, half_width + 1.0)
    wx, wy = w * x, w * y
    s0, s1, s2 = w.sum(axis=1), wx.sum(axis=1), (wx * x).sum(axis=1)
    det = s0 * s2 - s1**2
    fits = det > 1e-9 * s0 * s2
    det = np.where(fits, det, 1.0)
    t0, t1 = w @ bank.T, wx @ bank.T
    y0, y1 = wy.sum(axis=1), (wy * x).sum(axis=1)
    base0, base1 = (s2 * y0 - s1 * y1) / det, (s0 * y1 - s1 * y0) / det
    top = wy @ bank.T - t0 * base0[:, None] - t1 * base1[:, None]
    ratio0, ratio1, ratio2 = ((v / det)[:, None] for v in (s2, s1, s0))
    norm = w @ (bank**2).T - (t0 * (t0 * ratio0 - t1 * ratio1) + t1 * (t1 * ratio2 - t0 * ratio1))
    away = np.abs(bank_r - np.log(seed)[:, None] - np.log(SEARCH[0] * SEARCH[1]) / 2)
    allowed = (away <= np.log(SEARCH[1] / SEARCH[0]) / 2 + RADIUS_STEP) & (norm > 1e-3 * np.max(norm, initial=0.0))
    score = np.where(allowed & (top > 0), top / np.sqrt(np.where(norm > 0, norm, 1.0)), 0.0)
    row, best = np.arange(len(y)), np.argmax(score, axis=1)
    found = fits & (score[row, best] > 0)
    area = np.where(found, top[row, best] / np.where(found, norm[row, best], 1.0), np.nan)
    q0, q1 = y0 - area * t0[row, best], y1 - area * t1[row, best]
    out = np.stack([bank_r[best], np.log(area), bank_d[best], (s2 * q0 - s1 * q1) / det, score[row, best]])
    return np.where(found, out, np.nan)


def _spread(found: FloatArray, table: ProfileTable, lines: TubeLines, frame: Frame, seed: FloatArray) -> Guess:
    """Medians of five neighbouring guesses, drawn out linearly to all points."""
    n = lines.n_points
    at = np.flatnonzero(np.isfinite(found[0]))
    ln_r, area, offset, level, score = (np.zeros(n) for _ in range(5))
    ln_r[:] = np.log(seed)
    area[:] = ln_area(table.optics, ln_r)[0] - 20.0
    if len(at):
        own = frame.segment[at]
        first = np.searchsorted(own, own, side="left")
        last = np.searchsorted(own, own, side="right") - 1
        around = np.clip(np.arange(len(at))[:, None] + np.arange(-2, 3), first[:, None], last[:, None])
        smooth = np.median(found[:, at][:, around], axis=2)
        some, drawn = draw_along(smooth, at, frame.segment)
        for target, values in zip((ln_r, area, offset, level, score), drawn, strict=True):
            target[some] = values
    contrast = area - ln_area(table.optics, ln_r)[0]
    return Guess(ln_r, contrast, area, offset, level, score)


def draw_along(values: FloatArray, at: IntArray, segment: IntArray) -> tuple[BoolArray, FloatArray]:
    """Draw values (k, n_known) at points `at` out linearly along each segment, constant beyond its outermost.

    Returns
    -------
    (n_points,) whether a point's segment has any value, and (k, n_such_points).
    """
    own = segment[at]
    first, last = np.searchsorted(own, segment, side="left"), np.searchsorted(own, segment, side="right")
    some = last > first
    key = np.arange(len(segment)) + (len(segment) + 10.0) * segment  # far apart, so that segments do not mix
    place = np.clip(key[some], key[at[first[some]]], key[at[last[some] - 1]])
    return some, np.array([np.interp(place, key[at], row) for row in values]).reshape(len(values), len(place))


def bridge(theta: FloatArray, usable: BoolArray, segment: IntArray) -> FloatArray:
    """Give points whose strips are not usable what their neighbours along the segment start from."""
    out = theta.copy()
    if usable.any():
        some, drawn = draw_along(theta[usable].T, np.flatnonzero(usable), segment)
        out[some] = drawn.T
    return out
