"""An oriented bank of elongated second differences on a pyramid: how much each place looks like a tube."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage

from vasohm.arrays import AnyArray, Float32Array, freeze

N_ANGLES = 12  # 16 gave nothing more in trials on phantoms
SIGMA_FINE = (1.0, 1.4, 2.0)  # at full resolution, px
SIGMA_LEVEL = (1.4, 2.0)  # at every coarser level, level px
SIDE_DISTANCE = 1.8  # in sigma: where the two side lines lie
LEAST_ELONGATION_PX = 5.0
PYRAMID_KERNEL = np.array([1, 4, 6, 4, 1], dtype=np.float32) / 16  # Burt & Adelson, IEEE Trans Commun 1983;31:532
PYRAMID_BLUR = 0.62  # level px of blur that the reductions leave in a level, taken off in quadrature
NOISE_BLOCK_PX = 10
NOISE_WINDOW_PX = 250
NOISE_PERCENTILE = 10  # of the blocks: vessels cover the rest of a mesh, never all of it
MAD_TO_SD = 1 / 0.6744897501960817
PAD_SIGMAS = 3.0


@dataclass(frozen=True, slots=True, eq=False)
class ScaleResponse:
    """One scale's strongest response over all angles, in units of its own noise, on the grid of its level."""

    level: int
    sigma_px: float  # in pixels of the picture
    bright: Float32Array  # lines brighter than both sides
    dark: Float32Array  # the same for the flipped picture: what noise and texture alone would give
    angle: AnyArray  # uint8 index of the angle of `bright`'s line
    unit: Float32Array  # the noise that the responses are counted in: bright x unit is a contrast

    def __post_init__(self) -> None:
        freeze(self)


def pyramid(image: Float32Array, levels: int) -> list[Float32Array]:
    """Reduce the picture by 2 again and again; level 0 is the picture."""
    stack = [image]
    for _ in range(levels):
        smooth = ndimage.correlate1d(stack[-1], PYRAMID_KERNEL, axis=0, mode="nearest")
        smooth = ndimage.correlate1d(smooth, PYRAMID_KERNEL, axis=1, mode="nearest")
        stack.append(np.ascontiguousarray(smooth[::2, ::2]))
    return stack


def levels_for(largest_radius_px: float, shape: tuple[int, int]) -> int:
    """Return the coarsest level whose largest sigma does not exceed the largest radius."""
    by_radius = int(np.floor(np.log2(max(largest_radius_px, 1.0) / SIGMA_LEVEL[0])))
    by_shape = int(np.floor(np.log2(max(min(shape), 1) / 16)))
    return max(0, min(by_radius, by_shape))


def respond(stack: list[Float32Array]) -> Iterator[ScaleResponse]:
    """Filter every level with its scales; finest first."""
    for level, image in enumerate(stack):
        sigmas = SIGMA_FINE if level == 0 else SIGMA_LEVEL
        pad = int(np.ceil(PAD_SIGMAS * max(LEAST_ELONGATION_PX, sigmas[-1] * np.sqrt(9))))
        shape = tuple(fft.next_fast_len(n + 2 * pad, real=True) for n in image.shape)
        margins = [(pad, full - n - pad) for n, full in zip(image.shape, shape, strict=True)]
        spectrum = fft.rfft2(np.pad(image, margins, mode="symmetric" if min(image.shape) > 1 else "edge"))
        inner = tuple(slice(pad, pad + n) for n in image.shape)
        for sigma in sigmas:
            yield _respond_at(spectrum, (shape[0], shape[1]), inner, (level, sigma))


def _respond_at(
    spectrum: AnyArray, shape: tuple[int, int], inner: tuple[slice, ...], scale: tuple[int, float]
) -> ScaleResponse:
    level, sigma = scale
    across2 = sigma**2 - (PYRAMID_BLUR**2 if level else 0.0)
    along2 = across2 + max(sigma * np.sqrt(8), LEAST_ELONGATION_PX) ** 2
    fy = (2 * np.pi * fft.fftfreq(shape[0])).astype(np.float32)[:, None]
    fx = (2 * np.pi * fft.rfftfreq(shape[1])).astype(np.float32)[None, :]
    size = tuple(part.stop - part.start for part in inner)
    bright, dark = np.full(size, -np.inf, np.float32), np.full(size, -np.inf, np.float32)
    angle = np.zeros(size, np.uint8)
    noise: list[Float32Array] = []
    for index in range(N_ANGLES):
        theta = np.pi * index / N_ANGLES
        across = fx * np.float32(-np.sin(theta)) + fy * np.float32(np.cos(theta))
        along = fx * np.float32(np.cos(theta)) + fy * np.float32(np.sin(theta))
        transfer = np.exp(np.float32(-0.5 * across2) * across**2 + np.float32(-0.5 * along2) * along**2)
        transfer *= 1 - np.cos(np.float32(SIDE_DISTANCE * sigma) * across)
        response = fft.irfft2(spectrum * transfer, s=shape)[inner]
        if index % (N_ANGLES // 2) == 0:
            noise.append(_block_noise(response))
        angle[response > bright] = index
        np.maximum(bright, response, out=bright)
        np.maximum(dark, -response, out=dark)
    unit = _noise_unit(np.mean(noise, axis=0), bright.shape)
    return ScaleResponse(level, sigma * 2**level, bright / unit, dark / unit, angle, unit)


def _block_noise(response: Float32Array) -> Float32Array:
    """Median of |response| in blocks, as a standard deviation."""
    edge = NOISE_BLOCK_PX
    rows, columns = max(1, response.shape[0] // edge), max(1, response.shape[1] // edge)
    height, width = min(response.shape[0], rows * edge), min(response.shape[1], columns * edge)
    blocks = np.abs(response[:height, :width]).reshape(rows, height // rows, columns, width // columns)
    return np.asarray(np.median(blocks, axis=(1, 3)) * MAD_TO_SD, dtype=np.float32)


def _noise_unit(blocks: Float32Array, shape: tuple[int, int]) -> Float32Array:
    """Local noise of one angle's response: a low percentile of the blocks around, so that vessels do not count."""
    window = max(1, NOISE_WINDOW_PX // NOISE_BLOCK_PX)
    local = ndimage.percentile_filter(blocks, NOISE_PERCENTILE, size=window, mode="nearest")
    local = ndimage.uniform_filter(local, window, mode="nearest")
    local = np.maximum(local, max(1e-3 * float(local.max()), 1e-12))
    factors = [n / m for n, m in zip(shape, local.shape, strict=True)]
    return np.asarray(ndimage.zoom(local, factors, order=1, mode="nearest", grid_mode=True), dtype=np.float32)
