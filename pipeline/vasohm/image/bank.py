"""An oriented bank of elongated second differences on a pyramid: how much each place looks like a tube."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage

from vasohm.arrays import AnyArray, Float32Array, IntArray, freeze

N_ANGLES = 12  # 16 gave nothing more in trials on phantoms
SIGMA_FINE = (1.2, 1.8)  # at full resolution, px; a third between them gave nothing more
SIGMA_LEVEL = (1.4, 2.0)  # at every coarser level, level px
SIDE_DISTANCE = 1.8  # in sigma: where the two side lines lie
LEAST_ELONGATION_PX = 5.0
PYRAMID_KERNEL = np.array([1, 4, 6, 4, 1], dtype=np.float32) / 16  # Burt & Adelson, IEEE Trans Commun 1983;31:532
PYRAMID_BLUR = 0.62  # level px of blur that the reductions leave in a level, taken off in quadrature
NOISE_BLOCK_PX = 10
NOISE_WINDOW_BLOCKS = 25
NOISE_STEP_BLOCKS = 5  # between the places where the noise is read: a fifth of the window
NOISE_PERCENTILE = 10  # of the blocks: vessels cover the rest of a mesh, never all of it
LEAST_NOISE = 0.5  # of what the pixels' own noise gives: a picture without noise has no less
LESSER_OF_TWO = 1.1  # mean over lesser of the two angles' noise, of which each block knows either to a tenth
MAD_TO_SD = 1 / 0.6744897501960817
PAD_SIGMAS = 3.0
LEAST_SIDE_PX = 8  # of the coarsest level
ROOM_SIGMAS = 8.0  # of a filter across: where the picture is narrower, a vessel may leave no place free


@dataclass(frozen=True, slots=True, eq=False)
class ScaleResponse:
    """One scale's strongest response over all angles, in units of its own noise, on the grid of its level."""

    level: int
    sigma_px: float  # in pixels of the picture
    bright: Float32Array  # lines brighter than both sides
    dark: Float32Array  # the same for the flipped picture: what noise and texture alone would give
    angle: AnyArray  # uint8 index of the angle of `bright`'s line
    unit: Float32Array  # the noise that the responses are counted in, one value a block of the grid

    def __post_init__(self) -> None:
        freeze(self)

    def contrast_at(self, row: IntArray, column: IntArray) -> Float32Array:
        """Response at some pixels in units of the picture."""
        down, right = (n / m for n, m in zip(self.bright.shape, self.unit.shape, strict=True))
        unit = self.unit[(row / down).astype(np.int64), (column / right).astype(np.int64)]
        return np.asarray(self.bright[row, column] * unit, dtype=np.float32)


def pyramid(image: Float32Array, levels: int) -> list[Float32Array]:
    """Reduce the picture by 2 again and again; level 0 is the picture."""
    stack = [image]
    for _ in range(levels):
        smooth = ndimage.correlate1d(stack[-1], PYRAMID_KERNEL, axis=0, mode="nearest")[::2]
        smooth = ndimage.correlate1d(smooth, PYRAMID_KERNEL, axis=1, mode="nearest")
        stack.append(np.ascontiguousarray(smooth[:, ::2]))
    return stack


def levels_for(largest_radius_px: float, shape: tuple[int, int]) -> int:
    """Return the coarsest level whose largest sigma does not exceed the largest radius."""
    by_radius = int(np.floor(np.log2(max(largest_radius_px, 1.0) / SIGMA_LEVEL[0])))
    by_shape = int(np.floor(np.log2(max(min(shape), 1) / LEAST_SIDE_PX)))
    return max(0, min(by_radius, by_shape))


def respond(stack: list[Float32Array]) -> Iterator[ScaleResponse]:
    """Filter every level with its scales; finest first."""
    for level, image in enumerate(stack):
        sigmas = SIGMA_FINE if level == 0 else SIGMA_LEVEL
        pad = int(np.ceil(PAD_SIGMAS * max(LEAST_ELONGATION_PX, sigmas[-1] * np.sqrt(9))))
        height, width = (fft.next_fast_len(n + 2 * pad, real=True) for n in image.shape)
        margins = [(pad, full - n - pad) for n, full in zip(image.shape, (height, width), strict=True)]
        padded = np.pad(image, margins, mode="symmetric" if min(image.shape) > 1 else "edge")
        spectrum = fft.rfft2(padded, workers=1)
        inner = tuple(slice(pad, pad + n) for n in image.shape)
        for sigma in sigmas:
            yield _respond_at(spectrum, (height, width), inner, (level, sigma))


def _respond_at(
    spectrum: AnyArray, shape: tuple[int, int], inner: tuple[slice, ...], scale: tuple[int, float]
) -> ScaleResponse:
    level, sigma = scale
    size = tuple(part.stop - part.start for part in inner)
    bright, dark = np.full(size, -np.inf, np.float32), np.full(size, np.inf, np.float32)
    angle = np.zeros(size, np.uint8)
    noise: list[Float32Array] = []
    for index, transfer in _transfers(shape, sigma, PYRAMID_BLUR if level else 0.0):
        response = fft.irfft2(spectrum * transfer, s=shape, workers=1, overwrite_x=True)[inner]
        if index % (N_ANGLES // 2) == 0:
            noise.append(_block_noise(response))
        np.copyto(angle, np.uint8(index), where=response > bright)
        np.maximum(bright, response, out=bright)
        np.minimum(dark, response, out=dark)
    # In a narrow picture a vessel runs along it, and the filter across the vessel answers to noise alone
    narrow = min(size) < ROOM_SIGMAS * sigma
    blocks = np.min(noise, axis=0) * np.float32(LESSER_OF_TWO) if narrow else np.mean(noise, axis=0)
    unit = np.maximum(_noise_unit(blocks), np.float32(LEAST_NOISE * _white_gain(level, sigma)))
    full = unit
    for axis in (0, 1):
        places = (np.arange(unit.shape[axis]) + 0.5) * size[axis] / unit.shape[axis] - 0.5
        full = _stretched(full, places, size[axis], axis)
    bright /= full
    dark /= -full
    return ScaleResponse(level, sigma * 2**level, bright, dark, angle, unit)


def _white_gain(level: int, sigma: float) -> float:
    """Standard deviation of one angle's response to white noise of unit variance in the picture, in closed form."""
    along = np.sqrt(sigma**2 + max(sigma * np.sqrt(8), LEAST_ELONGATION_PX) ** 2)
    sides = 1.5 - 2 * np.exp(-(SIDE_DISTANCE**2) / 4) + 0.5 * np.exp(-(SIDE_DISTANCE**2))
    return float(np.sqrt(sides / (4 * np.pi * sigma * along)) / 2**level)


def _transfers(shape: tuple[int, int], sigma: float, blur: float) -> Iterator[tuple[int, Float32Array]]:
    """Transfer functions of one scale, with the index of their angle.

    exp(-(s_u^2 f_u^2 + s_v^2 f_v^2) / 2) (1 - cos(1.8 s f_u)), u across and v along the line. The quadratic form and
    the cosine of a sum are put together from functions of one frequency each; an angle's mirror image is the same
    function with the rows of frequencies turned round.
    """
    across2 = sigma**2 - blur**2
    along2 = across2 + max(sigma * np.sqrt(8), LEAST_ELONGATION_PX) ** 2
    fy = (2 * np.pi * fft.fftfreq(shape[0]))[:, None]
    fx = (2 * np.pi * fft.rfftfreq(shape[1]))[None, :]
    mixed = (fy * fx).astype(np.float32)
    for index in range(N_ANGLES // 2 + 1):
        sine, cosine = np.sin(np.pi * index / N_ANGLES), np.cos(np.pi * index / N_ANGLES)
        transfer = mixed * np.float32((across2 - along2) * sine * cosine)
        transfer -= (0.5 * (across2 * sine**2 + along2 * cosine**2) * fx**2).astype(np.float32)
        transfer -= (0.5 * (across2 * cosine**2 + along2 * sine**2) * fy**2).astype(np.float32)
        np.exp(transfer, out=transfer)
        turn_x, turn_y = -SIDE_DISTANCE * sigma * sine * fx, SIDE_DISTANCE * sigma * cosine * fy
        sides = np.cos(turn_y).astype(np.float32) * np.cos(turn_x).astype(np.float32)
        sides -= np.sin(turn_y).astype(np.float32) * np.sin(turn_x).astype(np.float32)
        np.subtract(1, sides, out=sides)
        transfer *= sides
        yield index, transfer
        if 0 < index < N_ANGLES // 2:
            yield N_ANGLES - index, np.concatenate((transfer[:1], transfer[:0:-1]))


def _block_noise(response: Float32Array) -> Float32Array:
    """Median of |response| in blocks, as a standard deviation."""
    edge = NOISE_BLOCK_PX
    rows, columns = max(1, response.shape[0] // edge), max(1, response.shape[1] // edge)
    height, width = min(response.shape[0], rows * edge), min(response.shape[1], columns * edge)
    blocks = response[:height, :width].reshape(rows, height // rows, columns, width // columns)
    inside = np.abs(blocks[:, ::2].transpose(0, 2, 1, 3)).reshape(rows, columns, -1)  # every other row tells enough
    return np.asarray(np.median(inside, axis=2, overwrite_input=True) * MAD_TO_SD, dtype=np.float32)


def _noise_unit(blocks: Float32Array) -> Float32Array:
    """Local noise of one angle's response: a low percentile of the blocks around, so that vessels do not count."""
    half = NOISE_WINDOW_BLOCKS // 2
    around = np.pad(blocks, half, mode="symmetric")
    windows = np.lib.stride_tricks.sliding_window_view(around, (2 * half + 1, 2 * half + 1))
    places = [np.unique(np.append(np.arange(0, n, NOISE_STEP_BLOCKS), n - 1)) for n in blocks.shape]
    chosen = windows[np.ix_(*places)].reshape(len(places[0]), len(places[1]), -1)
    rank = int(NOISE_PERCENTILE / 100 * chosen.shape[2])
    local = np.partition(chosen, rank, axis=2)[..., rank]
    for axis in (0, 1):
        local = _stretched(local, places[axis], blocks.shape[axis], axis)
    local = ndimage.uniform_filter(local, 2 * half + 1, mode="nearest")
    return np.asarray(np.maximum(local, max(1e-3 * float(local.max()), 1e-12)), dtype=np.float32)


def _stretched(values: Float32Array, places: AnyArray, n: int, axis: int) -> Float32Array:
    """Interpolate linearly along one axis from `places` to 0, 1 ... n - 1; constant beyond both ends."""
    position = np.interp(np.arange(n), places, np.arange(len(places)))
    low = np.minimum(position.astype(np.int64), len(places) - 1)
    high = np.minimum(low + 1, len(places) - 1)
    share = (position - low).astype(np.float32)
    share = share[:, None] if axis == 0 else share[None, :]
    lower = np.take(values, low, axis)
    return np.asarray(lower + share * (np.take(values, high, axis) - lower), dtype=np.float32)
