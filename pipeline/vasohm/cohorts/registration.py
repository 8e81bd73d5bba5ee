"""Where one picture of a bed lies in another picture of it: moved, turned and enlarged within limits, or refused."""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy import fft
from scipy.ndimage import gaussian_filter
from skimage.feature import peak_local_max

from vasohm.arrays import BoolArray, FloatArray, freeze
from vasohm.cohorts.matching import LEAST_REACH_PX, Track, feet, nearest

LARGEST_TURN_DEG = 15.0
LARGEST_LN_SCALE = np.log(1.1)  # beyond what the pixel sizes say
LARGEST_SHIFT = 0.3  # of the picture's width and height
LEAST_OVERLAP = 0.5  # of the fields of view, and of the centrelines within both
RIVAL = 0.8  # of the best one's overlap: another place that fits so well makes the answer ambiguous
APART_PX = 10.0  # root mean square distance between two answers that are not one
LEAST_INFORMATION = 0.01  # mean square of a distance over the shift that makes it; parallel straight vessels have 0

ONE_WAY = "the vessels run all in one direction: where along them the pictures agree cannot be told"

GRID = 160  # cells along the longer side in the search
TURN_STEP_DEG = 2.5  # half of it moves the middle of a side by 1.7 cells
LN_SCALE_STEP = 0.04
AROUND = LARGEST_SHIFT + 0.05  # of the picture's sides: the margin of the search
BLUR_CELLS = 2.0  # bridges what one step of turn and scale leaves
PEAKS = 2  # of each turn and scale that are kept
CANDIDATES = 5  # that are refined
REFINEMENTS = 30  # 10 to 20 are usual
LAST_REACHES = 10  # of them with the least reach and all points, in which the answer settles
SETTLED_PX = 1e-9
ENOUGH_POINTS = 700  # before that
ROBUST_PX = 1.0  # distances beyond count linearly (Huber, Ann Math Stat 1964;35:73-101)


@dataclass(frozen=True, slots=True)
class Similarity:
    """x' = shift_x + c x - s y, y' = shift_y + s x + c y."""

    c: float
    s: float
    shift_x_px: float
    shift_y_px: float

    @property
    def scale(self) -> float:
        return float(np.hypot(self.c, self.s))

    @property
    def turn_deg(self) -> float:
        """From the x axis towards the y axis."""
        return float(np.rad2deg(np.arctan2(self.s, self.c)))

    def apply(self, x_px: FloatArray, y_px: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return where points lie in the other picture."""
        return (
            self.shift_x_px + self.c * x_px - self.s * y_px,
            self.shift_y_px + self.s * x_px + self.c * y_px,
        )

    def inverse(self) -> "Similarity":
        """Return the way back."""
        squared = self.c**2 + self.s**2
        c, s = self.c / squared, -self.s / squared
        x, y = self.shift_x_px, self.shift_y_px
        return Similarity(c, s, -(c * x - s * y), -(s * x + c * y))


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """What registration needs of a measured picture."""

    track: Track  # reaching, in pixels of this picture
    fov: BoolArray  # (h, w)
    pixel_size_um: float

    def sees(self, x_px: FloatArray, y_px: FloatArray) -> BoolArray:
        """Whether points lie in the field of view."""
        height, width = self.fov.shape
        column, row = np.rint(x_px), np.rint(y_px)
        inside = (column >= 0) & (column < width) & (row >= 0) & (row < height)
        at = (np.where(inside, row, 0).astype(np.int64), np.where(inside, column, 0).astype(np.int64))
        return np.asarray(inside & self.fov[at])


@dataclass(frozen=True, slots=True, eq=False)
class Registration:
    """How a picture b lies in a picture a; `reason` says why it is refused, and is empty where it is not."""

    b_to_a: Similarity  # from pixels of b to pixels of a
    scale: float  # of lengths in um in a over those in b: 1 where both pixel sizes are right
    shift_x_um: float  # of b's middle, in a
    shift_y_um: float
    overlap: float  # share of the centrelines within both fields of view that has a counterpart (Dice)
    field_overlap: float  # share of the smaller field of view that the other one sees
    rms_px: float  # distance between matched centrelines, in pixels of a
    reason: str

    def __post_init__(self) -> None:
        freeze(self)


def register(a: Picture, b: Picture) -> Registration:
    """Find how picture b lies in picture a from the centrelines of both.

    Parameters
    ----------
    a, b : Picture
        Two pictures of one bed. Their pixel sizes are taken as known to 10 %.

    Returns
    -------
    Registration
        Refused, with a reason, where there are no vessels, what fits lies outside the limits, too little overlaps, or
        another answer fits about as well.

    Notes
    -----
    The turn, scale and shift at which rasters of both centrelines correlate best are searched with Fourier
    transforms; the best few are refined by iterated least squares of the distance to the nearest centreline of about
    the same direction (point to line: Chen and Medioni, Image Vis Comput 1992;10:145-155,
    doi:10.1016/0262-8856(92)90066-C), with Huber's weights, and judged by the length that finds a counterpart.
    """
    if not len(a.track.segment) or not len(b.track.segment):
        return _refused("one of the two pictures shows no vessels")
    answers = []
    for start in _candidates(a, b):
        place, information = _refine(a, b, start)
        answer = _judged(a, b, place)
        answers.append(replace(answer, reason=ONE_WAY) if information < LEAST_INFORMATION else answer)
    allowed = sorted((one for one in answers if not one.reason), key=lambda one: -one.overlap)
    best = allowed[0] if allowed else max(answers, key=lambda one: one.overlap, default=_refused("no place fits"))
    if best.overlap < LEAST_OVERLAP:
        return replace(best, reason=f"only {best.overlap:.0%} of the vessels overlap: is it the same bed?")
    if best.reason:
        return best
    rival = next((one for one in allowed[1:] if _distance_px(b, best.b_to_a, one.b_to_a) > APART_PX), None)
    if rival is not None and rival.overlap > RIVAL * best.overlap:
        return replace(best, reason=f"two places fit: {rival.overlap:.0%} overlap as well as {best.overlap:.0%}")
    return best


def registered(track: Track, transform: Similarity) -> Track:
    """Lay centrelines into the other picture; lengths and radii are scaled with them."""
    x, y = transform.apply(track.x_px, track.y_px)
    scale = transform.scale
    return Track(x, y, track.s_px * scale, track.radius_px * scale, track.segment.copy(), track.reach_px * scale)


def _refused(reason: str) -> Registration:
    nothing = Similarity(np.nan, np.nan, np.nan, np.nan)
    return Registration(nothing, np.nan, np.nan, np.nan, 0.0, np.nan, np.nan, reason)


@dataclass(frozen=True, slots=True)
class _Grid:
    """Cells over picture a and as far around it as the other one may be shifted, so that nothing wraps around."""

    cell_px: float
    shape: tuple[int, ...]

    @property
    def size(self) -> tuple[int, ...]:
        share = 1.0 + 2.0 * AROUND
        return tuple(fft.next_fast_len(int(share * side / self.cell_px) + 1, real=True) for side in self.shape)

    def index(self, at_px: FloatArray, side: int) -> FloatArray:
        return np.asarray((at_px + AROUND * self.shape[side]) / self.cell_px)


def _candidates(a: Picture, b: Picture) -> list[Similarity]:
    """Return the best few places, apart from each other, by correlation of rasters."""
    turns = np.arange(-LARGEST_TURN_DEG, LARGEST_TURN_DEG + 0.5 * TURN_STEP_DEG, TURN_STEP_DEG)
    n_scales = 2 * round(LARGEST_LN_SCALE / LN_SCALE_STEP) + 1
    scales = np.linspace(-LARGEST_LN_SCALE, LARGEST_LN_SCALE, n_scales)
    cell = max(a.fov.shape) / GRID
    known = b.pixel_size_um / a.pixel_size_um
    grid = _Grid(cell, a.fov.shape)
    of_a = fft.rfft2(_raster(a.track, a.track.x_px, a.track.y_px, grid))
    found = []
    for turn, ln_scale in ((turn, ln_scale) for turn in turns for ln_scale in scales):
        c, s = (known * np.exp(ln_scale) * part for part in (np.cos(np.deg2rad(turn)), np.sin(np.deg2rad(turn))))
        centred = _middle_to_middle(a, b, float(c), float(s))
        x, y = centred.apply(b.track.x_px, b.track.y_px)
        raster = _raster(b.track, x, y, grid)
        power = float(np.sum(raster**2))
        if power == 0.0:
            continue
        correlation = fft.irfft2(of_a * np.conj(fft.rfft2(raster)), grid.size) / np.sqrt(power)
        for score, down, right in _peaks(correlation, [int(LARGEST_SHIFT * side / cell) for side in a.fov.shape]):
            shifted = replace(
                centred, shift_x_px=centred.shift_x_px + right * cell, shift_y_px=centred.shift_y_px + down * cell
            )
            found.append((score, shifted))
    found.sort(key=lambda one: -one[0])
    chosen: list[Similarity] = []
    for _, one in found:
        if all(_distance_px(b, one, other) > 4.0 * BLUR_CELLS * cell for other in chosen):
            chosen.append(one)
        if len(chosen) == CANDIDATES:
            break
    return chosen


def _raster(track: Track, x_px: FloatArray, y_px: FloatArray, grid: _Grid) -> FloatArray:
    """Length of centreline a cell, blurred, without what cannot meet the other picture within the allowed shifts."""
    row, column = (np.rint(grid.index(at, side)).astype(np.int64) for at, side in ((y_px, 0), (x_px, 1)))
    kept = (row >= 0) & (row < grid.size[0]) & (column >= 0) & (column < grid.size[1])
    raster = np.zeros(grid.size)
    np.add.at(raster, (row[kept], column[kept]), track.weight_px[kept])
    return np.asarray(gaussian_filter(raster, BLUR_CELLS, mode="constant"))


def _peaks(correlation: FloatArray, most: list[int]) -> Iterator[tuple[float, int, int]]:
    """Highest places within the allowed shifts: score, cells down, cells to the right."""
    allowed = np.roll(correlation, most, axis=(0, 1))[: 2 * most[0] + 1, : 2 * most[1] + 1]
    places = peak_local_max(allowed, min_distance=int(2 * BLUR_CELLS), num_peaks=PEAKS, exclude_border=False)
    for down, right in places.tolist():
        yield float(allowed[down, right]), down - most[0], right - most[1]


def _middle_to_middle(a: Picture, b: Picture, c: float, s: float) -> Similarity:
    bx, by = 0.5 * (b.fov.shape[1] - 1), 0.5 * (b.fov.shape[0] - 1)
    ax, ay = 0.5 * (a.fov.shape[1] - 1), 0.5 * (a.fov.shape[0] - 1)
    return Similarity(c, s, ax - c * bx + s * by, ay - s * bx - c * by)


def _refine(a: Picture, b: Picture, start: Similarity) -> tuple[Similarity, float]:
    """Iterate least squares of distances to lines; also how little the least certain shift would change them."""
    x, y = b.track.x_px, b.track.y_px
    middle_x, middle_y = float(np.mean(x)), float(np.mean(y))
    size = float(np.sqrt(np.mean((x - middle_x) ** 2 + (y - middle_y) ** 2))) + 1.0
    first = 4.0 * BLUR_CELLS * max(a.fov.shape) / GRID
    shrinking = np.geomspace(first, LEAST_REACH_PX, REFINEMENTS - LAST_REACHES)
    line = replace(a.track, reach_px=np.zeros(len(a.track.segment)))
    tangent, information = line.tangent, 0.0
    few = _thinned(b.track)
    for reach in (*shrinking, *np.full(LAST_REACHES, LEAST_REACH_PX)):
        of_b = few if reach > LEAST_REACH_PX else b.track
        x, y, weight = of_b.x_px, of_b.y_px, of_b.weight_px
        laid = registered(of_b, start)
        at = nearest(replace(laid, reach_px=np.full(len(x), reach)), line)
        found = np.flatnonzero(at >= 0)
        if len(found) < len(Similarity.__slots__):
            return start, np.inf
        normal = np.column_stack((-tangent[at[found], 1], tangent[at[found], 0]))
        u, v = (x[found] - middle_x) / size, (y[found] - middle_y) / size
        slope = np.column_stack(
            (normal[:, 0] * u + normal[:, 1] * v, normal[:, 1] * u - normal[:, 0] * v, normal[:, 0], normal[:, 1])
        )
        off = np.sum(normal * (laid.xy[found] - a.track.xy[at[found]]), axis=1)
        robust = weight[found] * np.minimum(1.0, ROBUST_PX / np.maximum(np.abs(off), ROBUST_PX))
        matrix = slope.T @ (slope * robust[:, None]) / np.sum(robust)
        information = float(np.linalg.eigvalsh(matrix)[0])
        if information < LEAST_INFORMATION**2:
            break
        step = np.linalg.solve(matrix, -slope.T @ (off * robust) / np.sum(robust))
        c, s = start.c + step[0] / size, start.s + step[1] / size
        at_middle = start.apply(np.array([middle_x]), np.array([middle_y]))
        start = Similarity(
            float(c),
            float(s),
            float(at_middle[0][0] + step[2] - c * middle_x + s * middle_y),
            float(at_middle[1][0] + step[3] - s * middle_x - c * middle_y),
        )
        if reach == LEAST_REACH_PX and np.abs(step).max() < SETTLED_PX:
            break
    return start, information


def _thinned(track: Track) -> Track:
    """Every so manyth point, where there are more than enough."""
    at = np.arange(0, len(track.segment), max(1, len(track.segment) // ENOUGH_POINTS))
    return Track(*(getattr(track, name)[at] for name in ("x_px", "y_px", "s_px", "radius_px", "segment", "reach_px")))


def _judged(a: Picture, b: Picture, b_to_a: Similarity) -> Registration:
    """Measure how well an answer fits, and refuse it where it is outside the limits."""
    back = b_to_a.inverse()
    laid = registered(b.track, b_to_a)
    b_in_a, a_in_b = a.sees(laid.x_px, laid.y_px), b.sees(*back.apply(a.track.x_px, a.track.y_px))
    of_b, of_a = feet(laid, a.track), feet(a.track, laid)
    seen = float(np.sum(laid.weight_px[b_in_a]) + np.sum(a.track.weight_px[a_in_b]))
    matched = float(np.sum(laid.weight_px[b_in_a & of_b.found]) + np.sum(a.track.weight_px[a_in_b & of_a.found]))
    across = of_b.across_px[of_b.found]
    centred = _middle_to_middle(a, b, b_to_a.c, b_to_a.s)
    shift_x, shift_y = b_to_a.shift_x_px - centred.shift_x_px, b_to_a.shift_y_px - centred.shift_y_px
    scale = b_to_a.scale * a.pixel_size_um / b.pixel_size_um
    field_overlap = _field_overlap(a, b, b_to_a)
    reasons = []
    if abs(b_to_a.turn_deg) > LARGEST_TURN_DEG:
        reasons.append(f"what fits best is turned by {b_to_a.turn_deg:.1f} degrees, more than {LARGEST_TURN_DEG:g}")
    if abs(np.log(scale)) > LARGEST_LN_SCALE:
        reasons.append(f"what fits best is {scale:.3g} times as large as the pixel sizes say")
    if abs(shift_x) > LARGEST_SHIFT * a.fov.shape[1] or abs(shift_y) > LARGEST_SHIFT * a.fov.shape[0]:
        reasons.append(f"what fits best is shifted by more than {LARGEST_SHIFT:.0%} of the picture")
    if field_overlap < LEAST_OVERLAP:
        reasons.append(f"only {field_overlap:.0%} of the fields of view overlap")
    return Registration(
        b_to_a=b_to_a,
        scale=scale,
        shift_x_um=shift_x * a.pixel_size_um,
        shift_y_um=shift_y * a.pixel_size_um,
        overlap=matched / seen if seen > 0 else 0.0,
        field_overlap=field_overlap,
        rms_px=float(np.sqrt(np.mean(across**2))) if len(across) else np.nan,
        reason="; ".join(reasons),
    )


def _field_overlap(a: Picture, b: Picture, b_to_a: Similarity) -> float:
    """Share of the smaller field of view within the other, on every fourth pixel of a."""
    row, column = np.nonzero(a.fov[::4, ::4])
    x, y = 4.0 * column, 4.0 * row
    common = float(np.sum(b.sees(*b_to_a.inverse().apply(x, y))))
    of_b = np.count_nonzero(b.fov) * b_to_a.scale**2 / 16.0
    return min(common / max(min(float(len(x)), of_b), 1.0), 1.0)


def _distance_px(b: Picture, one: Similarity, other: Similarity) -> float:
    """Root mean square distance between two answers over b's vessels."""
    (x1, y1), (x2, y2) = one.apply(b.track.x_px, b.track.y_px), other.apply(b.track.x_px, b.track.y_px)
    return float(np.sqrt(np.mean((x1 - x2) ** 2 + (y1 - y2) ** 2)))
