"""Capillary meshes: loops between one feeding and one draining vessel."""

from dataclasses import dataclass

import networkx as nx
import numpy as np
from scipy.ndimage import gaussian_filter1d
from scipy.spatial import Voronoi

from vasohm_synthetic.arrays import FloatArray, IntArray
from vasohm_synthetic.curves import arc_length, process, resample
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.hydraulics import networks_of, solve
from vasohm_synthetic.scene import AXIS_STEP_PX, MAX_LN_SD, Scene, Vessel

OUTSIDE_PX = 20.0  # the feeders go on so far beyond the border, for the blur
LEAST_RATIO = 0.5  # a radius cannot vary within a fraction of itself
SMOOTHING = 0.12  # of the spacing: rounds the corners where two cell walls became one vessel

Edge = tuple[int, int]


@dataclass(frozen=True, slots=True)
class MeshShape:
    """How a mesh is made: the walls of jittered hexagonal cells, some of them left out."""

    spacing_px: float = 48.0  # between the centres of cells
    jitter: float = 0.16  # standard deviation of the centres, fraction of the spacing
    drop: float = 0.08  # share of walls left out
    radius_px: float = 2.0  # median capillary
    radius_sd: float = 0.2  # of its logarithm between vessels
    feeder_radius_px: float = 5.0
    variation_sd: float = 0.05  # of ln r along a vessel
    variation_ratio: float = 8.0  # correlation length over r
    shortest_px: float = 18.0  # shorter walls are left out where that leaves the mesh whole
    margin_px: float = 24.0
    gain_sd: float = 0.0


def mesh_shape_problems(shape: MeshShape) -> list[str]:
    """Say everything that is impossible about a mesh's shape; empty where nothing is."""
    names = ("spacing_px", "radius_px", "feeder_radius_px", "variation_ratio")
    problems = [f"{n} {getattr(shape, n):g} is not positive" for n in names if not getattr(shape, n) > 0]
    not_negative = ("shortest_px", "margin_px")
    problems += [f"{n} {getattr(shape, n):g} is negative" for n in not_negative if not getattr(shape, n) >= 0]
    problems += [
        f"{n} {getattr(shape, n):g} is not within 0 and {MAX_LN_SD:g}"
        for n in ("radius_sd", "variation_sd", "gain_sd")
        if not 0 <= getattr(shape, n) <= MAX_LN_SD
    ]
    checks = [
        (0 <= shape.jitter <= 0.3, f"jitter {shape.jitter:g} is not within 0 and 0.3"),
        (0 <= shape.drop <= 0.5, f"drop {shape.drop:g} is not within 0 and 0.5"),
        (
            shape.spacing_px > 8 * shape.radius_px,
            f"radius_px {shape.radius_px:g} leaves no room between vessels {shape.spacing_px:g} px apart",
        ),
        (
            shape.spacing_px > 2 * shape.feeder_radius_px,
            f"feeder_radius_px {shape.feeder_radius_px:g} is wider than cells {shape.spacing_px:g} px apart",
        ),
        (
            shape.variation_ratio >= LEAST_RATIO,
            f"variation_ratio {shape.variation_ratio:g} is below {LEAST_RATIO:g}",
        ),
    ]
    return problems + [problem for fine, problem in checks if not fine]


def mesh_scene(shape: MeshShape, size: tuple[int, int], rng: np.random.Generator) -> Scene:
    """Make a mesh in a picture of `size` (h, w); blood enters from the left border and leaves at the right one.

    Raises
    ------
    RecipeError
        When the picture is too small for a mesh of that spacing.
    """
    refuse(mesh_shape_problems(shape))
    xy, edges = _walls(shape, size, rng)
    edges = _prune(edges)
    if len(edges) < 6:
        refuse([f"spacing_px {shape.spacing_px:g}: a picture of {size[1]} x {size[0]} px holds no mesh of it"])
    length = {edge: float(np.hypot(*(xy[edge[0]] - xy[edge[1]]))) for edge in edges}
    short = [edge for edge in sorted(edges, key=lambda e: (length[e], e)) if length[edge] < shape.shortest_px]
    edges = _leave_out(edges, short, len(short))
    order = [edges[i] for i in rng.permutation(len(edges))]
    edges = _leave_out(edges, order, round(shape.drop * len(edges)))
    corners = sorted({n for edge in edges for n in edge})
    degree = np.bincount(np.array(edges).ravel(), minlength=len(xy))
    hull = [n for n in corners if degree[n] == 2] or corners
    left = min(hull, key=lambda n: (xy[n, 0], xy[n, 1]))
    right = max(hull, key=lambda n: (xy[n, 0], xy[n, 1]))
    ports = np.array([[-OUTSIDE_PX, xy[left, 1]], [size[1] - 1 + OUTSIDE_PX, xy[right, 1]]])
    xy = np.vstack((xy, ports))
    feeders = [(len(xy) - 2, left), (right, len(xy) - 1)]
    chains = _chains(edges + feeders)
    return _directed(_draw(chains, xy, shape, rng), size)


def _walls(shape: MeshShape, size: tuple[int, int], rng: np.random.Generator) -> tuple[FloatArray, list[Edge]]:
    """Corners and walls of jittered hexagonal cells that lie inside the margin."""
    height, width = size
    rows = np.arange(-2, height / (shape.spacing_px * np.sqrt(0.75)) + 3)
    columns = np.arange(-2, width / shape.spacing_px + 3)
    column, row = np.meshgrid(columns, rows)
    centres = np.column_stack(
        (((column + 0.5 * (row % 2)) * shape.spacing_px).ravel(), (row * shape.spacing_px * np.sqrt(0.75)).ravel())
    )
    cells = Voronoi(centres + shape.jitter * shape.spacing_px * rng.standard_normal(centres.shape))
    xy = np.asarray(cells.vertices, float)
    inside = (xy.min(axis=1) >= shape.margin_px) & (xy[:, 0] <= width - 1 - shape.margin_px)
    inside &= xy[:, 1] <= height - 1 - shape.margin_px
    edges = [(min(a, b), max(a, b)) for a, b in cells.ridge_vertices if min(a, b) >= 0 and inside[a] and inside[b]]
    return xy, sorted(edges)


def _prune(edges: list[Edge]) -> list[Edge]:
    """Take away dead ends until there are none, and keep the largest connected part."""
    while edges:
        degree = np.bincount(np.array(edges).ravel())
        kept = [e for e in edges if degree[e[0]] > 1 and degree[e[1]] > 1]
        if len(kept) == len(edges):
            break
        edges = kept
    if not edges:
        return []
    part = _parts(edges)
    largest = int(np.argmax(np.bincount(part)))
    return [edge for edge, p in zip(edges, part.tolist(), strict=True) if p == largest]


def _parts(edges: list[Edge]) -> IntArray:
    ends = np.array(edges, np.int64)
    return networks_of(ends[:, 0], ends[:, 1], int(ends.max()) + 1)[1]


def _leave_out(edges: list[Edge], order: list[Edge], most: int) -> list[Edge]:
    """Leave out up to `most` edges in that order, none whose loss leaves an edge that is no part of a loop."""
    left, dropped = list(edges), 0
    for edge in order:
        if dropped == most:
            break
        trial = [e for e in left if e != edge]
        if trial and _looped(trial, edges):
            left, dropped = trial, dropped + 1
    return left


def _looped(trial: list[Edge], before: list[Edge]) -> bool:
    """Whether every corner is still there and every edge part of a loop."""
    graph = nx.Graph(trial)
    whole = len(graph) == len({n for edge in before for n in edge})
    return bool(whole and nx.is_connected(graph) and not nx.has_bridges(graph))


def _chains(edges: list[Edge]) -> list[list[int]]:
    """Runs of edges between corners that do not have two of them."""
    neighbours: dict[int, list[int]] = {}
    for a, b in edges:
        neighbours.setdefault(a, []).append(b)
        neighbours.setdefault(b, []).append(a)
    chains, used = [], set()
    for start in sorted(n for n, near in neighbours.items() if len(near) != 2):
        for step in sorted(neighbours[start]):
            if (start, step) in used:
                continue
            chain = [start, step]
            while len(neighbours[chain[-1]]) == 2:
                ahead = [n for n in neighbours[chain[-1]] if n != chain[-2]]
                chain.append(ahead[0])
            used |= {(chain[0], chain[1]), (chain[-1], chain[-2])}
            chains.append(chain)
    return chains


def _draw(
    chains: list[list[int]], xy: FloatArray, shape: MeshShape, rng: np.random.Generator
) -> tuple[FloatArray, list[Vessel]]:
    """Give every chain a smooth axis and a radius."""
    corners = sorted({n for chain in chains for n in (chain[0], chain[-1])})
    number = {corner: i for i, corner in enumerate(corners)}
    vessels = []
    for chain in chains:
        x, y = resample(xy[chain, 0], xy[chain, 1])
        if len(chain) > 2:
            sigma = SMOOTHING * shape.spacing_px / AXIS_STEP_PX
            x, y = resample(_smooth(x, sigma), _smooth(y, sigma))
        feeds = {chain[0], chain[-1]} & {len(xy) - 1, len(xy) - 2}
        radius = (
            shape.feeder_radius_px
            if feeds
            else shape.radius_px * np.exp(shape.radius_sd * np.clip(rng.standard_normal(), -2.5, 2.5))
        )
        s = arc_length(x, y)
        wave = process(len(s), s[-1] / (len(s) - 1), shape.variation_ratio * radius, rng)
        vessels.append(
            Vessel(
                x_px=x,
                y_px=y,
                radius_px=radius * np.exp(shape.variation_sd * wave),
                node_a=number[chain[0]],
                node_b=number[chain[-1]],
                layer=0,
                vessel_class="" if feeds else "capillary",
                gain=float(np.exp(shape.gain_sd * rng.standard_normal())),
            )
        )
    return xy[corners], vessels


def _smooth(values: FloatArray, sigma: float) -> FloatArray:
    """Gaussian smoothing that leaves both ends where they are (odd reflection)."""
    n = len(values) - 1
    padded = np.concatenate((2 * values[0] - values[:0:-1], values, 2 * values[-1] - values[-2::-1]))
    smooth: FloatArray = gaussian_filter1d(padded, sigma)[n : n + len(values)]
    return smooth


def _directed(drawn: tuple[FloatArray, list[Vessel]], size: tuple[int, int]) -> Scene:
    """Turn every axis so that it runs with the flow between the two feeders."""
    xy, vessels = drawn
    ends = np.array([(v.node_a, v.node_b) for v in vessels], np.int64)
    role = np.where(xy[:, 0] < 0, 1, np.where(xy[:, 0] > size[1] - 1, -1, 0))
    hindrance = np.array([v.s_px[-1] / np.median(v.radius_px) ** 4 for v in vessels])
    flow = solve((ends[:, 0], ends[:, 1]), hindrance, role.astype(np.int64), 1.0).flow_m3_s
    turned = [v if q >= 0 else _turn(v) for v, q in zip(vessels, flow.tolist(), strict=True)]
    return Scene(size, xy[:, 0].copy(), xy[:, 1].copy(), tuple(turned))


def _turn(vessel: Vessel) -> Vessel:
    return Vessel(
        x_px=vessel.x_px[::-1].copy(),
        y_px=vessel.y_px[::-1].copy(),
        radius_px=vessel.radius_px[::-1].copy(),
        node_a=vessel.node_b,
        node_b=vessel.node_a,
        layer=vessel.layer,
        vessel_class=vessel.vessel_class,
        gain=vessel.gain,
    )
