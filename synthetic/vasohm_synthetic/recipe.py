"""The recipe file: which phantoms to make. Read strictly; every problem is told at once."""

import tomllib
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

from vasohm_synthetic.blood import Blood, blood_problems
from vasohm_synthetic.errors import RecipeError, refuse
from vasohm_synthetic.fundus import FUNDUS_TREE, FundusShape, fundus_fit_problems, fundus_shape_problems
from vasohm_synthetic.mesh import MeshShape, mesh_shape_problems
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics, optics_problems
from vasohm_synthetic.parse import Fields, merge, name_problem
from vasohm_synthetic.scene import CLASSES, MAX_SIDE_PX
from vasohm_synthetic.tone import Tone, tone_problems
from vasohm_synthetic.trees import TreeShape, tree_shape_problems
from vasohm_synthetic.tubes import Tube, tube_problems
from vasohm_synthetic.view import STILL, View, view_problems

KINDS = ("tubes", "tree", "mesh", "fundus")
SIDES = ("left", "right", "top", "bottom")
PRESETS = ("fundus", "angiogram", "fluorescence", "intravital")
FILE_FORMATS = ("png", "tif")
DESIGN = ("subject", "eye", "group", "condition", "time", "note")


@dataclass(frozen=True, slots=True)
class Entry:
    """Where a tree enters a picture: from `side`, at this fraction of it."""

    side: str = "left"
    at: float = 0.5
    turn_deg: float = 0.0  # of the trunk from square to the border
    vessel_class: str = "arteriole"
    flow_inwards: bool = True
    crosses: bool = False  # it may cross the trees before it; otherwise it keeps clear of them
    radius_px: float | None = None  # None: the tree's root_radius_px


@dataclass(frozen=True, slots=True)
class SceneRecipe:
    """One bed: what kind, how large, and the shape of that kind."""

    kind: str
    width_px: int
    height_px: int
    tubes: tuple[Tube, ...] = ()
    entries: tuple[Entry, ...] = (Entry(),)
    tree: TreeShape = field(default_factory=TreeShape)
    mesh: MeshShape = field(default_factory=MeshShape)
    fundus: FundusShape = field(default_factory=FundusShape)


@dataclass(frozen=True, slots=True)
class ImageRecipe:
    """One picture; pictures with the same `bed` show the same vessels."""

    image_id: str
    bed: str
    pixel_size_um: float
    scene: SceneRecipe
    optics: Optics
    tones: tuple[Tone, ...]
    design: Mapping[str, str]  # columns of the image sheet
    view: View = STILL

    @property
    def picture_pixel_size_um(self) -> float:
        """Edge of a pixel of the picture; `pixel_size_um` is that of the bed before it is enlarged."""
        return self.pixel_size_um / self.view.zoom


@dataclass(frozen=True, slots=True)
class Recipe:
    """All pictures of one folder, and what the study file beside them says."""

    name: str
    seed: int
    pixel_size_um: float
    pixel_size_se_um: float | None
    preset: str
    radius_um: tuple[float, float]
    file_format: str
    drive_mmhg: float
    write_terminals: bool
    blood: Blood
    images: tuple[ImageRecipe, ...]
    measured_with: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)  # further sections of the study file


def read_recipe(path: Path) -> Recipe:
    """Read a recipe file (TOML).

    Raises
    ------
    RecipeError
        When the file is missing or no TOML, a key is unknown, or a value impossible; with all problems found.
    """
    try:
        return parse_recipe(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except FileNotFoundError:
        raise RecipeError([f"{path}: there is no such file"]) from None
    except OSError as fault:
        raise RecipeError([f"{path}: cannot be read: {fault.strerror}"]) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as wrong:
        raise RecipeError([f"{path}: is no TOML: {wrong}"]) from None
    except RecipeError as wrong:
        raise RecipeError([f"{path}: {problem}" for problem in wrong.problems]) from None


def parse_recipe(table: Mapping[str, Any]) -> Recipe:
    """Turn a recipe's tables into a `Recipe`, as `read_recipe` does with a file.

    Raises
    ------
    RecipeError
        With all problems found.
    """
    fields = Fields("")
    top = fields.known(table, ("phantom", "blood", "optics", "scene", "image"))
    head = Fields("phantom", fields.problems)
    said = head.known(
        top.get("phantom", {}),
        (
            "name", "seed", "pixel_size_um", "pixel_size_se_um", "preset", "radius_um", "file_format", "drive_mmhg",
            "write_terminals",
        ),
    )  # fmt: skip
    pixel_size_um = head.number(said, "pixel_size_um", 1.0)
    recipe = Recipe(
        name=head.text(said, "name", "phantoms"),
        seed=head.whole(said, "seed", 0),
        pixel_size_um=pixel_size_um,
        pixel_size_se_um=head.number(said, "pixel_size_se_um", 0.0) or None,
        preset=head.word(said, "preset", "intravital", PRESETS),
        radius_um=head.pair(said, "radius_um", (1.0, 50.0)),
        file_format=head.word(said, "file_format", "png", FILE_FORMATS),
        drive_mmhg=head.number(said, "drive_mmhg", 1.0),
        write_terminals=head.flag(said, "write_terminals", default=True),
        blood=fields.build(Blood, top.get("blood", {}), "blood"),
        images=_images(top, pixel_size_um, fields.problems),
    )
    fields.problems.extend(recipe_problems(recipe))
    refuse(fields.problems)
    return recipe


def _images(top: Mapping[str, Any], pixel_size_um: float, problems: list[str]) -> tuple[ImageRecipe, ...]:
    images = []
    entries = top.get("image", [])
    common = {part: Fields("", problems).table(top, part) for part in ("scene", "optics")}
    if not isinstance(entries, list) or not entries:
        problems.append("image: a recipe needs one or more [[image]] tables")
        return ()
    for number, entry in enumerate(entries, 1):
        fields = Fields(f"image {number}", problems)
        said = fields.known(entry, ("image_id", "bed", "scene", "optics", "tone", "view", "pixel_size_um", *DESIGN))
        image_id = fields.text(said, "image_id", f"phantom-{number:02d}")
        own = {part: fields.table(said, part) for part in common}
        scene, optics = (merge(common[part], own[part]) for part in ("scene", "optics"))
        problems += [f"image {number} scene {problem}" for problem in _misplaced(own["scene"], scene)]
        images.append(
            ImageRecipe(
                image_id=image_id,
                bed=fields.text(said, "bed", image_id),
                pixel_size_um=fields.number(said, "pixel_size_um", pixel_size_um),
                scene=_scene(scene, Fields(f"image {number} scene", problems)),
                optics=_optics(optics, Fields(f"image {number} optics", problems)),
                tones=tuple(fields.build(Tone, tone, f"image {number} tone") for tone in fields.tables(said, "tone")),
                design={key: fields.text(said, key, "") for key in DESIGN if key in said},
                view=fields.build(View, fields.table(said, "view"), f"image {number} view"),
            )
        )
    return tuple(images)


def _misplaced(own: Mapping[str, Any], merged: Mapping[str, Any]) -> list[str]:
    """What a scene asks for that its kind does not have; an image of another kind than the rest replaces theirs."""
    kind = merged.get("kind")
    if kind is None:
        return [f"kind: not given; take one of {', '.join(KINDS)}"]
    parts = {"tube": "tubes", "entry": "tree", "tree": "tree", "mesh": "mesh", "fundus": "fundus"}
    told = own if "kind" in own else merged
    problems = [
        f"{part}: has no effect on kind {kind!r}, it belongs to kind {owner!r}"
        for part, owner in parts.items()
        if part in told and owner != kind and kind in KINDS
    ]
    if kind == "tubes" and "tube" not in merged:
        problems.append("tube: there is none; give [[scene.tube]], or tube = [] for a picture without vessels")
    return problems


def _scene(table: Mapping[str, Any], fields: Fields) -> SceneRecipe:
    said = fields.known(table, ("kind", "width_px", "height_px", "tube", "entry", "tree", "mesh", "fundus"))
    fundus = dict(fields.table(said, "fundus"))
    fundus_tree = merge(asdict(FUNDUS_TREE), Fields(f"{fields.where} fundus", fields.problems).table(fundus, "tree"))
    fundus.pop("tree", None)
    width, height = fields.whole(said, "width_px", 512), fields.whole(said, "height_px", 512)
    tubes = []
    for number, tube in enumerate(fields.tables(said, "tube"), 1):
        middle = {"x_px": 0.5 * (width - 1), "y_px": 0.5 * (height - 1), "radius_px": 5.0}
        tubes.append(fields.build(Tube, tube, f"{fields.where} tube {number}", fallback=middle))
    return SceneRecipe(
        kind=fields.word(said, "kind", "tree", KINDS),
        width_px=width,
        height_px=height,
        tubes=tuple(tubes),
        entries=tuple(
            fields.build(Entry, entry, f"{fields.where} entry {number}")
            for number, entry in enumerate(fields.tables(said, "entry"), 1)
        )
        or (Entry(),),
        tree=fields.build(TreeShape, said.get("tree", {}), f"{fields.where} tree"),
        mesh=fields.build(MeshShape, said.get("mesh", {}), f"{fields.where} mesh"),
        fundus=fields.build(
            FundusShape,
            fundus,
            f"{fields.where} fundus",
            tree=fields.build(TreeShape, fundus_tree, f"{fields.where} fundus tree"),
        ),
    )


def _optics(table: Mapping[str, Any], fields: Fields) -> Optics:
    said = dict(table)
    channels = []
    for channel in fields.tables(said, "channel"):
        known = Fields(f"{fields.where} channel gains", fields.problems)
        gains = known.known(channel.get("gains", {}), ("arteriole", "venule", "capillary"))
        clean = {key: known.number(gains, key, 1.0) for key in gains}
        rest = {key: value for key, value in channel.items() if key != "gains"}
        channels.append(fields.build(Channel, rest, f"{fields.where} channel", gains=clean))
    parts: dict[str, Any] = {
        "backdrop": fields.build(Backdrop, said.pop("backdrop", {}), f"{fields.where} backdrop"),
        "camera": fields.build(Camera, said.pop("camera", {}), f"{fields.where} camera"),
        "channels": tuple(channels) or (Channel(),),
    }
    said.pop("channel", None)
    return fields.build(Optics, said, fields.where, **parts)


def recipe_problems(recipe: Recipe) -> list[str]:
    """Say which values are impossible, after all keys were understood."""
    checks = [
        (recipe.pixel_size_um > 0, f"phantom pixel_size_um: {recipe.pixel_size_um:g} is not positive"),
        (
            recipe.pixel_size_se_um is None or recipe.pixel_size_se_um > 0,
            f"phantom pixel_size_se_um: {recipe.pixel_size_se_um} is negative",
        ),
        (0 < recipe.radius_um[0] < recipe.radius_um[1], f"phantom radius_um: {recipe.radius_um} is no range"),
        (recipe.drive_mmhg > 0, f"phantom drive_mmhg: {recipe.drive_mmhg:g} is not positive"),
        (recipe.seed >= 0, f"phantom seed: {recipe.seed} is negative"),
    ]
    problems = [problem for fine, problem in checks if not fine]
    problems += [f"blood: {problem}" for problem in blood_problems(recipe.blood)]
    seen: set[str] = set()
    for number, image in enumerate(recipe.images, 1):
        where = f"image {number}"
        wrong = name_problem(image.image_id)
        if wrong:
            problems.append(f"{where} image_id: {wrong}")
        if image.image_id.casefold() in seen:
            problems.append(f"{where} image_id: {image.image_id!r} is there twice")
        seen.add(image.image_id.casefold())
        if not image.pixel_size_um > 0 and image.pixel_size_um != recipe.pixel_size_um:
            problems.append(f"{where} pixel_size_um: {image.pixel_size_um:g} is not positive")
        problems += [f"{where} {problem}" for problem in _scene_problems(image.scene)]
        problems += [f"{where} optics: {problem}" for problem in optics_problems(image.optics)]
        problems += [f"{where} tone: {problem}" for tone in image.tones for problem in tone_problems(tone)]
        size = (image.scene.height_px, image.scene.width_px)
        problems += [f"{where} view: {problem}" for problem in view_problems(image.view, size)]
        if image.optics.polarity != recipe.images[0].optics.polarity:
            problems.append(
                f"{where} optics: polarity {image.optics.polarity!r} is not that of image 1; the study file beside the "
                "images holds one for all: make two recipes"
            )
    beds: dict[str, SceneRecipe] = {}
    for number, image in enumerate(recipe.images, 1):
        if beds.setdefault(image.bed, image.scene) != image.scene:
            problems.append(f"image {number} bed: {image.bed!r} has another scene in an earlier image")
    return list(dict.fromkeys(problems))


def _scene_problems(scene: SceneRecipe) -> list[str]:
    size = (scene.height_px, scene.width_px)
    problems = [
        f"scene {name}: {value} is not within 16 and {MAX_SIDE_PX}"
        for name, value in (("width_px", scene.width_px), ("height_px", scene.height_px))
        if not 16 <= value <= MAX_SIDE_PX
    ]
    if scene.kind == "tubes":
        for number, tube in enumerate(scene.tubes, 1):
            problems += [f"scene tube {number}: {problem}" for problem in tube_problems(tube, size)]
    elif scene.kind == "tree":
        problems += [f"scene tree: {problem}" for problem in tree_shape_problems(scene.tree)]
        for number, entry in enumerate(scene.entries, 1):
            problems += [f"scene entry {number}: {problem}" for problem in _entry_problems(entry)]
        widest = max([scene.tree.root_radius_px] + [e.radius_px or 0.0 for e in scene.entries])
        if 4 * widest > min(size):
            problems.append(f"scene tree: root radius {widest:g} px is too large for {size[1]} x {size[0]} px")
    elif scene.kind == "mesh":
        problems += [f"scene mesh: {problem}" for problem in mesh_shape_problems(scene.mesh)]
    else:
        problems += [f"scene fundus: {problem}" for problem in fundus_shape_problems(scene.fundus)]
        problems += [f"scene fundus: {problem}" for problem in fundus_fit_problems(scene.fundus, size)]
    return problems


def _entry_problems(entry: Entry) -> list[str]:
    checks = [
        (entry.side in SIDES, f"side {entry.side!r} is none of {SIDES}"),
        (0.05 <= entry.at <= 0.95, f"at {entry.at:g} is not within 0.05 and 0.95"),
        (abs(entry.turn_deg) <= 45, f"turn_deg {entry.turn_deg:g} is not within -45 and 45"),
        (entry.vessel_class in CLASSES, f"vessel_class {entry.vessel_class!r} is none of {CLASSES}"),
        (entry.radius_px is None or entry.radius_px > 0, f"radius_px {entry.radius_px} is not positive"),
    ]
    return [problem for fine, problem in checks if not fine]
