"""From skeleton pixels to nodes and ordered pixel paths, without a loop over pixels."""

from dataclasses import dataclass

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.paths import offsets_of

END, JUNCTION, SEAM = 0, 1, 2
TINY_RING_PX = 3  # a path of so few pixels that returns to its junction is an artefact of a pixel block


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """Nodes (end pixels, junction clusters, seams of closed rings) and the pixel paths between them."""

    node_row: FloatArray
    node_column: FloatArray
    node_kind: IntArray  # END, JUNCTION or SEAM
    node_a: IntArray
    node_b: IntArray
    offsets: IntArray
    row: IntArray
    column: IntArray

    def __post_init__(self) -> None:
        freeze(self)


def trace(skeleton: BoolArray) -> Trace:
    """Trace a skeleton of 8-connected lines.

    Diagonal neighbours that share a skeleton pixel are not linked, so that a corner is no junction. Junction pixels
    that touch are one node, at their centre of mass. Lone pixels are dropped.
    """
    row, column = np.nonzero(skeleton)
    first, second = _links(skeleton, row, column)
    n = len(row)
    degree = np.bincount(first, minlength=n) + np.bincount(second, minlength=n)
    is_junction = degree >= 3
    cluster, n_clusters = _components(n, first, second, is_junction)
    path, n_paths = _components(n, first, second, ~is_junction & (degree > 0))
    end = np.nonzero((degree == 1) & ~is_junction)[0]
    meets = is_junction[first] != is_junction[second]
    inner = np.where(is_junction[first[meets]], second[meets], first[meets])
    outer = np.where(is_junction[first[meets]], first[meets], second[meets])
    seam, cut, kept = _cut_rings(path, n_paths, np.concatenate((end, inner)), first, second)
    # terminals of paths: pixel, node; nodes are numbered clusters, then ends, then seams
    pixel = np.concatenate((inner, end, seam, cut))
    node = np.concatenate((
        cluster[outer], n_clusters + np.arange(len(end)),
        np.tile(n_clusters + len(end) + np.arange(len(seam)), 2),
    ))  # fmt: skip
    order = np.lexsort((node, pixel, path[pixel]))
    pixel, node = pixel[order], node[order]
    start, node_a, node_b = pixel[0::2], node[0::2], node[1::2]
    ordered, counts = _order(path, start, first[kept], second[kept])
    size = np.bincount(cluster[is_junction], minlength=n_clusters)
    kind = np.repeat([JUNCTION, END, SEAM], [n_clusters, len(end), len(seam)])
    node_row = np.concatenate(
        (np.bincount(cluster[is_junction], row[is_junction], n_clusters) / size, row[end], row[seam])
    )
    node_column = np.concatenate(
        (np.bincount(cluster[is_junction], column[is_junction], n_clusters) / size, column[end], column[seam])
    )
    traced = Trace(node_row, node_column, kind, node_a, node_b, offsets_of(counts), row[ordered], column[ordered])
    return select_paths(traced, (node_a != node_b) | (counts > TINY_RING_PX))


def select_paths(traced: Trace, keep: BoolArray) -> Trace:
    """Keep only the chosen paths and the nodes that they use."""
    counts = np.diff(traced.offsets)
    points = np.repeat(keep, counts)
    used, index = np.unique(np.concatenate((traced.node_a[keep], traced.node_b[keep])), return_inverse=True)
    n = int(keep.sum())
    return Trace(
        traced.node_row[used], traced.node_column[used], traced.node_kind[used], index[:n], index[n:],
        offsets_of(counts[keep]), traced.row[points], traced.column[points],
    )  # fmt: skip


def _links(skeleton: BoolArray, row: IntArray, column: IntArray) -> tuple[IntArray, IntArray]:
    """Pairs of linked pixels, as indices into the list of pixels."""
    stride = skeleton.shape[1] + 2
    place = (row + 1) * stride + column + 1  # ascending, with a free pixel all around the picture

    def at(down: int, right: int) -> IntArray:
        wanted = place + (down * stride + right)
        found = np.minimum(np.searchsorted(place, wanted), len(place) - 1)
        return np.where(place[found] == wanted, found, -1)

    pairs = []
    for down, right in ((0, 1), (1, 0), (1, 1), (1, -1)):
        other = at(down, right)
        linked = other >= 0
        if down and right:
            linked &= (at(0, right) < 0) & (at(down, 0) < 0)
        pairs.append((np.nonzero(linked)[0], other[linked]))
    return np.concatenate([a for a, _ in pairs]), np.concatenate([b for _, b in pairs])


def _components(n: int, first: IntArray, second: IntArray, among: BoolArray) -> tuple[IntArray, int]:
    """Label the connected pieces among some pixels, numbered by their first pixel; -1 elsewhere."""
    inside = among[first] & among[second]
    graph = sparse.coo_array((np.ones(inside.sum(), np.int8), (first[inside], second[inside])), shape=(n, n))
    _, label = csgraph.connected_components(graph, directed=False)
    result = np.full(n, -1, dtype=np.int64)
    _, result[among] = np.unique(label[among], return_inverse=True)
    found = result[among]
    return result, int(found.max()) + 1 if len(found) else 0


def _cut_rings(
    path: IntArray, n_paths: int, terminal: IntArray, first: IntArray, second: IntArray
) -> tuple[IntArray, IntArray, BoolArray]:
    """Give every closed ring a seam: its first pixel, cut from the larger of its two neighbours.

    Returns the seam pixels, the neighbours they are cut from, and which links stay.
    """
    closed = np.bincount(path[terminal], minlength=n_paths) == 0
    members = np.nonzero((path >= 0) & closed[path])[0] if n_paths else np.zeros(0, np.int64)
    _, at = np.unique(path[members], return_index=True)
    seam = members[at]
    is_seam = np.zeros(len(path), dtype=bool)
    is_seam[seam] = True
    touching = np.nonzero((is_seam[first] | is_seam[second]) & (path[first] == path[second]))[0]
    ring = path[first[touching]]
    other = np.where(is_seam[first[touching]], second[touching], first[touching])
    order = np.lexsort((other, ring))
    last = order[np.searchsorted(ring[order], path[seam], side="right") - 1] if len(seam) else order[:0]
    kept = np.ones(len(first), dtype=bool)
    kept[touching[last]] = False
    return seam, other[last], kept


def _order(path: IntArray, start: IntArray, first: IntArray, second: IntArray) -> tuple[IntArray, IntArray]:
    """Order the pixels of every path from its start by breadth-first depth from one common source."""
    n = len(path)
    same = (path[first] == path[second]) & (path[first] >= 0)
    a = np.concatenate((first[same], np.full(len(start), n)))
    b = np.concatenate((second[same], start))
    graph = sparse.coo_array((np.ones(len(a)), (a, b)), shape=(n + 1, n + 1)).tocsr()
    depth = csgraph.dijkstra(graph, directed=False, indices=np.array(n), unweighted=True).ravel()[:n]
    pixels = np.nonzero((path >= 0) & np.isfinite(depth))[0]
    ordered = pixels[np.lexsort((depth[pixels], path[pixels]))]
    return ordered, np.bincount(path[ordered], minlength=len(start))
