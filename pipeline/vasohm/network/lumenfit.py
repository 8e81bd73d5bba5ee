"""What a method of measuring radii hands over, and what it is told."""

from dataclasses import dataclass
from typing import Protocol

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag


@dataclass(frozen=True, slots=True)
class RadiusSettings:
    """How a tube is imaged, as far as the study says."""

    profile: str  # auto | slab | cylinder | absorber
    blur_px: float | None  # None: the image tells
    plasma_layer_um: float  # added to the radius of a red-cell column
    plasma_layer_se_um: float
    least_radius_um: float  # thinnest vessels asked for: tells what blur is out of focus


class RadiusCovariance(Protocol):
    """What is known of the random errors of ln r along each segment."""

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class LumenFit:
    """Lumen radii along a graph, in pixels; `noise_sign`, `shared` and `covariance` as in `MeasuredGraph`."""

    ln_radius: FloatArray  # (n_points,)
    random_se: FloatArray  # (n_points,) of ln r
    offset_px: FloatArray  # (n_points,) of the axis from the given centreline, along (-dy, dx)
    contrast: FloatArray  # (n_points,)
    point_flags: IntArray  # (n_points,)
    shared: FloatArray  # (n_points, n_causes)
    shared_causes: tuple[str, ...]
    covariance: RadiusCovariance
    noise_sign: int
    blur_px: float  # NaN where it is not known
    profile: str
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)
