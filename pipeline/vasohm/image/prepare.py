"""From a scaled picture to one in which vessels are bright, the background is flat and the noise is known."""

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from scipy import ndimage

from vasohm.arrays import AnyArray, BoolArray, Float32Array, freeze
from vasohm.errors import ImageError
from vasohm.flags import Flag
from vasohm.image.blocks import release
from vasohm.image.calibrate import ScaledImage
from vasohm.image.eye import Magnification
from vasohm.image.fov import find_field_of_view, mirror_outside
from vasohm.image.noise import noise_against_brightness
from vasohm.image.read import RawImage


@dataclass(frozen=True, slots=True)
class PrepareSettings:
    """How brightness is read: which channel, which polarity, a camera's gamma."""

    channel: int | str  # green | red | blue | luminance | 0, 1, 2 ...
    polarity: Literal["dark", "bright"]
    gamma: float  # 1 for a linear camera; intensities are raised to this power first
    radius_um: tuple[float, float]  # vessels wider than this are background


@dataclass(frozen=True, slots=True)
class ImageQuality:
    """What image.csv says about the picture; intensities in units of `signal`."""

    noise: float  # median standard deviation of a pixel of `signal`
    saturated_fraction: float
    invalid_fraction: float
    exposure_ok: bool


@dataclass(frozen=True, slots=True, eq=False)
class PreparedImage:
    """One channel, ready to be searched; all arrays (h, w).

    `signal` is about 0 beside vessels, positive in them, linear in light (dark vessels: 1 - I / background, the share
    of light taken away; bright ones: I - background, in units of the file), and mirrored outside the field of view.
    `noise_sd` is its pixel standard deviation; `picture` the measured channel in 8 bits, for showing only.
    """

    signal: Float32Array
    noise_sd: Float32Array
    picture: AnyArray
    fov: BoolArray
    clipped: BoolArray
    polarity: Literal["dark", "bright"]
    pixel_size_um: float
    pixel_size_se_um: float  # NaN where not known
    pixel_size_source: str
    quality: ImageQuality
    notes: tuple[str, ...]
    flags: Flag
    magnification: Magnification | None = None  # None: the pixel size was not corrected for the eye
    block_px: int = 0  # edge of the blocks that a large picture is worked on in, its arrays on disk; 0: in one piece

    def __post_init__(self) -> None:
        freeze(self)


LUMINANCE = (0.299, 0.587, 0.114)  # ITU-R BT.601, the weights of JPEG
CHANNELS = {"red": 0, "green": 1, "blue": 2}
SMALLEST, GREATEST = 1e-9, 1e15  # of the greatest intensity: squares and their inverses stay within single precision
INVALID_MARGIN_PX = 2  # a pixel beside one that is not finite has been touched by it
BACKGROUND_RADII = 3.0  # the background is smoothed over this many times the largest vessel radius
BACKGROUND_LEAST_PX = 16.0
BACKGROUND_GRID = 4  # the background is smooth: computed on blocks of this edge
SATURATED_LIMIT = 0.01  # of the field; vessels cover about a tenth of it, so that this may be a tenth of them
EMPTY_FIELD = "the field of view is empty. Check fov_file, or the picture, which may be black."
BLANK_SPREAD = 1e-9  # relative spread below which all pixels are one value


def prepare(scaled: ScaledImage, settings: PrepareSettings, fov: BoolArray | None) -> PreparedImage:
    """Choose the channel, find the field of view, flatten the background, and learn the noise.

    Parameters
    ----------
    scaled : the picture with its pixel size.
    settings : channel, polarity, gamma, radii looked for.
    fov : (h, w) bool field of view given by a person, or None to find it.

    Raises
    ------
    ImageError : no finite pixel, or a channel that the picture does not have.

    Notes
    -----
    Dark vessels: signal = 1 - I / background, the share of light that the vessel takes away. Blur acts on light, so a
    blurred absorbing tube keeps its exact profile in this unit, which it does not in optical density. Bright vessels:
    signal = I - background, in units of the file.
    """
    raw = scaled.raw
    brightness, invalid = _brightness(raw, settings)
    clipped = clipped_pixels(raw, settings)
    dark = settings.polarity == "dark"
    inside = find_field_of_view(brightness, vessels_are_dark=dark) if fov is None else fov
    valid = inside & ~invalid
    if not valid.any():
        raise ImageError(EMPTY_FIELD)
    sigma = background_sigma(scaled, settings)
    background = _background(brightness, valid, sigma, dark=dark)
    if dark:
        check_light(float(np.median(brightness[valid])))
    signal = 1 - brightness / background if dark else brightness - background
    smooth = ndimage.gaussian_filter(brightness, 1.5, mode="nearest")
    step = 1.0 if raw.white_level is not None else 0.0
    base, slope = noise_against_brightness(brightness, smooth, valid & ~clipped, step)
    noise_sd = np.sqrt(base + slope * np.maximum(smooth, 0))
    if dark:
        noise_sd = noise_sd / background
    saturated = float(clipped[valid].mean())
    blank = is_blank(float(brightness[valid].min()), float(brightness[valid].max()))
    seen = Flattened(
        signal=mirror_outside(signal.astype(np.float32), valid),
        noise_sd=noise_sd.astype(np.float32),
        picture=_picture(brightness, valid),
        fov=valid,
        clipped=clipped,
        noise=float(np.median(noise_sd[valid])),
        saturated_fraction=saturated,
        invalid_fraction=float(invalid.mean()),
        blank=blank,
    )
    return conclude(scaled, settings, seen)


@dataclass(frozen=True, slots=True, eq=False)
class Flattened:
    """The arrays of a `PreparedImage`, and what was counted while they were made."""

    signal: Float32Array
    noise_sd: Float32Array
    picture: AnyArray
    fov: BoolArray
    clipped: BoolArray
    noise: float
    saturated_fraction: float
    invalid_fraction: float
    blank: bool


def conclude(scaled: ScaledImage, settings: PrepareSettings, seen: Flattened) -> PreparedImage:
    """Judge the picture's quality and put the noun together."""
    raw, saturated = scaled.raw, seen.saturated_fraction
    flags = scaled.flags | raw.flags
    if seen.invalid_fraction > 0:
        flags |= Flag.INVALID_PIXELS
    if saturated > SATURATED_LIMIT:
        flags |= Flag.SATURATED
    if seen.blank:
        flags |= Flag.BLANK
    quality = ImageQuality(
        noise=seen.noise,
        saturated_fraction=saturated,
        invalid_fraction=seen.invalid_fraction,
        exposure_ok=saturated <= SATURATED_LIMIT and not seen.blank,
    )
    return PreparedImage(
        signal=seen.signal,
        noise_sd=seen.noise_sd,
        picture=seen.picture,
        fov=seen.fov,
        clipped=seen.clipped,
        polarity=settings.polarity,
        pixel_size_um=scaled.pixel_size_um,
        pixel_size_se_um=scaled.pixel_size_se_um,
        pixel_size_source=scaled.pixel_size_source,
        quality=quality,
        notes=raw.notes + scaled.notes,
        flags=flags,
        magnification=scaled.magnification,
        block_px=raw.block_px,
    )


def background_sigma(scaled: ScaledImage, settings: PrepareSettings) -> float:
    """Pixels over which the background is smoothed."""
    return max(BACKGROUND_LEAST_PX, BACKGROUND_RADII * settings.radius_um[1] / scaled.pixel_size_um)


def check_light(median: float) -> None:
    """Refuse a picture of dark vessels whose light is negative.

    Raises
    ------
    ImageError : the median of its intensities is below 0.
    """
    if median < 0:
        msg = (
            f"the median of the picture is {median:g}: dark vessels are measured as the "
            "share of light they take away, and light is not negative. Give the picture without an offset taken off."
        )
        raise ImageError(msg)


def _brightness(raw: RawImage, settings: PrepareSettings) -> tuple[Float32Array, BoolArray]:
    """Return one channel, linear in light, finite everywhere, and where it was not."""
    pixels = raw.pixels
    check_range(float(np.max(np.abs(pixels), where=np.isfinite(pixels), initial=0)))
    channel = channel_of(pixels, settings)
    finite = channel[np.isfinite(channel)]
    if not finite.size:
        msg = "no pixel is a finite number."
        raise ImageError(msg)
    fill = float(np.median(finite)) if finite.size < channel.size else 0.0
    return linear(channel, settings.gamma, fill, raw.white_level or float(finite.max()) or 1.0)


def check_range(greatest: float) -> None:
    """Refuse intensities whose squares single precision cannot hold.

    Raises
    ------
    ImageError : the greatest absolute intensity is too small or too great.
    """
    if greatest and not SMALLEST <= greatest <= GREATEST:
        msg = f"the greatest intensity is {greatest:g}, outside {SMALLEST:g} to {GREATEST:g}. Rescale the picture."
        raise ImageError(msg)


def channel_of(pixels: AnyArray, settings: PrepareSettings) -> Float32Array:
    """Choose the measured channel (h, w) of pixels (h, w) or (h, w, channels), as float32.

    Raises
    ------
    ImageError : the picture does not have that channel.
    """
    if pixels.ndim == 2:
        return pixels.astype(np.float32)
    if settings.channel == "luminance":
        return np.asarray(pixels[..., :3].astype(np.float32) @ np.array(LUMINANCE, dtype=np.float32))
    index = CHANNELS.get(str(settings.channel), settings.channel)
    if not isinstance(index, int) or index >= pixels.shape[2]:
        msg = f"channel {settings.channel!r} asked for, but the picture has {pixels.shape[2]}. Set [image] channel."
        raise ImageError(msg)
    return pixels[..., index].astype(np.float32)


def linear(channel: Float32Array, gamma: float, fill: float, top: float) -> tuple[Float32Array, BoolArray]:
    """Fill what is not finite, tell where that is and what touches it, and undo the camera's gamma below `top`."""
    invalid = ~np.isfinite(channel)
    if invalid.any():
        channel = np.where(invalid, np.float32(fill), channel)
        invalid = ndimage.binary_dilation(invalid, iterations=INVALID_MARGIN_PX)
    if gamma != 1:
        channel = top * np.clip(channel / top, 0, None) ** gamma
    return np.asarray(channel, dtype=np.float32), np.asarray(invalid, dtype=bool)


def clipped_pixels(raw: RawImage, settings: PrepareSettings) -> BoolArray:
    """Where the stored value is at the top of the file's scale (or at its bottom, for dark vessels)."""
    if raw.white_level is None:
        return np.zeros(raw.pixels.shape[:2], dtype=bool)
    pixels = raw.pixels
    if pixels.ndim == 3:
        index = CHANNELS.get(str(settings.channel), settings.channel)
        pixels = pixels[..., index] if isinstance(index, int) else pixels.max(axis=2)
    at_top = pixels >= raw.white_level
    return np.asarray(at_top | (pixels <= 0) if settings.polarity == "dark" else at_top, dtype=bool)


def is_blank(low: float, high: float) -> bool:
    """Whether all pixels between these two intensities are one value."""
    return high - low <= BLANK_SPREAD * max(abs(low), abs(high))


def _background(brightness: Float32Array, valid: BoolArray, sigma: float, *, dark: bool) -> Float32Array:
    """Smooth background from the pixels that are not vessels, inside the field of view only."""
    weight = block_mean(valid.astype(np.float32), BACKGROUND_GRID)
    level = block_mean(np.where(valid, brightness, 0), BACKGROUND_GRID)
    full = stretched(smooth_background(level, weight, sigma, dark=dark), (brightness.shape[0], brightness.shape[1]))
    return np.maximum(full, darkest_background(brightness[valid])) if dark else full


def darkest_background(inside: Float32Array) -> np.float32:
    """Return what a background of dark vessels is at least, from intensities inside the field of view."""
    return np.float32(1e-3 * max(float(np.percentile(inside, 95)), 1e-30))


def smooth_background(level: Float32Array, weight: Float32Array, sigma: float, *, dark: bool) -> Float32Array:
    """Background on the grid of `BACKGROUND_GRID`: from means of intensity and of the field of view in its blocks."""
    grid = BACKGROUND_GRID
    level = np.divide(level, weight, out=np.zeros_like(level), where=weight > 0)
    towards = -1.0 if dark else 1.0
    keep = weight.copy()
    smooth = level
    for _ in range(3):
        spread = ndimage.gaussian_filter(keep, sigma / grid, mode="nearest", truncate=3)
        smooth = ndimage.gaussian_filter(level * keep, sigma / grid, mode="nearest", truncate=3)
        smooth = np.divide(smooth, spread, out=np.zeros_like(smooth), where=spread > 1e-4)
        excess = towards * (level - smooth)
        used = keep > 0
        limit = 1.0 * 1.4826 * np.median(np.abs(excess[used])) if used.any() else 0.0
        keep = np.where(excess > limit, 0, weight)
    reach = ndimage.gaussian_filter(keep, sigma / grid, mode="nearest", truncate=3) > 1e-4
    if not reach.all() and reach.any():
        near = ndimage.distance_transform_edt(~reach, return_distances=False, return_indices=True)
        smooth = smooth[tuple(near)]
    return smooth


def stretched(smooth: Float32Array, shape: tuple[int, int]) -> Float32Array:
    """Interpolate from the grid of `BACKGROUND_GRID` to pixels."""
    full = ndimage.zoom(smooth, BACKGROUND_GRID, order=1, mode="nearest", grid_mode=True)
    return np.asarray(full[: shape[0], : shape[1]], dtype=np.float32)


def block_mean(values: Float32Array, grid: int) -> Float32Array:
    """Means of blocks of `grid` x `grid` pixels; the last ones are filled up by repeating the border."""
    height, width = values.shape
    padded = np.pad(values, ((0, -height % grid), (0, -width % grid)), mode="edge")
    blocks = padded.reshape(padded.shape[0] // grid, grid, padded.shape[1] // grid, grid)
    return np.asarray(blocks.mean(axis=(1, 3)), dtype=np.float32)


def _picture(brightness: Float32Array, valid: BoolArray) -> AnyArray:
    return shown(brightness, valid, shown_range(brightness[valid]))


def shown_range(inside: Float32Array) -> tuple[float, float]:
    """Intensities that are shown black and white."""
    low, high = np.percentile(inside, [0.5, 99.5])
    return low, high


def shown(brightness: Float32Array, valid: BoolArray, limits: tuple[float, float]) -> AnyArray:
    """Stretch the measured channel to 8 bits for pictures of the results."""
    low, high = limits
    share = np.clip((brightness - low) / max(float(high - low), 1e-30), 0, 1)
    return np.where(valid, np.round(255 * share), 0).astype(np.uint8)


def crop(prepared: PreparedImage, window: tuple[slice, slice]) -> PreparedImage:
    """Copy a piece of a prepared picture into memory, to be worked on in one piece."""
    arrays = (prepared.signal, prepared.noise_sd, prepared.picture, prepared.fov, prepared.clipped)
    signal, noise_sd, picture, fov, clipped = (np.array(values[window]) for values in arrays)
    release(*arrays)
    return replace(prepared, signal=signal, noise_sd=noise_sd, picture=picture, fov=fov, clipped=clipped, block_px=0)
