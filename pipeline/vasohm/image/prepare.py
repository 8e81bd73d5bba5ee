"""From a scaled picture to one in which vessels are bright, the background is flat and the noise is known."""

from dataclasses import dataclass
from typing import Literal

from vasohm.arrays import BoolArray, Float32Array, freeze
from vasohm.flags import Flag


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
    contrast: float  # NaN until vessels were found
    saturated_fraction: float
    invalid_fraction: float
    exposure_ok: bool


@dataclass(frozen=True, slots=True, eq=False)
class PreparedImage:
    """One channel, ready to be searched; all arrays (h, w).

    `signal` is proportional to the vessel's effect on the light path (for dark vessels the optical density
    -ln(I / background), for bright ones I - background, in units of the file), about 0 beside vessels,
    positive in them, and mirrored outside the field of view. `noise_sd` is its pixel standard deviation.
    """

    signal: Float32Array
    noise_sd: Float32Array
    fov: BoolArray
    clipped: BoolArray
    pixel_size_um: float
    pixel_size_se_um: float  # NaN where not known
    pixel_size_source: str
    quality: ImageQuality
    notes: tuple[str, ...]
    flags: Flag

    def __post_init__(self) -> None:
        freeze(self)
