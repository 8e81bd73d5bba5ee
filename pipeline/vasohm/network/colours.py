"""Colour of each vessel: the optical density of its lumen in red, green and blue, free of its width and of blur.

Every strip across a vessel is fitted by the tube of known radius and blur on a straight background, in each colour
by itself; what the strips of a segment say is put together by what each of them knows.
"""

from collections.abc import Iterator
from dataclasses import dataclass, fields

import numpy as np
from scipy.ndimage import map_coordinates

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray, freeze
from vasohm.network.groups import sum_by
from vasohm.network.paths import position
from vasohm.network.profiles import PIXEL_VARIANCE, Optics, ProfileTable, ln_height, profile_table, tube_strips
from vasohm.network.radius import MeasuredGraph
from vasohm.network.strips import Frame, Owners, group_widths, make_frame, paint_owners

LUMINANCE = np.array([0.299, 0.587, 0.114])  # ITU-R BT.601, the weights of JPEG
TO_RGB = np.array(
    [  # from luminance and the differences of red and blue from it
        [1.0, 1.0, 0.0],
        [1.0, -LUMINANCE[0] / LUMINANCE[1], -LUMINANCE[2] / LUMINANCE[1]],
        [1.0, 0.0, 1.0],
    ]
)
STEP_PX = 2  # between strips along a vessel: neighbours at 1 px say nearly the same
CHUNK = 2000  # strips held at a time
LINEAR_VARIANCE = 1.0 / 6.0  # px^2 that sampling between pixels by straight lines adds to the blur, on average
LINEAR_NOISE = 9.0 / 4.0  # and by how much it lowers the variance of noise, on average
BLURS, EXTRA_PX = 3.0, 3.0  # strips reach so far beyond the rim
OTHER_BLURS = 1.5  # around other vessels so much is left out
COLOUR_BLURS_PX = (0.0, 1.0, 1.4, 2.0, 2.8, 4.0)  # of colour against brightness, tried
COLOUR_STRIPS = 500  # enough to tell that blur
MOST_MISFIT = 5.0  # of the median: a strip that shows something else says no more
COLOUR_GAIN = 0.98  # of the misfit: a blur of colour must explain the picture better by so much
LEAST_ATTENUATION = 0.6  # thinner vessels take over too much colour from beside them
LEAST_KNOWN = 0.03  # a strip that knows less of its height (a pixel on the axis of a wide vessel is 1) says nothing
STRETCH_PX = 16
LEAST_PAIRS = 20  # of neighbouring stretches, from which their unevenness is told
CLIP_SDS = 3.0
NORMAL_MAD = 0.6745  # median absolute deviation of normal errors over their standard deviation
SMALLEST_VARIANCE = 1e-12
MOST_LOSS = 0.97  # of the light: darker is only noise
TYPICAL_BLUR_PX = 1.0  # where the picture told none


@dataclass(frozen=True, slots=True, eq=False)
class VesselColours:
    """Optical density on the axis of each segment, before blur, in red, green and blue.

    NaN where it could not be read. Errors in the radius change all three alike, so that their ratios are free of it.
    """

    density: FloatArray  # (n_segments, 3)
    covariance: FloatArray  # (n_segments, 3, 3) of the errors of density, from noise alone

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class _Planes:
    """Brightness and two differences of colour, (h, w) each, and where they may be used."""

    planes: tuple[AnyArray, AnyArray, AnyArray]  # luminance, red - luminance, blue - luminance
    valid: BoolArray
    frame: Frame
    owners: Owners
    radius_px: FloatArray  # of every point


@dataclass(frozen=True, slots=True, eq=False)
class _Fits:
    """What each strip says, (n,) or (n, 3) in the order of the planes."""

    points: IntArray
    height: FloatArray  # of the tube in each plane
    base: FloatArray  # of the background in each plane
    known: FloatArray  # 1 / variance of a height at unit noise
    attenuation: FloatArray  # share of a tube's colour that is left on its axis where colour is more blurred
    misfit: FloatArray  # (n, 3, 3) covariance of what is left in the planes


def measure_colours(measured: MeasuredGraph, pixels: AnyArray, fov: BoolArray, white: float | None) -> VesselColours:
    """Measure the optical density of every segment in three colours.

    Parameters
    ----------
    measured : segments with their radii.
    pixels : (h, w, 3 or more) red, green, blue as stored. A camera's gamma multiplies all densities alike.
    fov : (h, w) where the picture may be used.
    white : the greatest value that the file can hold, None where there is none; pixels there are left out.

    Notes
    -----
    Cameras and JPEG files hold colour at a lower resolution than brightness (ITU-T T.81 allows every second pixel
    only): a thin vessel takes over the colour of its surroundings. Brightness and the differences of colour are fitted
    apart; how much more blurred the colour is, the picture itself tells; vessels that lose too much of it are left out.
    """
    n = measured.graph.n_segments
    rgb = pixels[..., :3].astype(np.float32)
    finite = np.isfinite(rgb).all(axis=2)
    rgb[~finite] = 0.0
    luminance = rgb @ LUMINANCE.astype(np.float32)
    valid = fov & finite if white is None else fov & finite & (rgb < white).all(axis=2)
    frame = make_frame(measured.graph.x_px, measured.graph.y_px, measured.graph.offsets)
    radius = measured.radius_um / measured.pixel_size_um
    psf = measured.blur_px if np.isfinite(measured.blur_px) else TYPICAL_BLUR_PX
    optics = Optics(
        "slab" if measured.profile == "slab" else "cylinder",
        0.0,
        float(np.sqrt(psf**2 + PIXEL_VARIANCE + LINEAR_VARIANCE)),
    )
    owners = paint_owners(frame, radius + OTHER_BLURS * optics.s_px, measured.graph.shape)
    scene = _Planes((luminance, rgb[..., 0] - luminance, rgb[..., 2] - luminance), valid, frame, owners, radius)
    chosen = np.nonzero(position(measured.graph.offsets) % STEP_PX == 0)[0]
    if len(chosen) == 0:
        return VesselColours(np.full((n, 3), np.nan), np.full((n, 3, 3), np.nan))
    parts = list(_fits(scene, chosen, optics, _colour_blur(scene, chosen, optics)))
    return _by_segment(parts, frame, measured.graph.offsets)


def _colour_blur(scene: _Planes, chosen: IntArray, optics: Optics) -> float:
    """Find how much more the colour is blurred than the brightness, in px: the blur that explains the strips best."""
    some = chosen[:: max(1, len(chosen) // COLOUR_STRIPS)]
    misfits = []
    for extra in COLOUR_BLURS_PX:
        blurred = Optics(optics.family, 0.0, float(np.hypot(optics.s_px, extra)))
        fits = _fits(scene, some, blurred, 0.0, optics.s_px + COLOUR_BLURS_PX[-1])
        misfits.append(np.concatenate([fit.misfit[:, 1, 1] for fit in fits]))
    first = float(np.median(misfits[0]))
    if not first > 0:
        return 0.0
    typical = [float(np.mean(np.minimum(misfit / first, MOST_MISFIT))) for misfit in misfits]
    best = int(np.argmin(typical))
    return COLOUR_BLURS_PX[best] if typical[best] < COLOUR_GAIN * typical[0] else 0.0


def _fits(
    scene: _Planes, chosen: IntArray, optics: Optics, extra_px: float, reach_px: float | None = None
) -> Iterator[_Fits]:
    """Fit strips in groups of about equal width."""
    half = scene.radius_px[chosen] + BLURS * (optics.s_px if reach_px is None else reach_px) + EXTRA_PX
    groups = group_widths(half, chosen)
    room = groups[-1][0] + 4
    table = profile_table(optics, float(scene.radius_px.max()) + 1.0, room)
    pale = Optics(optics.family, 0.0, float(np.hypot(optics.s_px, extra_px)))
    colour_table = profile_table(pale, float(scene.radius_px.max()) + 1.0, room)
    for half_width, members in groups:
        for low in range(0, len(members), CHUNK):
            yield _fit(scene, members[low : low + CHUNK], half_width, (table, colour_table))


def _fit(scene: _Planes, points: IntArray, half_width: int, tables: tuple[ProfileTable, ProfileTable]) -> _Fits:
    frame = scene.frame
    t = np.arange(-half_width, half_width + 1.0)
    at_y = frame.y[points, None] + frame.normal_y[points, None] * t
    at_x = frame.x[points, None] + frame.normal_x[points, None] * t
    use = _usable(scene, points, at_y, at_x).astype(np.float64)
    tube, colour = (_tubes(table, half_width, scene.radius_px[points]) for table in tables)
    model = np.stack([np.ones_like(tube), np.broadcast_to(t / half_width, tube.shape), -tube], axis=1)
    weighted = model * use[:, None]
    inverse = np.linalg.inv(weighted @ model.transpose(0, 2, 1) + 1e-6 * np.eye(3))
    solver = inverse @ weighted  # (n, 3, samples)
    heights, bases, lefts = [], [], []
    degrees = np.maximum(use.sum(axis=1) - 3.0, 1.0)
    for plane in scene.planes:
        y = map_coordinates(plane, (at_y, at_x), order=1, mode="nearest", output=np.float64)
        found = np.einsum("nit,nt->ni", solver, y)
        left = y - np.einsum("nit,ni->nt", model, found)
        heights.append(found[:, 2])
        bases.append(found[:, 0])
        lefts.append(left * use)
    left = np.stack(lefts, axis=1)
    return _Fits(
        points,
        np.column_stack(heights),
        np.column_stack(bases),
        1.0 / np.maximum(inverse[:, 2, 2], 1e-9),
        -np.einsum("nt,nt->n", solver[:, 2], colour),
        left @ left.transpose(0, 2, 1) / degrees[:, None, None],
    )


def _tubes(table: ProfileTable, half_width: int, radius_px: FloatArray) -> FloatArray:
    """Blurred tubes (n, samples) that have unit height before blur."""
    ln_r = np.log(radius_px)
    strips = tube_strips(table, half_width, ln_r, -ln_height(table.optics, ln_r), np.zeros(len(ln_r)))
    return np.asarray(strips[:, 0], dtype=np.float64)


def _usable(scene: _Planes, points: IntArray, at_y: FloatArray, at_x: FloatArray) -> BoolArray:
    """Samples inside the field of view on which no other vessel lies."""
    height, width = scene.valid.shape
    row, column = np.rint(at_y).astype(np.int64), np.rint(at_x).astype(np.int64)
    use: BoolArray = (row >= 0) & (row < height) & (column >= 0) & (column < width)
    pixel = np.where(use, row * width + column, 0)
    use &= scene.valid.reshape(-1)[pixel]
    segment = scene.frame.segment
    for owners in scene.owners:
        other = owners[pixel]
        use &= (other < 0) | (segment[other] == segment[points][:, None])
    return use


def _by_segment(parts: list[_Fits], frame: Frame, offsets: IntArray) -> VesselColours:
    """Put the strips of each segment together, first those of short stretches.

    How far neighbouring stretches differ beyond their noise is what tissue and vessel do to a stretch.
    """
    fits = _Fits(*(np.concatenate([getattr(fit, f.name) for fit in parts]) for f in fields(_Fits)))
    n = len(offsets) - 1
    level = fits.base @ TO_RGB.T
    good = (fits.known > LEAST_KNOWN) & (fits.attenuation > LEAST_ATTENUATION) & (level > 0).all(axis=1)
    density, covariance = np.full((n, 3), np.nan), np.full((n, 3, 3), np.nan)
    if not good.any():
        return VesselColours(density, covariance)
    points, level = fits.points[good], level[good]
    to_loss = TO_RGB[None] / level[:, :, None]  # (strips, 3, 3) from heights of the planes to shares of light
    loss = np.einsum("nij,nj->ni", to_loss, fits.height[good])
    noise = LINEAR_NOISE * np.median(fits.misfit[good], axis=0)
    error = to_loss @ noise @ to_loss.transpose(0, 2, 1) / fits.known[good, None, None]
    longest = int(np.diff(offsets).max()) // STRETCH_PX + 1
    number = frame.segment[points] * longest + position(offsets)[points] // STRETCH_PX
    stretch, group = np.unique(number, return_inverse=True)
    loss, error = _means(group, loss, error, len(stretch))
    error = error + _unevenness(loss, error, stretch // longest, stretch)
    segment, of = np.unique(stretch // longest, return_inverse=True)
    mean, error = _means(of, loss, error, len(segment))
    mean = np.clip(mean, -MOST_LOSS, MOST_LOSS)
    density[segment] = -np.log1p(-mean)
    slope = 1.0 / (1.0 - mean)  # of the density by the share of light
    covariance[segment] = error * slope[:, :, None] * slope[:, None, :]
    return VesselColours(density, covariance)


def _means(group: IntArray, value: FloatArray, error: FloatArray, n: int) -> tuple[FloatArray, FloatArray]:
    """Means (n, 3) of each group, weighted by the doubt of the first colour, and the covariance (n, 3, 3) of errors."""
    weight = 1.0 / np.maximum(error[:, 0, 0], SMALLEST_VARIANCE)
    share = weight / sum_by(group, weight, n)[group]
    mean = np.column_stack([sum_by(group, share * value[:, i], n) for i in range(3)])
    summed = np.array([[sum_by(group, share**2 * error[:, i, j], n) for j in range(3)] for i in range(3)])
    return mean, summed.transpose(2, 0, 1)


def _unevenness(loss: FloatArray, error: FloatArray, segment: IntArray, stretch: IntArray) -> FloatArray:
    """Covariance (3, 3) of stretches beyond their noise, from the differences of neighbours."""
    near = np.nonzero((segment[1:] == segment[:-1]) & (np.diff(stretch) == 1))[0]
    if len(near) < LEAST_PAIRS:
        return np.zeros((3, 3))
    noise = 0.5 * (error[near] + error[near + 1])
    low_noise = noise[:, 0, 0] <= np.median(noise[:, 0, 0])
    step = (loss[near + 1] - loss[near])[low_noise]
    scale = np.median(np.abs(step), axis=0) / NORMAL_MAD
    step = np.clip(step, -CLIP_SDS * scale, CLIP_SDS * scale)
    beyond = step.T @ step / (2 * len(step)) - noise[low_noise].mean(axis=0)
    values, vectors = np.linalg.eigh(beyond)
    return np.asarray(vectors @ np.diag(np.maximum(values, 0.0)) @ vectors.T)
