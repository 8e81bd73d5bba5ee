"""Train the rule that tells the optic disc from other bright places, and write its weights into the package.

Usage: python benchmarks/train_disc.py [OUT.py]

Fundi with the disc inside the field and at its border, trees and capillary meshes are made from the seeds below, with
discs sharp, soft, ragged and dim, with bright spots elsewhere and with no disc. The package segments and traces them
and lists its places; logistic regression tells those that are the disc. Then the rule so far and the new one judge the
same fresh phantoms: `clean` ones, whose disc is an even one, and `hard` ones like those trained on. Takes minutes.
"""

import sys
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from scipy.optimize import minimize

from vasohm.config.study_file import study_from_mapping
from vasohm.flags import Flag
from vasohm.image.calibrate import TypedScale, calibrate
from vasohm.image.prepare import prepare
from vasohm.image.read import RawImage
from vasohm.image.segment import segment
from vasohm.network.disc_margin import Circle as Place
from vasohm.network.disc_weights import WEIGHTS
from vasohm.network.graph import build_graph
from vasohm.network.optic_disc import LEAST_CONFIDENCE, candidates, lay_ground, likeliest, probability
from vasohm.network.skeletonize import skeletonize
from vasohm_synthetic.backdrop import digitise, expose, illuminate
from vasohm_synthetic.clearance import Field
from vasohm_synthetic.errors import RecipeError
from vasohm_synthetic.fundus import FUNDUS_TREE, FundusShape, fundus_scene
from vasohm_synthetic.mesh import MeshShape, mesh_scene
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics
from vasohm_synthetic.render import render_vessels
from vasohm_synthetic.scene import Circle, Scene
from vasohm_synthetic.trees import Root, TreeShape, grow_trees

ROOT = Path(__file__).resolve().parents[1]
MODULE = ROOT / "pipeline" / "vasohm" / "network" / "disc_weights.py"
Seeds = Mapping[str, tuple[int, ...]]
TRAINED: Seeds = {
    "fundus": (*range(1101, 1113), *range(3101, 3107)),
    "border": (*range(1201, 1205), *range(3201, 3204)),
    "tree": (*range(1301, 1305), 3301, 3302),
    "mesh": (*range(1401, 1405), 3401, 3402),
}
FRESH: Mapping[str, Seeds] = {
    "clean": {"fundus": tuple(range(2101, 2107)), "border": (2201, 2202)},
    "hard": {
        "fundus": tuple(range(4101, 4107)), "border": (4201, 4202, 4203), "tree": (4301, 4302), "mesh": (4401, 4402),
    },
}  # fmt: skip
LOOKS = (("sharp", "dim", "spots", "none"), ("soft", "ragged", "spots", "none-spots"))  # of a scene, seed by seed
WITHOUT = ("none", "none-spots")
SPOTS = {"spots": 3, "none-spots": 4}
EVEN_BRIGHTNESS = {"bright": (0.4, 0.8), "even": (0.3, 0.6), "faint": (0.2, 0.5)}  # over the ground, as a share of it
SIDE_PX = (420, 540)
FIELD_SHARE = 0.48  # radius of a round field of view over the side; one picture in five is seen whole
DISC_SHARE = (0.045, 0.12)  # radius over the field's diameter: fields of 60 to 25 degrees
MOST_TRIES = 100  # layouts drawn before one finds room
PIXEL_UM, RADII_UM = 7.0, (7.0, 70.0)
GREEN = Channel(0.38, {"arteriole": 0.9, "venule": 1.1})
BRIGHTEST = 0.9  # of full scale: pictures are exposed for their brightest part
RIGHT_DD, RIGHT_LN = 0.1, 0.2  # centre off by less, of a disc's diameter, and ln of the radius: the place is the disc
NEAR_DD, NEAR_LN = 0.25, 0.5  # places that are not quite that teach neither what is the disc nor what is not
RIDGE = 1.0  # weight of squared standardised coefficients: as much as one place
STEPS_OF_CONFIDENCE = (LEAST_CONFIDENCE, 0.8, 0.95, 1.0)


@dataclass(frozen=True, slots=True)
class Glow:
    """A round bright place; lengths are shares of its radius."""

    circle: Circle
    brightness: float  # over the ground, as a share of it
    soft: float  # scale of its margin
    ragged: float = 0.0  # how uneven margin and brightness are
    oval: float = 1.0  # longer over shorter axis
    cup: float = 0.0  # its middle is brighter by this share
    tilt: float = 0.0  # one side is brighter by this share


@dataclass(frozen=True, slots=True)
class Picture:
    """What the package found in one picture, and where its disc is."""

    disc: Circle | None
    places: tuple[tuple[Place, Mapping[str, float]], ...]  # in pixels

    def errors(self, place: Place) -> tuple[float, float]:
        """How far off a place is from the disc: centre over its diameter, and radius over its own; or infinite."""
        if self.disc is None:
            return np.inf, np.inf
        off = np.hypot(place.x - self.disc.x_px, place.y - self.disc.y_px) / (2 * self.disc.radius_px)
        return float(off), place.radius / self.disc.radius_px


def grow(kind: str, rng: np.random.Generator) -> Scene:
    """Vessels of one kind of bed, drawn anew until they find room."""
    for _ in range(MOST_TRIES):
        side = int(rng.integers(*SIDE_PX))
        try:
            if kind == "mesh":
                return mesh_scene(MeshShape(), (side, side), rng)
            return trees(side, rng) if kind == "tree" else fundus(side, rng, at_border=kind == "border")
        except RecipeError as error:
            last = error
    raise last


def fundus(side: int, rng: np.random.Generator, *, at_border: bool) -> Scene:
    """Trees from a disc that lies well inside the field, or across its border."""
    field = FIELD_SHARE if rng.random() < 0.8 else 0.0
    reach = (field or 0.5) * side
    radius = 2 * reach * rng.uniform(*DISC_SHARE)
    side_on = rng.uniform(0, 2 * np.pi)
    trunks = int(rng.integers(2, 6))
    if at_border:
        away = reach - radius * rng.uniform(0.05, 0.9)
        headings = np.degrees(side_on) + 180 + np.linspace(-60, 60, trunks) + rng.uniform(-8, 8, trunks)
    else:
        away = min(reach * rng.uniform(0, 0.62), reach - 1.15 * radius)
        headings = rng.uniform(0, 360) + np.arange(trunks) * 360 / trunks + rng.uniform(-12, 12, trunks)
    tree = replace(
        FUNDUS_TREE, root_radius_px=float(np.clip(radius * rng.uniform(0.08, 0.14), 3.2, 7)),
        bend_radius_px=float(rng.uniform(60, 140)), length_ratio=float(rng.uniform(9, 14)),
    )  # fmt: skip
    shape = FundusShape(
        fov_radius=field, disc_radius_px=radius, trunks_deg=tuple(headings), tree=tree,
        disc_x=0.5 + away * np.cos(side_on) / side, disc_y=0.5 + away * np.sin(side_on) / side,
        centre_x=float(rng.normal(0.5, 0.075)), centre_y=0.5, venule_offset_deg=float(rng.uniform(20, 30)),
    )  # fmt: skip
    return fundus_scene(shape, (side, side), rng)


def trees(side: int, rng: np.random.Generator) -> Scene:
    """An arteriolar and a venular tree that enter the picture somewhere."""
    roots = []
    for layer, vessel_class in enumerate(("venule", "arteriole")):
        at = rng.uniform(0.25, 0.75) * side
        x, y, heading = ((-0.5, at, 0), (side - 0.5, at, 180), (at, -0.5, 90), (at, side - 0.5, -90))[rng.integers(4)]
        root = Root(x, y, float(np.radians(heading)), vessel_class, layer, kin=layer, crop_px=8.0)
        roots.append(replace(root, flow_inwards=bool(layer), radius_px=float(rng.uniform(5, 9))))
    shape = TreeShape(root_radius_px=8.0, min_radius_px=1.3)
    return grow_trees(roots, shape, Field((side, side), None, 4.0), rng)


def disc_like(look: str, disc: Circle, rng: np.random.Generator) -> Glow:
    """One of the looks of a disc."""
    brightness = {"dim": (0.12, 0.3), "sharp": (0.3, 0.8)}.get(look, (0.2, 0.8))
    soft = {"sharp": (0.04, 0.08), "soft": (0.08, 0.16)}.get(look, (0.04, 0.16))
    ragged = {"sharp": (0.0, 0.3), "ragged": (1.0, 1.5)}.get(look, (0.0, 1.0))
    ranges = (brightness, soft, ragged, (1.0, 1.15), (0.0, 0.8), (-0.35, 0.35))
    return Glow(disc, *(float(rng.uniform(*between)) for between in ranges))


def spot(scene: Scene, rng: np.random.Generator) -> Glow:
    """A bright place somewhere in the field, that is no disc."""
    reach, middle = FIELD_SHARE * min(scene.shape), 0.5 * scene.shape[0]
    turn, away = rng.uniform(0, 2 * np.pi), 0.95 * reach * np.sqrt(rng.random())
    circle = Circle(middle + away * np.cos(turn), middle + away * np.sin(turn), 2 * reach * rng.uniform(0.02, 0.11))
    ranges = ((0.15, 0.9), (0.05, 0.5), (0.0, 1.5), (1.0, 1.8))
    return Glow(circle, *(float(rng.uniform(*between)) for between in ranges))


def shine(shape: tuple[int, int], glow: Glow, rng: np.random.Generator) -> np.ndarray:
    """Brightness of a bright place as a factor [y, x]; a ragged one has bays, dark patches and half a halo."""
    y, x = np.mgrid[: shape[0], : shape[1]].astype(float)
    lean, stretch, radius = rng.uniform(0, np.pi), np.sqrt(glow.oval), glow.circle.radius_px
    dx, dy = x - glow.circle.x_px, y - glow.circle.y_px
    u = (dx * np.cos(lean) + dy * np.sin(lean)) / stretch / radius
    v = (dy * np.cos(lean) - dx * np.sin(lean)) * stretch / radius
    turn = np.arctan2(v, u)
    at = np.hypot(u, v) / (1 + 0.03 * glow.ragged * wave(turn, 5, rng))
    soft = glow.soft * np.exp(0.4 * glow.ragged * np.clip(wave(turn, 3, rng), -2, 2))
    light = fading(at - 1, soft) * np.clip(1 + 0.22 * glow.ragged * wave(turn, 3, rng) * np.clip(at, 0, 1), 0.15, 2.2)
    light *= (1 + glow.tilt * np.clip(u, -2, 2)) * (1 + glow.cup * fading(np.hypot(u - 0.15, v) - 0.45, 0.08))
    if rng.random() < 0.3 * glow.ragged:
        halo = rng.uniform(0.1, 0.35) * np.clip(np.cos(turn - rng.uniform(0, 2 * np.pi)), 0, 1)
        light += halo * np.exp(-0.5 * ((at - 1.15) / 0.15) ** 2)
    factor = 1 + glow.brightness * light
    for _ in range(rng.poisson(glow.ragged)):
        where, reach = rng.uniform(0, 2 * np.pi), rng.uniform(0.06, 0.16)
        off = np.hypot(u - 1.04 * np.cos(where), v - 1.04 * np.sin(where)) / reach
        factor *= 1 - rng.uniform(0.1, 0.35) * np.exp(-0.5 * off**2)
    return np.asarray(factor)


def wave(turn: np.ndarray, orders: int, rng: np.random.Generator) -> np.ndarray:
    """Smooth noise around a circle."""
    parts = rng.standard_normal((orders, 2))
    return np.asarray(sum((a * np.cos(k * turn) + b * np.sin(k * turn)) / k for k, (a, b) in enumerate(parts, 1)))


def fading(beyond: np.ndarray, scale: np.ndarray | float) -> np.ndarray:
    """From 1 inside to 0 outside."""
    return np.asarray(1 / (1 + np.exp(np.clip(beyond / scale, -50, 50))))


def draw(scene: Scene, vessels: np.ndarray, look: str, rng: np.random.Generator) -> np.ndarray:
    """One picture of a scene, its disc looking as asked for."""
    backdrop = Backdrop(
        slope=rng.uniform(0, 0.2), slope_deg=rng.uniform(0, 360), vignette=rng.uniform(0.05, 0.45),
        texture_sd=rng.uniform(0.01, 0.045), texture_px=rng.uniform(8, 40), centre=rng.uniform(0, 0.35),
        disc=rng.uniform(*EVEN_BRIGHTNESS[look]) if look in EVEN_BRIGHTNESS else 0.0,
    )  # fmt: skip
    shade = illuminate(scene, backdrop, rng)
    glows = []
    if scene.disc is not None and look not in (*WITHOUT, *EVEN_BRIGHTNESS):
        glows.append(disc_like(look, scene.disc, rng))
    for other in [spot(scene, rng) for _ in range(SPOTS.get(look, 0))]:
        x, y, radius = other.circle.x_px, other.circle.y_px, other.circle.radius_px
        if all(np.hypot(at.x_px - x, at.y_px - y) > radius + 1.1 * at.radius_px for at in (g.circle for g in glows)):
            glows.append(other)
    for glow in glows:
        shade = shade * shine(scene.shape, glow, rng)
    exposure = min(GREEN.background, BRIGHTEST / float(np.percentile(shade, 99.9)))
    camera = Camera(photons=rng.uniform(1500, 8000), noise_sd=0.006)
    return digitise(expose(exposure * shade * vessels, scene, camera, rng), 8)


def pictures(kind: str, seed: int, looks: tuple[str, ...]) -> Iterator[Picture]:
    """Make and search the pictures of one kind and seed."""
    rng = np.random.default_rng(seed)
    scene = grow(kind, rng)
    optics = Optics(
        contrast=0.45, reference_radius_px=5.5, blur_px=float(rng.uniform(0.8, 1.4)), reflex=0.25, channels=(GREEN,),
        supersample=2,
    )  # fmt: skip
    vessels = render_vessels(scene, optics)[0]
    for look in looks if scene.disc is not None else WITHOUT:
        disc = None if look in WITHOUT else scene.disc
        yield Picture(disc, search(draw(scene, vessels, look, rng)))


def search(pixels: Any) -> tuple[tuple[Place, Mapping[str, float]], ...]:
    """Places that the package looks at, in pixels, with what it sees there."""
    said = {"image": {"preset": "fundus"}, "segment": {"radius_um": list(RADII_UM)}}
    settings = study_from_mapping(said, ROOT).settings
    raw = RawImage(pixels, 255.0, "", None, "", (), Flag.NONE)
    prepared = prepare(calibrate(raw, TypedScale(PIXEL_UM, None), settings.scale), settings.prepare, None)
    mask = segment(prepared, settings.segment, None)
    graph = build_graph(skeletonize(mask, prepared, settings.skeletonize))
    if graph.n_points == 0:
        return ()
    ground, edge = lay_ground(prepared, mask.pixels)
    diameter = 2 * float(np.sqrt(prepared.fov.sum() / np.pi)) / edge
    return tuple(
        (Place((at.x + 0.5) * edge - 0.5, (at.y + 0.5) * edge - 0.5, at.radius * edge), seen)
        for at, seen in candidates(graph, ground, (edge, diameter))
    )


def harvest(seeds: Seeds, looks_of: tuple[tuple[str, ...], ...]) -> list[Picture]:
    """All pictures of the seeds, each scene with its turn of looks."""
    found: list[Picture] = []
    for kind, seed in ((kind, seed) for kind, numbers in seeds.items() for seed in numbers):
        found += pictures(kind, seed, looks_of[seed % len(looks_of)])
        print(kind, seed, f"{len(found)} pictures so far", flush=True)
    return found


def lessons(seen: list[Picture]) -> tuple[list[Mapping[str, float]], np.ndarray]:
    """Features of all places that are the disc or clearly are not, and whether they are."""
    features: list[Mapping[str, float]] = []
    is_disc: list[bool] = []
    for picture in seen:
        for place, described in picture.places:
            off, ratio = picture.errors(place)
            off_ln = abs(np.log(ratio))
            right = off < RIGHT_DD and off_ln < RIGHT_LN
            if right or off > NEAR_DD or off_ln > NEAR_LN:
                features.append(described)
                is_disc.append(right)
    return features, np.array(is_disc)


def fit(features: list[Mapping[str, float]], is_disc: np.ndarray) -> Mapping[str, float]:
    """Logistic regression, ridge on standardised coefficients."""
    names = list(features[0])
    x = np.array([[one[name] for name in names] for one in features])
    mean, spread = x.mean(axis=0), x.std(axis=0)
    standard = np.column_stack((np.ones(len(x)), (x - mean) / spread))
    sign = np.where(is_disc, -1.0, 1.0)

    def loss(beta: np.ndarray) -> float:
        return float(np.logaddexp(0, sign * (standard @ beta)).sum() + 0.5 * RIDGE * (beta[1:] ** 2).sum())

    beta = minimize(loss, np.zeros(standard.shape[1])).x
    weights = beta[1:] / spread
    return {"intercept": float(beta[0] - weights @ mean)} | {n: float(w) for n, w in zip(names, weights, strict=True)}


def judge(seen: list[Picture], weights: Mapping[str, float]) -> str:
    """Say how a rule does on pictures."""
    told = []
    for picture in (one for one in seen if one.places):
        share, place = likeliest([(probability(weights, described), at) for at, described in picture.places])
        if share >= LEAST_CONFIDENCE:
            told.append((share, *picture.errors(place)))
    with_disc = sum(picture.disc is not None for picture in seen)
    share, off, ratio = np.array(told).T
    is_eye, right = np.isfinite(off), off < RIGHT_DD
    low, middle, high = np.quantile(ratio[is_eye], (0.05, 0.5, 0.95))
    text = (
        f"{with_disc} discs, {is_eye.sum()} found, {right.sum()} of them within {RIGHT_DD:g} of a diameter, "
        f"{with_disc - is_eye.sum()} refused; {(~is_eye).sum()} false in {len(seen) - with_disc} without; "
        f"radius {middle:.3f} (5 to 95 %: {low:.3f} to {high:.3f}); right, of those told with a confidence of"
    )
    for least, most in pairwise(STEPS_OF_CONFIDENCE):
        here = (share > least) & (share <= most)
        if here.any():
            text += f" {least:g} to {most:g}, {share[here].mean():.2f} on average: {right[here].sum()} of {here.sum()};"
    return text[:-1]


def main() -> None:
    """Harvest the pictures, train the rule, write the module, and judge the rule so far and the new one."""
    seen = harvest(TRAINED, LOOKS)
    features, is_disc = lessons(seen)
    weights = fit(features, is_disc)
    out = Path(sys.argv[1]) if len(sys.argv) > 1 else MODULE
    out.write_text(module_text(weights, seen, is_disc), encoding="utf-8")
    print("trained on:", judge(seen, weights))
    for name, seeds in FRESH.items():
        fresh = harvest(seeds, ((*EVEN_BRIGHTNESS, "none"),) if name == "clean" else LOOKS)
        print(f"{name}, rule so far:", judge(fresh, WEIGHTS))
        print(f"{name}, new rule:", judge(fresh, weights), flush=True)


def module_text(weights: Mapping[str, float], seen: list[Picture], is_disc: np.ndarray) -> str:
    """Write the trained rule as a module of constants."""
    discs = sum(picture.disc is not None for picture in seen)
    head = f"""Weights that tell the optic disc from other places, made by benchmarks/train_disc.py and not by hand.

Trained on {len(is_disc)} places, {is_disc.sum()} of them discs, in {len(seen)} phantoms of which {discs} have a disc.
"""
    table = "".join(f'    "{name}": {weight:.3f},\n' for name, weight in weights.items())
    return f'"""{head}"""\n\nfrom collections.abc import Mapping\n\nWEIGHTS: Mapping[str, float] = {{\n{table}}}\n'


if __name__ == "__main__":
    main()
