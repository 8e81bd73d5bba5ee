"""From a measured graph with terminals to flow, pressure, shares and each network's resistance."""

from dataclasses import dataclass

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flow.terminals import Terminals


@dataclass(frozen=True, slots=True, eq=False)
class NetworkFlow:
    """Hydraulics of all networks of one image; NaN where a thing does not apply. Standard uncertainties are of ln R."""

    terminals: Terminals
    # segments
    hematocrit: FloatArray  # (n_segments,)
    radius_hydraulic_um: FloatArray
    radius_hydraulic_random_se_um: FloatArray
    radius_hydraulic_shared_se_um: FloatArray
    viscosity_mpa_s: FloatArray  # at the hydraulic radius
    resistance_pa_s_m3: FloatArray
    ln_resistance_random_se: FloatArray
    ln_resistance_shared_se: FloatArray
    flow_nl_min: FloatArray  # from node_a to node_b
    wall_shear_pa: FloatArray
    share: FloatArray  # d ln R_network / d ln R_segment
    segment_flags: IntArray
    # nodes
    pressure_mmhg: FloatArray  # (n_nodes,)
    # networks
    network_resistance_pa_s_m3: FloatArray  # (n_networks,)
    network_ln_resistance_random_se: FloatArray
    network_ln_resistance_shared_se: FloatArray
    network_flow_nl_min: FloatArray
    network_flags: IntArray

    def __post_init__(self) -> None:
        freeze(self)
