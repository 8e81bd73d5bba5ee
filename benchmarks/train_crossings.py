"""Train the rule that tells crossings from branchings on phantoms, and write its weights into the package.

Usage: python benchmarks/train_crossings.py [OUT.py]

Scenes like a fundus, trees that cross each other, capillary meshes and single junctions are made from the seeds below,
segmented and traced by the package. Each place where four arms meet is a crossing if its opposite arms belong to one
vessel each, of two that truly cross there. Logistic regression on all places, once with and once without what the
overlap's darkness says. Takes some minutes.
"""

import sys
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from scipy.spatial import cKDTree

from vasohm.config.study_file import study_from_mapping
from vasohm.flags import Flag
from vasohm.image.calibrate import TypedScale, calibrate
from vasohm.image.prepare import PreparedImage, prepare
from vasohm.image.read import RawImage
from vasohm.image.segment import segment
from vasohm.network.crossing_features import (
    CORE_FEATURES,
    FEATURES,
    Arms,
    Meetings,
    crossing_points,
    describe,
    find_meetings,
    look_along_arms,
    look_at_overlaps,
)
from vasohm.network.graph import VesselGraph, build_graph
from vasohm.network.skeletonize import skeletonize
from vasohm_synthetic.backdrop import digitise
from vasohm_synthetic.crossings import crossing_table
from vasohm_synthetic.make import build_bed, draw
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics
from vasohm_synthetic.recipe import parse_recipe
from vasohm_synthetic.render import render
from vasohm_synthetic.scene import Scene, Vessel
from vasohm_synthetic.trace import trace

ROOT = Path(__file__).resolve().parents[1]
WEIGHTS = ROOT / "pipeline" / "vasohm" / "network" / "crossing_weights.py"
SEEDS: Mapping[str, tuple[int, ...]] = {
    "fundus": (501, 502, 503, 504),
    "bright-fundus": (601, 602, 603),
    "trees": (501, 502, 503, 504, 505, 506),
    "mesh": (501, 502, 503, 504, 505, 506),
    "junctions": tuple(range(701, 731)),
}
MOST_TURN = 2.0  # of 30 degrees: opposite arms of a true crossing that turn more are misread and teach nothing
SIDES = ("left", "right", "top", "bottom")
CELL_PX, CELLS = 110, 4  # single junctions stand on a grid
RIDGE = 1.0  # weight of squared standardised coefficients: as much as one place
STEPS = 50
NEIGHBOURS, FURTHEST_PX, WIDEST_TURN_DEG = 24, 8.0, 40.0  # true axis of an arm: as near, and as much the same way


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """What is measured, and the scene it shows."""

    pixels: Any
    scene: Scene
    preset: str
    polarity: str
    radius_um: tuple[float, float]
    pixel_size_um: float


def pictures(kind: str, seed: int) -> Iterator[Picture]:
    """Make the pictures of one kind and seed."""
    if kind == "junctions":
        yield junctions(seed)
        return
    recipe = parse_recipe(recipe_table(kind, seed))
    for image in recipe.images:
        scene = build_bed(recipe, image)
        yield Picture(
            draw(recipe, image, scene), scene, recipe.preset, image.optics.polarity, recipe.radius_um,
            image.pixel_size_um,
        )  # fmt: skip


def recipe_table(kind: str, seed: int) -> dict[str, Any]:
    """Take a recipe of configs/ and change what is asked for."""
    base = {"fundus": "fundus", "bright-fundus": "fundus", "trees": "tree", "mesh": "mesh"}[kind]
    table = tomllib.loads((ROOT / "configs" / f"phantom-{base}.toml").read_text(encoding="utf-8"))
    table["phantom"]["seed"] = seed
    if kind == "bright-fundus":
        table["phantom"]["preset"] = "fluorescence"
        table["optics"] = {
            "profile": "cylinder", "polarity": "bright", "contrast": 0.3, "reference_radius_px": 5.5,
            "channel": [{"background": 0.1, "gains": {"arteriole": 1.0, "venule": 0.8}}],
            "backdrop": {"vignette": 0.2, "texture_sd": 0.05, "texture_px": 14.0},
            "camera": {"photons": 2500, "noise_sd": 0.006, "bits": 16},
        }  # fmt: skip
        table["image"] = table["image"][:1]
    if kind == "trees":
        table["scene"]["tree"] |= {"root_radius_px": 8.0, "min_radius_px": 1.6}
        table["scene"]["entry"] = [
            {
                "side": SIDES[(seed + i) % 4], "at": 0.35 + 0.1 * ((seed + 2 * i) % 4), "crosses": True,
                "vessel_class": ("arteriole", "venule")[i % 2], "radius_px": 8.0 - i,
            }
            for i in range(3)
        ]  # fmt: skip
        table["image"] = [{"image_id": "one"}, {"image_id": "two"}]
        if seed % 3 == 0:
            table["phantom"]["preset"] = "fluorescence"
            table["optics"] = {
                "profile": "cylinder", "polarity": "bright", "contrast": 0.35, "reference_radius_px": 8.0,
                "channel": [{"background": 0.1}], "camera": {"photons": 4000, "noise_sd": 0.006, "bits": 16},
            }  # fmt: skip
    table["optics"]["supersample"] = 2
    return table


def junctions(seed: int) -> Picture:
    """Single crossings and pairs of branchings on a grid: opposite, on one side, one behind the other."""
    rng = np.random.default_rng(seed)
    nodes: list[tuple[float, float]] = []
    vessels: list[Vessel] = []
    for cell in range(CELLS * CELLS):
        middle = CELL_PX * np.array([cell % CELLS + 0.5, cell // CELLS + 0.5]) + rng.uniform(-3, 3, 2)
        heading = rng.uniform(0, 2 * np.pi)
        turn = np.array([[np.cos(heading), -np.sin(heading)], [np.sin(heading), np.cos(heading)]])
        first = len(nodes)
        places, pieces = crossing(rng) if rng.uniform() < 0.5 else two_branchings(rng)
        nodes += [tuple(place) for place in places @ turn.T + middle]
        vessels += [placed(piece, turn, middle, first) for piece in pieces]
    side = CELL_PX * CELLS
    xy = np.array(nodes)
    scene = Scene((side, side), xy[:, 0], xy[:, 1], tuple(vessels))
    bright = bool(seed % 2)
    optics = Optics(
        profile=("cylinder", "slab", "absorber")[seed % 3], polarity="bright" if bright else "dark", contrast=0.35,
        absorption_per_px=0.15, blur_px=float(rng.uniform(0.7, 1.4)), channels=(Channel(0.1 if bright else 0.6),),
        backdrop=Backdrop(slope=0.1), camera=Camera(noise_sd=float(rng.uniform(0.004, 0.025)), bits=16), supersample=2,
    )  # fmt: skip
    light = render(scene, optics, rng)
    preset = "fluorescence" if bright else "intravital"
    return Picture(digitise(light, 16), scene, preset, optics.polarity, (1.0, 12.0), 1.0)


Piece = tuple[np.ndarray, float, int, int, int]  # axis (n, 2), radius, node at its first point, at its last, layer


def crossing(rng: np.random.Generator) -> tuple[np.ndarray, list[Piece]]:
    """Two vessels that cross at 25 to 90 degrees."""
    angle = np.radians(rng.uniform(25, 90)) * rng.choice([-1, 1])
    ends = np.array([[-45.0, 0.0], [45.0, 0.0], *([s * 45 * np.cos(angle), s * 45 * np.sin(angle)] for s in (-1, 1))])
    radii = np.exp(rng.uniform(np.log(1.3), np.log(5.5), 2))
    return ends, [(bent(ends[2 * k], ends[2 * k + 1], rng), radii[k], 2 * k, 2 * k + 1, k) for k in (0, 1)]


def two_branchings(rng: np.random.Generator) -> tuple[np.ndarray, list[Piece]]:
    """Two branches of one trunk, a short way apart, on opposite sides or on one side."""
    trunk = float(np.exp(rng.uniform(np.log(1.8), np.log(5.5))))
    apart = trunk * rng.choice([rng.uniform(0.0, 1.5), rng.uniform(0.0, 5.0)])
    sides = (1, -1) if rng.uniform() < 0.7 else (1, 1)
    leans = np.radians(rng.uniform(35, 145, 2))
    roots = np.array([[-apart / 2, 0.0], [apart / 2, 0.0]])
    tips = [root + 40 * np.array([np.cos(a), s * np.sin(a)]) for root, a, s in zip(roots, leans, sides, strict=True)]
    places = np.array([[-45.0, 0.0], roots[0], roots[1], [45.0, 0.0], *tips])
    radii = trunk * rng.uniform(0.5, 1.0, 2)
    pieces: list[Piece] = [(straight(places[a], places[b]), trunk, a, b, 0) for a, b in ((0, 1), (1, 2), (2, 3))]
    return places, pieces + [(bent(places[1 + k], places[4 + k], rng), radii[k], 1 + k, 4 + k, 0) for k in (0, 1)]


def straight(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Points a quarter of a pixel apart, both ends in."""
    n = max(int(np.ceil(np.hypot(*(b - a)) * 5)), 1)
    return np.asarray(a + np.linspace(0, 1, n + 1)[:, None] * (b - a))


def bent(a: np.ndarray, b: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """A shallow bow from a to b."""
    axis = straight(a, b)
    t = np.linspace(-1, 1, len(axis))[:, None]
    normal = np.array([-(b - a)[1], (b - a)[0]])
    return np.asarray(axis + rng.normal(0, 0.03) * (1 - t**2) * normal)


def placed(piece: Piece, turn: np.ndarray, middle: np.ndarray, first: int) -> Vessel:
    """Turn a piece, put it into its cell and number its nodes."""
    axis, radius, a, b, layer = piece
    xy = axis @ turn.T + middle
    return Vessel(xy[:, 0], xy[:, 1], np.full(len(xy), radius), a + first, b + first, layer)


# --- what the package sees, and what is true ------------------------------------------------------------------------


def measured(picture: Picture) -> tuple[PreparedImage, VesselGraph]:
    """Segment and trace as a study with this preset does."""
    said = {
        "image": {"preset": picture.preset, "polarity": picture.polarity},
        "segment": {"radius_um": list(picture.radius_um)},
    }
    settings = study_from_mapping(said, ROOT).settings
    white = float(np.iinfo(picture.pixels.dtype).max)
    raw = RawImage(picture.pixels, white, "", None, "", (), Flag.NONE)
    scaled = calibrate(raw, TypedScale(picture.pixel_size_um, None), settings.scale)
    prepared = prepare(scaled, settings.prepare, None)
    mask = segment(prepared, settings.segment, None)
    return prepared, build_graph(skeletonize(mask, prepared, settings.skeletonize))


def true_crossings(scene: Scene, meetings: Meetings, arms: Arms) -> np.ndarray:
    """Whether the opposite arms of each place are one vessel each, of two layers that cross there."""
    truth = trace(scene)
    axis = np.concatenate([np.column_stack((s.x_px, s.y_px)) for s in truth.segments])
    ahead = np.concatenate([np.gradient(np.column_stack((s.x_px, s.y_px)), axis=0) for s in truth.segments])
    ahead /= np.hypot(*ahead.T)[:, None] + 1e-12
    radius = np.concatenate([s.radius_px for s in truth.segments])
    layer = np.repeat([s.vessel.layer for s in truth.segments], [len(s.x_px) for s in truth.segments])
    here = np.column_stack((arms.x_px.ravel(), arms.y_px.ravel()))
    distance, index = cKDTree(axis).query(here, k=NEIGHBOURS, distance_upper_bound=FURTHEST_PX)
    near = np.isfinite(distance)
    index = np.where(near, index, 0)
    way = np.repeat(arms.towards, arms.x_px.shape[1], axis=0)[:, None, :]
    near &= distance <= np.maximum(2.0, 0.75 * radius[index])
    near &= np.abs((ahead[index] * way).sum(axis=2)) >= np.cos(np.radians(WIDEST_TURN_DEG))
    owner = np.where(near.any(axis=1), layer[index[np.arange(len(index)), near.argmax(axis=1)]], -1)
    owner = owner.reshape(arms.x_px.shape)
    told = owner[np.arange(len(owner)), (owner >= 0).argmax(axis=1)][meetings.ends]
    table = crossing_table(truth, "")
    places = table[["x_px", "y_px"]].to_numpy(np.float64)
    layer_of = np.array([s.vessel.layer for s in truth.segments])
    pairs = np.sort(layer_of[table[["segment_over", "segment_under"]].to_numpy(np.int64) - 1].reshape(-1, 2), axis=1)
    one, other = told[:, [0, 2]].max(axis=1), told[:, [1, 3]].max(axis=1)
    agree = np.where(told < 0, np.column_stack((one, other, one, other)), told) == np.column_stack(
        (one, other, one, other)
    )
    fits = agree.all(axis=1) & (one != other) & ((told < 0).sum(axis=1) <= 1)
    met_x, met_y = crossing_points(meetings, arms)
    far = np.hypot(met_x[:, None] - places[:, 0], met_y[:, None] - places[:, 1])
    reach = arms.radius_px[meetings.ends].max(axis=1) + 3
    same = (pairs[:, 0] == np.minimum(one, other)[:, None]) & (pairs[:, 1] == np.maximum(one, other)[:, None])
    return np.asarray(fits & (same & (far <= reach[:, None])).any(axis=1))


def fit(features: np.ndarray, crosses: np.ndarray, use: list[int]) -> tuple[float, np.ndarray]:
    """Logistic regression by Newton steps, ridge on standardised coefficients; returns intercept and weights."""
    mean, spread = features[:, use].mean(axis=0), features[:, use].std(axis=0)
    x = np.column_stack((np.ones(len(features)), (features[:, use] - mean) / spread))
    hold = RIDGE * np.eye(x.shape[1])
    hold[0, 0] = 0.0
    beta = np.zeros(x.shape[1])
    for _ in range(STEPS):
        p = 1 / (1 + np.exp(-(x @ beta)))
        beta += np.linalg.solve((x * (p * (1 - p))[:, None]).T @ x + hold, x.T @ (crosses - p) - hold @ beta)
    weights = np.zeros(features.shape[1])
    weights[use] = beta[1:] / spread
    return float(beta[0] - (weights[use] * mean).sum()), weights


def main() -> None:
    """Harvest all pictures, train both rules, write the module and tell how well they separate what they saw."""
    features, crosses = [], []
    for kind, seeds in SEEDS.items():
        for seed in seeds:
            for picture in pictures(kind, seed):
                prepared, graph = measured(picture)
                arms = look_along_arms(graph)
                meetings = find_meetings(graph, arms)
                seen = describe(meetings, arms, look_at_overlaps(meetings, arms, prepared))
                true = true_crossings(picture.scene, meetings, arms)
                readable = ~true | (seen[:, FEATURES.index("turn_max")] < MOST_TURN)
                features.append(seen[readable])
                crosses.append(true[readable])
                print(kind, seed, f"{len(crosses[-1])} places, {crosses[-1].sum()} crossings", flush=True)
    every, truly = np.concatenate(features), np.concatenate(crosses)
    core = [FEATURES.index(name) for name in CORE_FEATURES]
    whole = list(range(len(FEATURES)))
    rules = {
        "WITH_CORE": fit(every, truly, whole),
        "WITHOUT_CORE": fit(every, truly, [k for k in whole if k not in core]),
    }
    for name, (intercept, weights) in rules.items():
        said = every @ weights + intercept > 0
        print(f"{name}: {(said & truly).sum()} of {truly.sum()} crossings told, {(said & ~truly).sum()} false")
    (Path(sys.argv[1]) if len(sys.argv) > 1 else WEIGHTS).write_text(module_text(rules, truly), encoding="utf-8")


def module_text(rules: Mapping[str, tuple[float, np.ndarray]], truly: np.ndarray) -> str:
    """Write the trained rules as a module of constants."""
    lines = [
        '"""Weights that tell crossings from branchings, made by benchmarks/train_crossings.py and not by hand.',
        "",
        f"Trained on {len(truly)} places where four arms meet, {int(truly.sum())} of them crossings, in phantoms.",
        '"""',
        "",
        "from collections.abc import Mapping",
    ]
    for name, (intercept, weights) in rules.items():
        lines += ["", f"{name}: Mapping[str, float] = {{", f'    "intercept": {intercept:.4f},']
        lines += [f'    "{key}": {w:.4f},' for key, w in zip(FEATURES, weights, strict=True)]
        lines += ["}"]
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    main()
