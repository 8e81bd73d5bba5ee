"""Loops, networks and degrees held against general libraries, and what only a mask joins."""

from itertools import product

import networkx as nx
import numpy as np
import pytest
from drawing import draw, prepared
from scipy import ndimage
from skimage import measure as regions
from test_graph import lengths

from vasohm.arrays import BoolArray
from vasohm.image.segment import GIVEN, VesselMask
from vasohm.network.graph import NodeKind, VesselGraph, build_graph, label_networks
from vasohm.network.skeletonize import Skeleton, SkeletonizeSettings, skeletonize
from vasohm.network.tracing import END, JUNCTION, SEAM, trace

SETTINGS = SkeletonizeSettings(spur_radii=1.2, spur_px=3.0)
LEAST_HOLE_PX = 30  # smaller holes of a mask lie inside its junctions
LEAST_PIECE_PX = 200  # smaller pieces are blobs without a centre line


def random_mask(seed: int, size: int = 160) -> BoolArray:
    """Bands between two levels of smooth noise: rings, nets, branches with free ends."""
    rng = np.random.default_rng(seed)
    field = ndimage.gaussian_filter(rng.normal(size=(size, size)), 5.0)
    cut = ndimage.gaussian_filter(rng.normal(size=(size, size)), 8.0)
    mask = (np.abs(field) < 0.35 * field.std()) & (cut > -0.8 * cut.std())
    pieces, _ = ndimage.label(mask, np.ones((3, 3)))
    mask &= np.bincount(pieces.ravel())[pieces] >= LEAST_PIECE_PX
    holes, _ = ndimage.label(~mask)
    return mask | (np.bincount(holes.ravel())[holes] < LEAST_HOLE_PX)


def skeleton_of(mask: BoolArray, source: str = GIVEN, picture: np.ndarray | None = None) -> Skeleton:
    return skeletonize(VesselMask(mask, source), prepared(mask * 1.0 if picture is None else picture), SETTINGS)


def loops(graph: VesselGraph) -> int:
    return graph.n_segments - graph.n_nodes + int(label_networks(graph)[1].max(initial=-1)) + 1


def pixel_graph(skeleton: BoolArray) -> nx.Graph:
    """Skeleton pixels and their neighbours; a diagonal step counts where no straight one leads around it."""
    graph = nx.Graph()
    pixels = {(int(y), int(x)) for y, x in np.argwhere(skeleton)}
    graph.add_nodes_from(pixels)
    for (y, x), (down, right) in product(pixels, ((0, 1), (1, 0), (1, 1), (1, -1))):
        around = {(y + down, x), (y, x + right)} & pixels if down and right else set()
        if (y + down, x + right) in pixels and not around:
            graph.add_edge((y, x), (y + down, x + right))
    return graph


@pytest.mark.parametrize("seed", range(6))
def test_nodes_have_the_degrees_of_the_pixel_graph(seed: int) -> None:
    """Wrong if a path were lost, doubled or led to the wrong junction (networkx, pixel by pixel, as the slow twin)."""
    skeleton = skeleton_of(random_mask(seed)).pixels
    graph = pixel_graph(skeleton)
    crowded = graph.subgraph([pixel for pixel in graph if graph.degree[pixel] >= 3])
    degrees = [1 for pixel in graph if graph.degree[pixel] == 1]
    clusters = [*nx.connected_components(crowded)]
    degrees += [sum(other not in cluster for pixel in cluster for other in graph[pixel]) for cluster in clusters]
    rings = sum(all(d == 2 for _, d in graph.subgraph(c).degree) for c in nx.connected_components(graph) if len(c) > 1)
    traced = trace(skeleton)
    ours = np.bincount(np.concatenate((traced.node_a, traced.node_b)), minlength=len(traced.node_kind))
    assert sorted(ours[traced.node_kind != SEAM].tolist()) == sorted(degrees)
    assert int((traced.node_kind == SEAM).sum()) == rings
    assert int((traced.node_kind == END).sum()) == degrees.count(1)
    assert int((traced.node_kind == JUNCTION).sum()) == len(clusters)


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("turn", [np.array, np.fliplr, np.flipud, np.rot90, np.transpose])
def test_loops_and_networks_are_those_of_the_mask(seed: int, turn) -> None:
    """Wrong if thinning, pruning or merging opened a ring, closed one, or depended on the direction of the rows.

    Independent loops of a plane set are its pieces minus its Euler number (Gray, IEEE Trans Comput 1971;C-20:551,
    as scikit-image counts it).
    """
    mask = random_mask(seed)
    pieces = int(regions.label(mask, connectivity=2).max())
    holes = pieces - int(regions.euler_number(mask, connectivity=2))
    graph = build_graph(skeleton_of(np.ascontiguousarray(turn(mask))))
    assert int(label_networks(graph)[1].max()) + 1 == pieces
    assert loops(graph) == holes
    assert holes >= 1  # teeth: there is something to lose


def test_equal_pictures_give_equal_ids_and_ids_go_by_place() -> None:
    """Wrong if numbers came from the order of tracing: nodes by row, then column; segments from the lower node."""
    graph = build_graph(skeleton_of(random_mask(0)))
    assert np.all(np.diff(graph.node_y_px) >= 0)
    assert np.all(graph.node_a <= graph.node_b)
    assert np.all(np.diff(graph.node_a) >= 0)
    again = build_graph(skeleton_of(random_mask(0)))
    np.testing.assert_array_equal(again.x_px, graph.x_px)


def test_a_ring_on_a_stalk_and_parallel_vessels() -> None:
    """A self-loop, two vessels between the same two nodes, and a closed ring: none is lost, none is cut in two."""
    angle = np.linspace(0, 2 * np.pi, 400)
    lines = [
        (60 + 30 * np.cos(angle), 60 + 30 * np.sin(angle), 2.5),
        (np.array([90.0, 190.0]), np.array([60.0, 60.0]), 2.5),
        (60 + 30 * np.cos(angle), 150 + 20 * np.sin(angle), 2.5),
        (np.array([90.0, 190.0]), np.array([150.0, 150.0]), 2.5),
        (np.array([5.0, 30.0]), np.array([150.0, 150.0]), 2.5),
        (230 + 18 * np.cos(angle), 100 + 18 * np.sin(angle), 2.5),
    ]
    graph = build_graph(skeleton_of(draw(lines, (200, 260), seed=None) > 0.5))
    assert graph.n_segments == 2 + 4 + 1
    assert loops(graph) == 3
    assert int((graph.node_kind == NodeKind.LOOP).sum()) == 1
    assert int((graph.node_a == graph.node_b).sum()) == 2  # the ring on its stalk, and the closed one at its seam
    ring = lengths(graph)[graph.node_kind[graph.node_a] == NodeKind.LOOP]
    assert ring == pytest.approx([2 * np.pi * 18], rel=0.02)  # of a skeleton; the picture refines it


def elbows(gap_px: float) -> list[tuple[np.ndarray, np.ndarray, float]]:
    """Two bent vessels of 3 px radius, elbow to elbow, with so much dark ground between their walls."""
    x, y = np.array([10.0, 60.0, 110.0]), np.array([20.0, 60.0 - 3.0 - gap_px / 2, 20.0])
    return [(x, y, 3.0), (x, 120 - y, 3.0)]


@pytest.mark.parametrize(("source", "expected"), [("ridge", 2), (GIVEN, 5)])
def test_vessels_that_touch_in_the_mask_only_are_not_joined(source: str, expected: int) -> None:
    """Wrong if a mask too wide joined two vessels: a short circuit. A mask made elsewhere is taken at its word."""
    picture = draw(elbows(3.0), (121, 121))
    wide = draw([(x, y, radius + 2.5) for x, y, radius in elbows(3.0)], (121, 121), seed=None) > 0.5
    graph = build_graph(skeleton_of(wide, source, picture))
    assert graph.n_segments == expected
    assert int(label_networks(graph)[1].max()) + 1 == (2 if expected == 2 else 1)


def test_a_vessel_that_ends_before_another_is_not_led_on_to_it() -> None:
    """Wrong if a bridge of the mask over dark ground made a dead end a branch."""
    lines = [
        (np.array([0.0, 160.0]), np.array([40.0, 40.0]), 4.0),
        (np.array([80.0, 80.0]), np.array([56.0, 120.0]), 3.0),
    ]
    bridge = (np.array([80.0, 80.0]), np.array([40.0, 60.0]), 3.0)
    mask = draw([*lines, bridge], (121, 161), seed=None) > 0.5
    apart = build_graph(skeleton_of(mask, "ridge", draw(lines, (121, 161))))
    assert apart.n_segments == 2
    joined = build_graph(skeleton_of(mask, "ridge", draw([*lines, bridge], (121, 161))))
    assert joined.n_segments == 3  # teeth: the same mask where the light does lead on


def test_a_gap_of_the_mask_is_closed_where_light_leads_on() -> None:
    """Wrong if a branch whose mask stops short of its parent were taken for a vessel of its own."""
    lines = [
        (np.array([0.0, 160.0]), np.array([40.0, 40.0]), 4.0),
        (np.array([80.0, 90.0]), np.array([40.0, 120.0]), 2.5),
    ]
    mask = draw(lines, (121, 161), seed=None) > 0.5
    mask[47:53, 70:95] = False
    assert build_graph(skeleton_of(mask, "ridge", draw(lines, (121, 161)))).n_segments == 3
    assert build_graph(skeleton_of(mask, GIVEN, draw(lines, (121, 161)))).n_segments == 2


def test_the_edge_of_a_bright_field_is_no_vessel() -> None:
    """Wrong if one-sided contrast passed for a vessel: the rim of an optic disc would join all vessels around it."""
    vessel = (np.array([0.0, 160.0]), np.array([20.0, 20.0]), 3.0)
    picture = draw([vessel], (121, 161))
    picture[80:] += 1.5  # the field
    mask = draw([vessel], (121, 161), seed=None) > 0.5
    mask[79:87, 20:140] = True
    graph = build_graph(skeleton_of(mask, "ridge", picture))
    assert graph.n_segments == 1
    assert graph.y_px.max() < 40
