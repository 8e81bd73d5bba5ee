"""A large picture prepared block by block: what the whole picture tells first, then the same arithmetic in each block.

Background and field of view are found on a grid of a few pixels for the whole picture at once, noise from samples of
all blocks, so that neighbouring blocks agree and no seam is seen.
"""

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from scipy import ndimage

from vasohm.arrays import AnyArray, BoolArray, Float32Array
from vasohm.errors import ImageError
from vasohm.image.blocks import Block, blocks_of, on_disk, release
from vasohm.image.calibrate import ScaledImage
from vasohm.image.fov import black_limit, dark_places, find_field_of_view, mirror_outside
from vasohm.image.noise import ENOUGH_PX, fit_noise, least_variance, noise_samples
from vasohm.image.prepare import (
    BACKGROUND_GRID,
    EMPTY_FIELD,
    Flattened,
    PreparedImage,
    PrepareSettings,
    background_sigma,
    block_mean,
    channel_of,
    check_light,
    check_range,
    clipped_pixels,
    conclude,
    darkest_background,
    is_blank,
    linear,
    shown,
    shown_range,
    smooth_background,
    stretched,
)

CORE_PX = 2048
HALO_PX = 16  # small filters reach no further
MIRROR_HALO_PX = 448  # where there is an outside, its mirror image is looked for so far away
SAMPLE_PX = 1_000_000  # for medians and percentiles of the picture
SMOOTH_PX = 1.5
BORDER_CELLS = 3  # of the grid: so far from where the coarse picture is masked off, pixels are asked themselves


@dataclass(frozen=True, slots=True)
class _Levels:
    """What every block must know of the whole picture's intensities."""

    fill: float  # in place of pixels that are not finite
    top: float  # where a camera's gamma has its 1
    low: float  # smallest and greatest intensity
    high: float


def prepare_in_blocks(scaled: ScaledImage, settings: PrepareSettings, fov: BoolArray | None) -> PreparedImage:
    """Do what `prepare` does for a picture whose pixels lie on disk; the arrays of the result lie there too.

    Parameters
    ----------
    scaled, settings, fov : as in `prepare`.

    Raises
    ------
    ImageError : as `prepare`, or where the disk for temporary files has not room enough.

    Notes
    -----
    Percentiles are those of a million pixels.
    """
    raw = scaled.raw
    shape = (raw.pixels.shape[0], raw.pixels.shape[1])
    dark = settings.polarity == "dark"
    sample = _sample(scaled, settings)
    levels = _levels(scaled, settings, sample)
    level, valid, clipped, counts = _look(scaled, settings, levels, fov)
    sample, _ = linear(sample, settings.gamma, levels.fill, levels.top)
    every = _every(shape)
    inside = sample[valid[every]]
    if not inside.size:
        raise ImageError(EMPTY_FIELD)
    if dark:
        check_light(float(np.median(inside)))
    weight = np.concatenate([block_mean(valid[rows].astype(np.float32), BACKGROUND_GRID) for rows in _bands(shape[0])])
    background = smooth_background(level, weight, background_sigma(scaled, settings), dark=dark)
    least = darkest_background(inside) if dark else np.float32(-np.inf)
    law = _noise_law(scaled, settings, levels, (valid, clipped))
    signal, noise_sd = on_disk(shape, np.float32), on_disk(shape, np.float32)
    picture, limits = on_disk(shape, np.uint8), shown_range(inside)
    for block in blocks_of(shape, CORE_PX, HALO_PX if counts.all_inside else MIRROR_HALO_PX):
        brightness, _ = _brightness(scaled, settings, levels, block)
        here = valid[block.window]
        ground = np.maximum(_stretched_window(background, block), least)
        smooth = ndimage.gaussian_filter(brightness, SMOOTH_PX, mode="nearest")
        sd = np.sqrt(law[0] + law[1] * np.maximum(smooth, 0))
        flat = 1 - brightness / ground if dark else brightness - ground
        flat = mirror_outside(flat.astype(np.float32), here) if here.any() else np.zeros_like(flat)
        signal[block.core] = flat[block.inner]
        noise_sd[block.core] = (sd / ground if dark else sd)[block.inner]
        picture[block.core] = shown(brightness, here, limits)[block.inner]
        release(raw.pixels, valid, signal, noise_sd, picture)
    seen = Flattened(
        signal=signal,
        noise_sd=noise_sd,
        picture=picture,
        fov=valid,
        clipped=clipped,
        noise=float(np.median(noise_sd[every][valid[every]])),
        saturated_fraction=counts.clipped / max(counts.inside, 1),
        invalid_fraction=counts.invalid / (shape[0] * shape[1]),
        blank=is_blank(levels.low, levels.high),
    )
    release(noise_sd, valid)
    return conclude(scaled, settings, seen)


@dataclass(frozen=True, slots=True)
class _Counts:
    """Pixels of the whole picture."""

    inside: int
    clipped: int
    invalid: int
    all_inside: bool


def _every(shape: tuple[int, int]) -> tuple[slice, slice]:
    step = max(1, int(np.sqrt(shape[0] * shape[1] / SAMPLE_PX)))
    return slice(step // 2, None, step), slice(step // 2, None, step)


def _bands(height: int) -> Iterator[slice]:
    yield from (slice(top, min(top + CORE_PX, height)) for top in range(0, height, CORE_PX))


def _sample(scaled: ScaledImage, settings: PrepareSettings) -> Float32Array:
    pixels = scaled.raw.pixels
    taken = channel_of(np.array(pixels[_every((pixels.shape[0], pixels.shape[1]))]), settings)
    release(pixels)
    return taken


def _levels(scaled: ScaledImage, settings: PrepareSettings, sample: Float32Array) -> _Levels:
    raw = scaled.raw
    low, high, greatest = np.inf, -np.inf, 0.0
    for rows in _bands(raw.pixels.shape[0]):
        pixels = np.array(raw.pixels[rows])
        greatest = max(greatest, float(np.max(np.abs(pixels), where=np.isfinite(pixels), initial=0)))
        channel = channel_of(pixels, settings)
        finite = np.isfinite(channel)
        low = min(low, float(np.min(channel, where=finite, initial=np.inf)))
        high = max(high, float(np.max(channel, where=finite, initial=-np.inf)))
        release(raw.pixels)
    check_range(greatest)
    known = sample[np.isfinite(sample)]
    if not known.size:
        msg = "no pixel is a finite number."
        raise ImageError(msg)
    return _Levels(float(np.median(known)), raw.white_level or high or 1.0, low, high)


def _brightness(
    scaled: ScaledImage, settings: PrepareSettings, levels: _Levels, block: Block
) -> tuple[Float32Array, BoolArray]:
    channel = channel_of(np.array(scaled.raw.pixels[block.window]), settings)
    return linear(channel, settings.gamma, levels.fill, levels.top)


def _look(
    scaled: ScaledImage, settings: PrepareSettings, levels: _Levels, fov: BoolArray | None
) -> tuple[Float32Array, BoolArray, BoolArray, _Counts]:
    """Return the background's grid of mean intensities, where the field of view is, where it is clipped, and counts."""
    raw, grid = scaled.raw, BACKGROUND_GRID
    shape = (raw.pixels.shape[0], raw.pixels.shape[1])
    coarse = tuple(-(-n // grid) for n in shape)
    mean, invalid, clipped = np.zeros(coarse, np.float32), on_disk(shape, np.bool_), on_disk(shape, np.bool_)
    for block in blocks_of(shape, CORE_PX, HALO_PX):
        brightness, bad = _brightness(scaled, settings, levels, block)
        invalid[block.core] = bad[block.inner]
        clipped[block.core] = clipped_pixels(replace(raw, pixels=np.array(raw.pixels[block.core])), settings)
        mean[_on_grid(block.core)] = block_mean(brightness[block.inner], grid)
        release(raw.pixels, invalid, clipped)
    border = None if fov is not None else _border(mean, settings, levels)
    level, valid = np.zeros(coarse, np.float32), on_disk(shape, np.bool_)
    n_inside = n_clipped = n_invalid = 0
    for block in blocks_of(shape, CORE_PX, HALO_PX):
        core = block.core
        brightness, _ = _brightness(scaled, settings, levels, block)
        inside = fov[core] if fov is not None else _inside(brightness, settings, border, block)[block.inner]
        here = inside & ~invalid[core]
        valid[core] = here
        level[_on_grid(core)] = block_mean(np.where(here, brightness[block.inner], 0), grid)
        n_inside += int(here.sum())
        n_clipped += int((clipped[core] & here).sum())
        n_invalid += int(invalid[core].sum())
        release(raw.pixels, valid, invalid, clipped)
    counts = _Counts(n_inside, n_clipped, n_invalid, n_inside == shape[0] * shape[1])
    return level, valid, clipped, counts


def _border(mean: Float32Array, settings: PrepareSettings, levels: _Levels) -> tuple[BoolArray, float] | None:
    """Where, on the background's grid, the picture may be masked off, and how dark it is there; None: nowhere."""
    dark = settings.polarity == "dark"
    found = find_field_of_view(mean, vessels_are_dark=dark)
    if found.all():
        return None
    limit = black_limit(levels.low, float(np.percentile(mean, 90))) if dark else levels.low
    return ndimage.binary_dilation(~found, iterations=BORDER_CELLS), limit


def _inside(
    brightness: Float32Array, settings: PrepareSettings, border: tuple[BoolArray, float] | None, block: Block
) -> BoolArray:
    """Field of view in a block's window, to the pixel."""
    if border is None:
        return np.ones(brightness.shape, dtype=bool)
    near, limit = border
    seen = np.repeat(np.repeat(near[_on_grid(block.window)], BACKGROUND_GRID, axis=0), BACKGROUND_GRID, axis=1)
    top, left = (part.start % BACKGROUND_GRID for part in block.window)
    seen = seen[top : top + brightness.shape[0], left : left + brightness.shape[1]]
    return ~(seen & dark_places(brightness, limit, vessels_are_dark=settings.polarity == "dark"))


def _on_grid(core: tuple[slice, slice]) -> tuple[slice, slice]:
    rows, columns = (slice(part.start // BACKGROUND_GRID, -(-part.stop // BACKGROUND_GRID)) for part in core)
    return rows, columns


def _stretched_window(background: Float32Array, block: Block) -> Float32Array:
    """Background of the pixels of a window, interpolated as in the whole picture."""
    grid = BACKGROUND_GRID
    low = [max(part.start // grid - 1, 0) for part in block.window]
    high = [-(-part.stop // grid) + 1 for part in block.window]
    taken = background[low[0] : high[0], low[1] : high[1]]
    full = stretched(taken, (taken.shape[0] * grid, taken.shape[1] * grid))
    rows, columns = (
        slice(part.start - start * grid, part.stop - start * grid)
        for part, start in zip(block.window, low, strict=True)
    )
    return full[rows, columns]


def _noise_law(
    scaled: ScaledImage, settings: PrepareSettings, levels: _Levels, fields: tuple[AnyArray, AnyArray]
) -> tuple[float, float]:
    """Variance of a pixel as a + b x brightness, from samples of all blocks."""
    valid, clipped = fields
    raw = scaled.raw
    every = 1 + valid.shape[0] * valid.shape[1] // ENOUGH_PX
    residuals, means = [], []
    for block in blocks_of(valid.shape, CORE_PX, HALO_PX):
        brightness, _ = _brightness(scaled, settings, levels, block)
        usable = ndimage.binary_erosion(valid[block.window] & ~clipped[block.window], iterations=2)
        inside = np.zeros_like(usable)
        inside[block.inner] = usable[block.inner]
        smooth = ndimage.gaussian_filter(brightness, SMOOTH_PX, mode="nearest")
        residual, mean = noise_samples(brightness, smooth, inside, every)
        residuals.append(residual)
        means.append(mean)
        release(raw.pixels, valid, clipped)
    step = 1.0 if raw.white_level is not None else 0.0
    floor = max(step**2 / 12, least_variance(levels.high - levels.low))
    return fit_noise(np.concatenate(residuals), np.concatenate(means), floor)
