"""Where blood enters and leaves each network."""

from dataclasses import dataclass
from typing import Literal

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag


@dataclass(frozen=True, slots=True)
class NetworkSettings:
    """Which terminals are used, and the pressure between inlets and outlets where they say none."""

    terminals: Literal["auto", "file", "none"]
    drive_mmhg: float


@dataclass(frozen=True, slots=True)
class TerminalPoint:
    """One row of a terminals file; None where a cell is empty."""

    x_px: float
    y_px: float
    role: Literal["inlet", "outlet"]
    pressure_mmhg: float | None
    flow_nl_min: float | None
    hematocrit: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Terminals:
    """Inlets and outlets by node, and how each network came by them."""

    node_network: IntArray  # (n_nodes,) network index of each node, from 0
    segment_network: IntArray  # (n_segments,)
    role: IntArray  # (n_nodes,) +1 inlet, -1 outlet, 0 neither
    pressure_mmhg: FloatArray  # (n_nodes,) NaN where not given
    flow_nl_min: FloatArray  # (n_nodes,) NaN where not given
    hematocrit: FloatArray  # (n_nodes,) NaN where not given
    source: tuple[str, ...]  # per network: file | auto | none
    network_flags: IntArray  # (n_networks,)
    notes: tuple[str, ...]  # terminals left out, by position
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)
