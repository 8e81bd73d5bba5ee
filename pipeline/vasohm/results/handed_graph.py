"""The tables of nodes and segments as a graph for other tools."""

from typing import Any

import networkx as nx
import pandas as pd


def hand_out_graph(image_id: str, nodes: pd.DataFrame, segments: pd.DataFrame) -> "nx.MultiGraph[int]":
    """Build the graph: nodes by node_id, edges by segment_id, attributes named as the columns.

    What is missing in a table is no attribute, since graph formats know no missing value. An edge has no direction of
    its own: its attributes node_a and node_b say which way flow counts as positive.
    """
    graph: nx.MultiGraph[int] = nx.MultiGraph(image_id=image_id)
    shown = nodes.drop(columns=["image_id", "node_id", "network_id", "degree"])
    graph.add_nodes_from(zip(nodes["node_id"].tolist(), _present(shown), strict=True))
    for held in _present(segments.drop(columns="image_id")):
        graph.add_edge(held["node_a"], held["node_b"], held["segment_id"], **held)
    return graph


def _present(frame: pd.DataFrame) -> list[dict[str, Any]]:
    names = [str(name) for name in frame]
    kept = frame.notna() & (frame != "")
    rows = zip(*(frame[name].tolist() for name in names), strict=True)
    present = zip(*(kept[name].tolist() for name in names), strict=True)
    return [
        {name: value for name, value, there in zip(names, row, here, strict=True) if there}
        for row, here in zip(rows, present, strict=True)
    ]
