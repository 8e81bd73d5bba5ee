"""Shape of segments, branchings, networks and the whole image."""

from dataclasses import dataclass

from vasohm.arrays import FloatArray, IntArray, freeze


@dataclass(frozen=True, slots=True, eq=False)
class Branchings:
    """One entry a bifurcation (a node where exactly three segments meet); indices count from 0, NaN where undefined."""

    node: IntArray
    parent: IntArray
    child_1: IntArray  # the wider child
    child_2: IntArray
    radius_parent_um: FloatArray
    radius_child_1_um: FloatArray
    radius_child_2_um: FloatArray
    angle_1_deg: FloatArray  # between the parent's direction and child 1
    angle_2_deg: FloatArray
    area_ratio: FloatArray
    asymmetry: FloatArray
    junction_exponent: FloatArray
    flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Morphometry:
    """Geometry in numbers; lengths and areas in micrometres."""

    branchings: Branchings
    # segments
    radius_mean_um: FloatArray  # (n_segments,)
    radius_sd_um: FloatArray  # measurement noise taken out
    tortuosity: FloatArray
    # networks (index as in node_network)
    node_network: IntArray
    segment_network: IntArray
    network_length_um: FloatArray
    network_area_um2: FloatArray
    network_volume_um3: FloatArray
    network_loops: IntArray
    # the image
    fov_area_um2: float
    vessel_area_um2: float
    length_um: float
    radius_mean_um_image: float  # length-weighted
    tortuosity_mean: float  # length-weighted
    box_dimension: float

    def __post_init__(self) -> None:
        freeze(self)
