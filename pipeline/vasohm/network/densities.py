"""How vessels fill the field of view: distances of the tissue, avascular areas, box dimension, lacunarity."""

from dataclasses import dataclass, replace

import numpy as np
from scipy import ndimage

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.image.blocks import blocks_of, enlarged, is_on_disk, on_disk, release

BOXES_ACROSS = 4  # larger boxes are all occupied
LEAST_EDGES = 3  # that a line through box counts needs
AROUND_RADII = 6.0  # of the largest empty circle: the avascular area around it is looked for so far, then further
BLOCK_PX = 2048  # of pictures on disk
ROWS_AT_ONCE = 512
STEPS_A_BOX = 4  # boxes wider than this glide by a quarter of their edge
QUANTILES = (0.05, 0.5, 0.95)


@dataclass(frozen=True, slots=True)
class TissueDistances:
    """Distances from the pixels of the tissue to the nearest vessel's border; NaN without vessels or tissue."""

    mean_um: float
    sd_um: float
    quantiles_um: tuple[float, float, float]  # 5 %, 50 %, 95 %; NaN beyond what the field of view can tell
    unseen: float  # share of the tissue that lies further away than the field can tell
    flags: Flag


@dataclass(frozen=True, slots=True)
class AvascularArea:
    """The largest place without vessels that lies wholly in the field of view; NaN without vessels or tissue."""

    area_um2: float
    radius_um: float  # of the largest circle in it
    x_px: float  # its centre of area
    y_px: float


@dataclass(frozen=True, slots=True, eq=False)
class Scales:
    """Boxes over the field of view, one entry an edge of 2, 4, 8 … px."""

    edge_px: IntArray
    n_occupied: IntArray
    lacunarity: FloatArray  # NaN where no box lies wholly in the field of view

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True)
class BoxDimension:
    """Slope of the line through the box counts; NaN where nothing is there or fewer than three edges fit."""

    value: float
    se: float
    least_px: float  # smallest and largest edge on the line
    most_px: float


NO_DISTANCES = TissueDistances(np.nan, np.nan, (np.nan, np.nan, np.nan), np.nan, Flag.NONE)
NO_AVASCULAR_AREA = AvascularArea(np.nan, np.nan, np.nan, np.nan)
NO_DIMENSION = BoxDimension(np.nan, np.nan, np.nan, np.nan)


@dataclass(frozen=True, slots=True, eq=False)
class Filling:
    """How a set of vessels fills the field of view."""

    distances: TissueDistances
    avascular: AvascularArea
    dimension: BoxDimension
    lacunarity: float  # mean over the edges of the box counts
    scales: Scales


def describe_filling(
    vessels: BoolArray, fov: BoolArray, pixel_size_um: float, *, seek_avascular: bool = True
) -> Filling:
    """Describe how vessel pixels fill the field of view.

    Parameters
    ----------
    vessels, fov : (h, w) bool
        Vessel pixels, and pixels of the field of view; only what lies in it counts.
    pixel_size_um : float
        Edge of a pixel.
    seek_avascular : bool
        Whether the largest avascular area is looked for; it has little meaning for one class of vessels.

    Returns
    -------
    Filling

    Notes
    -----
    See `tissue_distances`, `avascular_area`, `count_boxes` and `fit_dimension`.
    """
    inside = vessels & fov
    squared_px2, seen = _nearest(inside, fov)
    scales = count_boxes(inside, fov)
    known = scales.lacunarity[np.isfinite(scales.lacunarity)]
    return Filling(
        distances=tissue_distances(squared_px2, seen, inside, fov, pixel_size_um),
        avascular=avascular_area(squared_px2, inside, fov, pixel_size_um) if seek_avascular else NO_AVASCULAR_AREA,
        dimension=fit_dimension(scales),
        lacunarity=float(known.mean()) if known.size else np.nan,
        scales=scales,
    )


def _nearest(vessels: BoolArray, fov: BoolArray) -> tuple[IntArray, BoolArray]:
    """Squared distance (h, w) of each pixel to the nearest vessel or end of the field; whether that is a vessel.

    One row and column around the picture count as beyond the field. A picture on disk is looked at in blocks, each with
    so much around it that no pixel of its own is further away from a vessel.
    """
    if not is_on_disk(fov):
        return _nearest_in(vessels, fov, (slice(0, fov.shape[0]), slice(0, fov.shape[1])))
    squared, seen = on_disk(fov.shape, np.int32), on_disk(fov.shape, np.bool_)
    for core_block in blocks_of(fov.shape, BLOCK_PX, 0):
        halo = BLOCK_PX // 8
        while True:
            block = enlarged(core_block, halo, fov.shape)
            near, told = _nearest_in(vessels, fov, block.window)
            if float(near[block.inner].max()) < halo**2 or block.window == tuple(slice(0, n) for n in fov.shape):
                break
            halo *= 2
        squared[block.core], seen[block.core] = near[block.inner], told[block.inner]
        release(squared, seen, fov)
    return squared, seen


def _nearest_in(vessels: BoolArray, fov: BoolArray, window: tuple[slice, slice]) -> tuple[IntArray, BoolArray]:
    """Do so within a window of the picture; what lies beyond it is left out."""
    pads = [(int(part.start == 0), int(part.stop == n)) for part, n in zip(window, fov.shape, strict=True)]
    target = np.pad(vessels[window], pads)
    free = np.pad(fov[window] & ~vessels[window], pads)
    if free.all():  # nothing to measure a distance to
        return np.full(fov[window].shape, np.iinfo(np.int32).max, np.int32), np.zeros(fov[window].shape, dtype=bool)
    row, column = ndimage.distance_transform_edt(free, return_distances=False, return_indices=True)
    seen = np.take(target, row * np.int32(free.shape[1]) + column)
    row -= np.arange(free.shape[0], dtype=np.int32)[:, None]
    column -= np.arange(free.shape[1], dtype=np.int32)[None, :]
    row *= row
    column *= column
    row += column
    inner = tuple(slice(before, n - after) for (before, after), n in zip(pads, free.shape, strict=True))
    return row[inner], seen[inner]


def tissue_distances(
    squared_px2: IntArray, seen: BoolArray, vessels: BoolArray, fov: BoolArray, pixel_size_um: float
) -> TissueDistances:
    """Distribution of the distances from tissue to the nearest vessel, freed from the field's border.

    Notes
    -----
    Near the border the nearest vessel may lie outside of what is seen: such a pixel only tells that its distance is at
    least that to the border. The product-limit estimator takes both kinds. Where the largest distances are of that kind
    it ends before 1: what is left counts as being as far away as the furthest pixel is known to be, so that mean and
    deviation are least values, and quantiles beyond are NaN. `TISSUE_UNSEEN` is set where the 95 % quantile is.
    Distances are to the border of the vessel's pixels, half a pixel before their centres.

    References
    ----------
    Baddeley A, Gill RD (1997) Kaplan-Meier estimators of distance distributions for spatial point processes. Ann Stat
    25:263-292, doi:10.1214/aos/1034276629.
    """
    if not vessels.any():
        return NO_DISTANCES
    counts, events = np.zeros((2, int(squared_px2.max(initial=0)) + 1), dtype=np.int64)
    for top in range(0, len(fov), ROWS_AT_ONCE):
        rows = slice(top, top + ROWS_AT_ONCE)
        tissue = fov[rows] & ~vessels[rows]
        squared = squared_px2[rows][tissue]
        counts += np.bincount(squared, minlength=len(counts))
        events += np.bincount(squared[seen[rows][tissue]], minlength=len(counts))
        release(fov, squared_px2, seen)
    if not counts.any():
        return NO_DISTANCES
    at = np.flatnonzero(counts)
    counts, events = counts[at], events[at]
    at_risk = np.cumsum(counts[::-1])[::-1]
    survival = np.cumprod(1.0 - events / at_risk)
    upto, unseen = 1.0 - survival, float(survival[-1])
    if not events.any():
        return replace(NO_DISTANCES, unseen=unseen, flags=Flag.TISSUE_UNSEEN)
    part = -np.diff(survival, prepend=1.0)
    part[-1] += unseen
    distance = (np.sqrt(at) - 0.5) * pixel_size_um
    mean = float(part @ distance)
    low, middle, high = np.append(distance, np.nan)[np.searchsorted(upto, QUANTILES)].tolist()
    return TissueDistances(
        mean_um=mean,
        sd_um=float(np.sqrt(part @ np.square(distance - mean))),
        quantiles_um=(low, middle, high),
        unseen=unseen,
        flags=Flag.NONE if np.isfinite(high) else Flag.TISSUE_UNSEEN,
    )


def avascular_area(squared_px2: IntArray, vessels: BoolArray, fov: BoolArray, pixel_size_um: float) -> AvascularArea:
    """Largest avascular area: what a disc can reach around the largest empty circle without touching a vessel.

    The disc has half the radius of the largest circle that holds no vessel and lies in the field of view; it passes no
    gap between vessels that is narrower than that circle's radius. In mathematical terms the opening of the tissue by
    that disc, and of it the part around the circle (of equal circles the first in the order of rows).
    """
    centre = int(np.argmax(squared_px2))
    most = float(squared_px2.flat[centre])
    if not vessels.any() or most == 0:
        return NO_AVASCULAR_AREA
    centre_y, centre_x = divmod(centre, fov.shape[1])
    reach = int(np.ceil(np.sqrt(most) / 2)) + 1
    look = int(AROUND_RADII * np.sqrt(most)) + 1
    while True:
        seen, inner = _around((centre_y, centre_x), look, fov.shape)
        label, _ = ndimage.label(squared_px2[seen] > most / 4)
        core = label == label[inner]
        if not _comes_near_border(core, reach, seen, fov.shape):
            break
        look *= 2
    rows, columns = np.flatnonzero(core.any(axis=1)), np.flatnonzero(core.any(axis=0))
    top, left = max(rows[0] - reach, 0), max(columns[0] - reach, 0)
    window = (slice(top, rows[-1] + reach + 1), slice(left, columns[-1] + reach + 1))
    away = ndimage.distance_transform_edt(~core[window])
    reached = (away <= np.sqrt(most) / 2) & (fov[seen] & ~vessels[seen])[window]
    top, left = top + seen[0].start, left + seen[1].start
    release(squared_px2)
    y, x = np.nonzero(reached)
    return AvascularArea(
        area_um2=float(len(y) * pixel_size_um**2),
        radius_um=float((np.sqrt(most) - 0.5) * pixel_size_um),
        x_px=float(x.mean() + left),
        y_px=float(y.mean() + top),
    )


def _around(at: tuple[int, int], reach: int, shape: tuple[int, ...]) -> tuple[tuple[slice, slice], tuple[int, int]]:
    """Window of a picture around a pixel, and where in it that is."""
    rows, columns = (slice(max(k - reach, 0), min(k + reach + 1, n)) for k, n in zip(at, shape, strict=True))
    return (rows, columns), (at[0] - rows.start, at[1] - columns.start)


def _comes_near_border(core: BoolArray, reach: int, window: tuple[slice, slice], shape: tuple[int, ...]) -> bool:
    """Whether a piece comes within `reach` of a border of its window that is none of the picture."""
    rows, columns = window
    return bool(
        (rows.start > 0 and core[:reach].any())
        or (rows.stop < shape[0] and core[-reach:].any())
        or (columns.start > 0 and core[:, :reach].any())
        or (columns.stop < shape[1] and core[:, -reach:].any())
    )


def count_boxes(pixels: BoolArray, fov: BoolArray) -> Scales:
    """Count occupied boxes and measure lacunarity for edges of 2, 4, 8 … px.

    Notes
    -----
    Edges go up to a quarter of the shorter side of the field of view's bounding box, to whose corner the counted boxes
    are aligned. Lacunarity is E[M²] / E[M]² of the number M of set pixels in a gliding box; only boxes wholly in the
    field of view count, and those of 8 px and more glide by a quarter of their edge.

    References
    ----------
    Allain C, Cloitre M (1991) Characterizing the lacunarity of random and deterministic fractal sets. Phys Rev A
    44:3552-3558, doi:10.1103/PhysRevA.44.3552.
    """
    rows, columns = np.flatnonzero(fov.any(axis=1)), np.flatnonzero(fov.any(axis=0))
    none = np.zeros(0, dtype=np.int64)
    if not rows.size or not pixels.any():
        return Scales(none, none.copy(), np.zeros(0))
    window = (slice(rows[0], rows[-1] + 1), slice(columns[0], columns[-1] + 1))
    boxes = pixels[window]
    largest = min(boxes.shape) / BOXES_ACROSS
    mass, room = boxes.view(np.uint8), fov[window].view(np.uint8)
    edge, edges, counts, lacunarity = 1, [], [], []
    while 2 * edge <= largest:
        boxes = np.pad(boxes, [(0, boxes.shape[0] % 2), (0, boxes.shape[1] % 2)])
        boxes = boxes[::2, ::2] | boxes[1::2, ::2] | boxes[::2, 1::2] | boxes[1::2, 1::2]
        mass, room = _double(mass, edge), _double(room, edge)
        edge *= 2
        edges.append(edge)
        counts.append(np.count_nonzero(boxes))
        lacunarity.append(_lacunarity(mass, room == edge * edge))
    return Scales(np.array(edges, dtype=np.int64), np.array(counts, dtype=np.int64), np.array(lacunarity))


def _double(sums: AnyArray, edge: int) -> AnyArray:
    """Sums over gliding boxes of twice the edge, from those of the edge, in the smallest type that holds them.

    Boxes of an edge glide by a quarter of it, by one pixel below 8 px: those of twice the edge by twice as much from 8
    px on.
    """
    small = np.min_scalar_type(4 * edge * edge)
    step = max(edge // STEPS_A_BOX, 1)
    every, beside = max(2 * edge // STEPS_A_BOX, 1) // step, edge // step
    for axis in (0, 1):
        lines = np.moveaxis(sums, axis, 0)
        high = lines[beside::every]
        sums = np.moveaxis(np.add(lines[::every][: len(high)], high, dtype=small), 0, axis)
    return sums


def _lacunarity(mass: AnyArray, whole: BoolArray) -> float:
    total = squares = 0.0
    for top in range(0, len(mass), ROWS_AT_ONCE):
        held = (mass[top : top + ROWS_AT_ONCE] * whole[top : top + ROWS_AT_ONCE]).astype(float).ravel()
        total += float(held.sum())
        squares += float(held @ held)
    return float(np.count_nonzero(whole) * squares / total**2) if total > 0 else np.nan


def fit_dimension(scales: Scales) -> BoxDimension:
    """Box-counting dimension: minus the slope of the least-squares line of ln(occupied boxes) on ln(edge).

    Its standard error is that of the slope by the scatter about the line. Boxes of one edge are joined to those of the
    next, so the counts are not independent: it tells how straight the line is, not how far two pictures would differ.
    """
    n = len(scales.edge_px)
    if n < LEAST_EDGES:
        return NO_DIMENSION
    x, y = np.log(scales.edge_px), np.log(scales.n_occupied)
    spread = float(np.sum(np.square(x - x.mean())))
    slope = float((x - x.mean()) @ y) / spread
    rest = y - y.mean() - slope * (x - x.mean())
    se = float(np.sqrt(np.sum(np.square(rest)) / (n - 2) / spread))
    return BoxDimension(-slope, se, float(scales.edge_px[0]), float(scales.edge_px[-1]))
