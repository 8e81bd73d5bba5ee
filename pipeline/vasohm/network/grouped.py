"""The fit of tubes in a large picture: what it shares is learnt from some windows, then group after group is fitted.

A group holds the lines of one place, seen with what lies beside them. Long lines are cut: a radius is told by what is
within some tens of pixels along its vessel.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy import ndimage

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.image.blocks import kept_on_disk, release
from vasohm.network.learn import TubeSettings
from vasohm.network.paths import offsets_of, owner
from vasohm.network.posterior import BandedCovariance
from vasohm.network.strips import TubeLines
from vasohm.network.tubes import Told, TubeFit, TubeImage, fit_tubes, learn_tubes

GROUP_PX = 2048  # edge of the place whose lines are fitted together
LONGEST_POINTS = 1024  # of a line that is fitted in one piece
SAMPLE_PX, MOST_SAMPLES = 1000, 9  # windows that are asked for what the picture shares
LEAST_SAMPLE_POINTS = 12  # of a piece of line there
SAMPLE_INSET_PX = 16.0  # lines end so far inside a window, for windows of other places lie beside it
BESIDE_PX, BESIDE_RADII = 48.0, 4.0  # so far beside its lines a group sees others, and the picture
CELL_PX = 16
LEAST_POINTS = 4  # of a piece of another line that is seen beside


@dataclass(frozen=True, slots=True, eq=False)
class GroupedCovariance:
    """Covariance of ln r along lines that were fitted in groups; pieces of one line are independent."""

    parts: tuple[tuple[BandedCovariance, IntArray, IntArray], ...]  # with each its points and the line of its pieces
    n_segments: int

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        variance = np.zeros(self.n_segments)
        for covariance, points, line in self.parts:
            own = np.where(points >= 0, gradient[points], 0.0)
            np.add.at(variance, line, covariance.segment_variance(own)[: len(line)])
            release(covariance.factored, covariance.doubt.move)
        return variance


@dataclass(frozen=True, slots=True, eq=False)
class _Cut:
    """Some points of the whole as lines of their own: their numbers, offsets, line of each piece, nodes of its ends."""

    points: IntArray
    offsets: IntArray
    line: IntArray
    node_a: IntArray
    node_b: IntArray

    def __post_init__(self) -> None:
        freeze(self)

    def seen(self, lines: TubeLines, x: FloatArray, y: FloatArray) -> TubeLines:
        """Return the lines at other coordinates (of all points)."""
        return TubeLines(
            x[self.points], y[self.points], self.offsets, lines.seed_radius_px[self.points],
            lines.vessel_class[self.line], self.node_a, self.node_b,
        )  # fmt: skip

    def choose(self, pieces: IntArray) -> "_Cut":
        counts = np.diff(self.offsets)[pieces]
        offsets = offsets_of(counts)
        points = np.repeat(self.offsets[pieces] - offsets[:-1], counts) + np.arange(offsets[-1])
        return _Cut(self.points[points], offsets, self.line[pieces], self.node_a[pieces], self.node_b[pieces])

    def joined(self, other: "_Cut") -> "_Cut":
        def both(name: str) -> IntArray:
            return np.concatenate((getattr(self, name), getattr(other, name)))

        offsets = np.concatenate((self.offsets, self.offsets[-1] + other.offsets[1:]))
        return _Cut(both("points"), offsets, both("line"), both("node_a"), both("node_b"))


def fit_in_groups(
    image: TubeImage, lines: TubeLines, settings: TubeSettings
) -> tuple[TubeFit, BandedCovariance | GroupedCovariance]:
    """Measure the radius at every point of every line of a picture whose arrays lie on disk.

    Parameters
    ----------
    image, lines, settings : as in `fit_tubes`.

    Returns
    -------
    As `fit_tubes`, but for the covariance, which comes by itself. Blur, profile, noise and contrast are those of up to
    nine windows of a megapixel.
    """
    if lines.n_points == 0:
        nothing = fit_tubes(image, lines, settings)
        return nothing, nothing.covariance
    segment = owner(lines.offsets)
    sample, pasted = _sample(image, lines, segment)
    told = learn_tubes(sample, pasted, settings, np.unique(lines.vessel_class))
    pieces = _cut_where(lines, segment, np.arange(lines.n_points), LONGEST_POINTS)
    fits: list[tuple[_Cut, int, TubeFit]] = []
    for own, beside in _groups(lines, segment, pieces):
        everything = own.joined(beside)
        fit = _fit_group(image, lines, settings, (everything, told))
        n_own = int(own.offsets[-1])
        fits.append((everything, n_own, _trimmed(fit, n_own)))
    return _put_together(lines, fits)


def _put_together(lines: TubeLines, fits: list[tuple[_Cut, int, TubeFit]]) -> tuple[TubeFit, GroupedCovariance]:
    first = fits[0][2]
    into = np.concatenate([cut.points[:n_own] for cut, n_own, _ in fits])

    def whole(name: str) -> FloatArray:
        parts = [getattr(fit, name) for _, _, fit in fits]
        values = np.empty((lines.n_points, *parts[0].shape[1:]), parts[0].dtype)
        values[into] = np.concatenate(parts)
        return values

    parts = []
    for cut, n_own, fit in fits:
        n_pieces = int(np.searchsorted(cut.offsets, n_own))
        points = np.where(np.arange(len(cut.points)) < n_own, cut.points, -1)
        parts.append((fit.covariance, points, cut.line[:n_pieces]))
    together = replace(
        first,
        ln_radius=whole("ln_radius"),
        ln_radius_random_se=whole("ln_radius_random_se"),
        contrast=whole("contrast"),
        offset_px=whole("offset_px"),
        point_flags=whole("point_flags"),
        shared=whole("shared"),
    )
    return together, GroupedCovariance(tuple(parts), lines.n_segments)


def _trimmed(fit: TubeFit, n_own: int) -> TubeFit:
    """Keep a group's own points, and its covariance on disk."""
    held = fit.covariance
    doubt = replace(held.doubt, move=kept_on_disk(held.doubt.move))
    return replace(
        fit,
        ln_radius=fit.ln_radius[:n_own].copy(),
        ln_radius_random_se=fit.ln_radius_random_se[:n_own].copy(),
        contrast=fit.contrast[:n_own].copy(),
        offset_px=fit.offset_px[:n_own].copy(),
        point_flags=fit.point_flags[:n_own].copy(),
        covariance=replace(held, factored=kept_on_disk(held.factored), doubt=doubt),
        shared=fit.shared[:n_own].copy(),
    )


# --- groups ---------------------------------------------------------------------------------------------------------


def _cut_where(lines: TubeLines, segment: IntArray, points: IntArray, longest: int) -> _Cut:
    """Make lines of chosen points (ascending): of each run along one segment, in equal pieces of at most so many.

    An end of a piece that is no end of its segment meets nothing: it has a node of its own.
    """
    own = segment[points]
    starts = np.flatnonzero(np.r_[True, (np.diff(points) != 1) | (np.diff(own) != 0)])
    counts = np.diff(np.append(starts, len(points)))
    n_parts = -(-counts // longest)
    part = np.arange(n_parts.sum()) - np.repeat(np.cumsum(n_parts) - n_parts, n_parts)
    begin = np.repeat(starts, n_parts) + np.repeat(counts, n_parts) * part // np.repeat(n_parts, n_parts)
    offsets = np.append(begin, len(points)).astype(np.int64)
    line = own[begin]
    first, last = points[begin], points[offsets[1:] - 1]
    spare = int(max(lines.node_a.max(initial=0), lines.node_b.max(initial=0))) + 1
    number = np.arange(len(begin))
    node_a = np.where(first == lines.offsets[line], lines.node_a[line], spare + 2 * number)
    node_b = np.where(last == lines.offsets[line + 1] - 1, lines.node_b[line], spare + 2 * number + 1)
    return _Cut(points, offsets, line, node_a, node_b)


def _groups(lines: TubeLines, segment: IntArray, pieces: _Cut) -> Iterator[tuple[_Cut, _Cut]]:
    """Pieces that are fitted together, by place, and the pieces of others that lie beside them."""
    middle = pieces.points[(pieces.offsets[:-1] + pieces.offsets[1:]) // 2]
    row, column = ((v[middle] // GROUP_PX).astype(np.int64) for v in (lines.y_px, lines.x_px))
    place = row * (int(column.max()) + 1) + column
    order = np.argsort(place, kind="stable")
    for members in np.split(order, np.flatnonzero(np.diff(place[order])) + 1):
        own = pieces.choose(members)
        near = _points_beside(lines, own)
        beside = _cut_where(lines, segment, near, lines.n_points)
        yield own, beside.choose(np.flatnonzero(np.diff(beside.offsets) >= LEAST_POINTS))


def _points_beside(lines: TubeLines, own: _Cut) -> IntArray:
    """Points of other pieces (ascending) within reach of a group's own, to a cell's width."""
    reach = _reach(lines, own)
    x, y = lines.x_px[own.points], lines.y_px[own.points]
    left, top = x.min() - reach - CELL_PX, y.min() - reach - CELL_PX
    n_x, n_y = (int((v.max() - low + reach) // CELL_PX) + 2 for v, low in ((x, left), (y, top)))
    covered: BoolArray = np.zeros((n_y, n_x), dtype=bool)
    covered[((y - top) // CELL_PX).astype(np.int64), ((x - left) // CELL_PX).astype(np.int64)] = True
    width = 2 * int(np.ceil(reach / CELL_PX)) + 1
    covered = ndimage.maximum_filter(covered, size=width)
    at_x, at_y = (lines.x_px - left) // CELL_PX, (lines.y_px - top) // CELL_PX
    near = np.flatnonzero((at_x >= 0) & (at_x < n_x) & (at_y >= 0) & (at_y < n_y))
    near = near[covered[at_y[near].astype(np.int64), at_x[near].astype(np.int64)]]
    return np.setdiff1d(near, own.points, assume_unique=True)


def _reach(lines: TubeLines, own: _Cut) -> float:
    return BESIDE_PX + BESIDE_RADII * float(lines.seed_radius_px[own.points].max())


def _fit_group(image: TubeImage, lines: TubeLines, settings: TubeSettings, group: tuple[_Cut, Told]) -> TubeFit:
    cut, told = group
    reach = int(_reach(lines, cut))
    bounds = []
    for values, n in ((lines.y_px[cut.points], image.signal.shape[0]), (lines.x_px[cut.points], image.signal.shape[1])):
        bounds.append(slice(max(int(values.min()) - reach, 0), min(int(values.max()) + reach + 2, n)))
    seen = cut.seen(lines, lines.x_px - bounds[1].start, lines.y_px - bounds[0].start)
    return fit_tubes(_window(image, (bounds[0], bounds[1])), seen, settings, told)


def _window(image: TubeImage, window: tuple[slice, slice]) -> TubeImage:
    arrays = (image.signal, image.noise_sd, image.valid, image.clipped)
    taken = [np.array(values[window]) for values in arrays]
    release(*arrays)
    return TubeImage(*taken)


# --- the sample -----------------------------------------------------------------------------------------------------


def _sample(image: TubeImage, lines: TubeLines, segment: IntArray) -> tuple[TubeImage, TubeLines]:
    """Paste windows from all over the picture into one picture, with the pieces of lines that lie in them."""
    corners = _sample_corners(lines, image.signal.shape)
    across = int(np.ceil(np.sqrt(len(corners))))
    edge = min(SAMPLE_PX, *image.signal.shape)
    down = -(-len(corners) // across)
    pasted = [
        np.zeros((down * edge, across * edge), values.dtype)
        for values in (image.signal, image.noise_sd, image.valid, image.clipped)
    ]
    x, y = lines.x_px.copy(), lines.y_px.copy()
    chosen = np.zeros(lines.n_points, dtype=bool)
    for number, (top, left) in enumerate(corners):
        taken = _window(image, (slice(top, top + edge), slice(left, left + edge)))
        to_row, to_column = edge * (number // across), edge * (number % across)
        place = (slice(to_row, to_row + edge), slice(to_column, to_column + edge))
        for into, values in zip(pasted, (taken.signal, taken.noise_sd, taken.valid, taken.clipped), strict=True):
            into[place] = values
        low, high = SAMPLE_INSET_PX, edge - 1 - SAMPLE_INSET_PX
        inside = (lines.x_px >= left + low) & (lines.x_px <= left + high)
        inside &= (lines.y_px >= top + low) & (lines.y_px <= top + high)
        chosen |= inside
        x[inside] += to_column - left
        y[inside] += to_row - top
    cut = _cut_where(lines, segment, np.flatnonzero(chosen), lines.n_points)
    long = np.flatnonzero(np.diff(cut.offsets) >= LEAST_SAMPLE_POINTS)
    cut = cut.choose(long if len(long) else np.arange(len(cut.line)))
    return TubeImage(*pasted), cut.seen(lines, x, y)


def _sample_corners(lines: TubeLines, shape: tuple[int, ...]) -> list[tuple[int, int]]:
    """Upper left corners of windows that do not overlap: evenly down the order of how much vessel they hold."""
    edge = min(SAMPLE_PX, *shape)
    n_rows, n_columns = (max(1, n // edge) for n in shape[:2])
    row, column = ((v // edge).astype(np.int64) for v in (lines.y_px, lines.x_px))
    whole = (row >= 0) & (row < n_rows) & (column >= 0) & (column < n_columns)
    if not whole.any():
        centre = zip((lines.y_px[0], lines.x_px[0]), shape[:2], strict=True)
        top, left = (min(max(int(v) - edge // 2, 0), n - edge) for v, n in centre)
        return [(top, left)]
    held = np.bincount((row * n_columns + column)[whole], minlength=n_rows * n_columns)
    n_held = int(np.sum(held > 0))
    richest = np.argsort(-held, kind="stable")[: max(n_held // 2, min(MOST_SAMPLES, n_held))]
    rank = np.linspace(0, len(richest) - 1, min(len(richest), MOST_SAMPLES)).round().astype(np.int64)
    return [(edge * int(k // n_columns), edge * int(k % n_columns)) for k in richest[rank]]
