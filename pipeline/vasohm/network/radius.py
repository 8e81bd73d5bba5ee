"""From a graph to a measured one: length, local radius and their uncertainty; micrometres from here on."""

from dataclasses import dataclass
from typing import Protocol

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.graph import VesselGraph


@dataclass(frozen=True, slots=True)
class RadiusSettings:
    """How a tube is imaged, as far as the study says."""

    profile: str  # auto | slab | cylinder | absorber
    blur_px: float | None  # None: the image tells
    plasma_layer_um: float  # added to the radius of a red-cell column
    plasma_layer_se_um: float


class RadiusCovariance(Protocol):
    """What is known of the random errors of ln r along each segment."""

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class MeasuredGraph:
    """A graph with its lumen radii. Random and shared parts of the doubt are kept apart.

    `shared` holds one column a cause that all segments have in common (blur, profile, contrast prior, plasma
    layer): the change of each point's ln r for one standard uncertainty of that cause; columns are independent.
    The pixel size is not among them. `noise_sign` is +1 where `radius_um` is the mode of a posterior of ln r
    (mean of r^-4 is above the mode's), -1 where it is an independent estimate (r^-4 of it is biased upwards).
    """

    graph: VesselGraph
    pixel_size_um: float
    pixel_size_rel_se: float  # NaN where not known
    s_um: FloatArray  # (n_points,) arc length from the segment's first point
    radius_um: FloatArray  # (n_points,)
    ln_radius_random_se: FloatArray  # (n_points,)
    shared: FloatArray  # (n_points, n_causes)
    shared_causes: tuple[str, ...]
    covariance: RadiusCovariance
    noise_sign: int
    contrast: FloatArray  # (n_points,)
    point_flags: IntArray  # (n_points,)
    length_um: FloatArray  # (n_segments,)
    length_random_se_um: FloatArray
    chord_um: FloatArray
    segment_flags: IntArray  # (n_segments,)
    blur_px: float
    profile: str
    image_contrast: float
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)
