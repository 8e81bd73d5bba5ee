"""From nouns to tables: the columns of the contract, as pandas data frames."""

from collections.abc import Mapping
from dataclasses import dataclass

import networkx as nx
import pandas as pd

from vasohm.arrays import AnyArray, BoolArray


@dataclass(frozen=True, slots=True, eq=False)
class ImageTables:
    """All that one image gives. `tables` has the keys image, networks, segments, nodes, points, branchings, crossings,
    scenarios; each frame has all its columns, also without rows.
    """

    image_id: str
    status: str  # measured | empty
    tables: Mapping[str, pd.DataFrame]
    graph: "nx.MultiGraph[int]"
    mask: BoolArray  # (h, w)
    picture: AnyArray  # (h, w) uint8, the measured channel stretched for showing
    pixel_size_um: float
    notes: tuple[str, ...]
