"""The default segmenter: what noise alone gives, odd pictures, and published filters on the same phantoms."""

import io
from dataclasses import replace

import numpy as np
import pytest
from PIL import Image
from scipy import ndimage
from scipy.stats import gamma, norm
from skimage.morphology import skeletonize
from yardsticks import FILTERS, best_mask, dice, score

import vasohm
from vasohm.errors import ImageError
from vasohm.image.calibrate import ScaledImage
from vasohm.image.prepare import PreparedImage, PrepareSettings, prepare
from vasohm.image.read import RawImage
from vasohm.image.segment import SegmentSettings, segment
from vasohm_synthetic.make import build_bed
from vasohm_synthetic.optics import Backdrop, Camera, Channel, Optics
from vasohm_synthetic.recipe import parse_recipe
from vasohm_synthetic.render import render

DEFAULT_FALSE_PX = 30.0  # of centreline a megapixel of noise: the presets' default
EIGHT = np.ones((3, 3))


def prepared(pixels: np.ndarray, polarity: str, radius_px: tuple[float, float] = (1.0, 10.0)) -> PreparedImage:
    raw = RawImage(pixels, None, "", None, "", (), vasohm.flags.Flag.NONE)
    scaled = ScaledImage(raw, 1.0, 0.01, "sheet", raw.flags)
    return prepare(scaled, PrepareSettings("green", polarity, 1.0, radius_px), None)


def found(image: PreparedImage, false_px: float = DEFAULT_FALSE_PX, method: str = "ridge") -> np.ndarray:
    return segment(image, SegmentSettings(method, (1.0, 10.0), false_px, {}), None).pixels


def noise(kind: str, rng: np.random.Generator, n: int = 512) -> np.ndarray:
    white = rng.standard_normal((n, n))
    if kind.startswith("blur"):
        smooth = ndimage.gaussian_filter(white, float(kind.split()[1]))
        return 1000 + 50 * smooth / smooth.std()
    if kind == "jpeg":
        file = io.BytesIO()
        Image.fromarray(np.clip(np.rint(120 + 8 * white), 0, 255).astype(np.uint8)).save(file, "JPEG", quality=85)
        return np.array(Image.open(file))
    if kind == "speckle":
        return 200 * rng.gamma(6, 1 / 6, (n, n))
    return rng.poisson(30, (n, n)) if kind == "poisson" else 1000 + 50 * white


KINDS = ["white", "blur 0.6", "blur 1.2", "blur 2", "jpeg", "speckle", "poisson"]


def false_lines(kinds: list[str], false_px: float, seed: int) -> tuple[float, float]:
    """Pixels of centreline and pieces a megapixel that noise gives."""
    length = pieces = area = 0
    for number, kind in enumerate(kinds):
        image = prepared(noise(kind, np.random.default_rng([seed, number])), "bright" if number % 2 else "dark")
        line = skeletonize(found(image, false_px).copy())
        length, pieces, area = length + line.sum(), pieces + ndimage.label(line, EIGHT)[1], area + line.size / 1e6
    return length / area, pieces / area


def test_noise_gives_no_more_false_centreline_than_the_study_allows():
    """Wrong if thresholds were tuned to vessels, or the knob did nothing: 1.8 MP of seven kinds of noise."""
    length, pieces = false_lines(KINDS, DEFAULT_FALSE_PX, seed=0)
    assert length <= DEFAULT_FALSE_PX
    assert pieces < 1.0
    many, _ = false_lines(["white", "speckle"], 100 * DEFAULT_FALSE_PX, seed=0)
    assert many > 5 * DEFAULT_FALSE_PX  # teeth


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_each_kind_of_noise_keeps_the_promise_within_a_factor(kind):
    """The promise is an upper bound within a factor 2 for each kind of noise, over 1.6 MP."""
    rates = np.array([false_lines([kind], DEFAULT_FALSE_PX, seed) for seed in range(100, 106)]).mean(axis=0)
    assert rates[0] <= 2 * DEFAULT_FALSE_PX
    assert rates[1] < 2.0


def tube(shape: tuple[int, int], radius: float, *, centre: float | None = None, depth: float = 60.0) -> np.ndarray:
    """Shadow of a round tube along the rows, blurred by 1 px, with noise of 3 grey levels."""
    rows = np.arange(shape[0])[:, None] - ((shape[0] - 1) / 2 if centre is None else centre)
    shadow = np.sqrt(np.clip(1 - (rows / radius) ** 2, 0, None)) * np.ones((1, shape[1]))
    return 100 - depth * ndimage.gaussian_filter(shadow, 1.0) + np.random.default_rng(0).normal(0, 3, shape)


def measure(pixels: np.ndarray):
    return vasohm.measure_image(pixels, pixel_size_um=1.0, preset="intravital", segment={"radius_um": [1.0, 12.0]})


@pytest.mark.parametrize(("shape", "radius"), [((20, 500), 7.0), ((500, 20), 7.0), ((30, 300), 8.0), ((20, 300), 2.0)])
def test_a_strip_that_is_nearly_all_vessel_is_measured(shape, radius):
    """Wrong if the vessel itself counted as noise, where it leaves next to no background."""
    pixels = tube((min(shape), max(shape)), radius)
    tables = measure(pixels if shape[1] > shape[0] else pixels.T)
    assert tables.segments.length_um.sum() == pytest.approx(max(shape), rel=0.02)
    half_a_pixel = 0.5
    assert tables.segments.radius_mean_um.to_numpy() == pytest.approx(radius, abs=half_a_pixel)


def spoilt(value: float, where: tuple[slice | int, slice | int]) -> np.ndarray:
    pixels = tube((120, 160), 5.0)
    pixels[where] = value
    return pixels


@pytest.mark.parametrize(
    "pixels",
    [
        spoilt(np.nan, (20, 30)),
        spoilt(np.inf, (60, 80)),  # on the vessel
        spoilt(np.nan, (slice(30, 31), slice(None))),
        spoilt(np.inf, (slice(None), slice(0, 60))),
        tube((120, 160), 5.0, centre=3.0),  # along the border
        tube((120, 160), 0.6, centre=60.0),  # one pixel wide
    ],
    ids=["nan pixel", "inf on vessel", "nan row", "inf part", "along border", "one pixel wide"],
)
def test_odd_pictures_with_a_vessel_are_measured(pixels):
    tables = measure(pixels)
    assert len(tables.segments) >= 1
    numbers = tables.points.select_dtypes("number").to_numpy(float)
    assert not np.isinf(numbers).any()
    assert len(tables.segments) <= 2


@pytest.mark.parametrize(
    "pixels",
    [
        *(np.random.default_rng(1).normal(100, 5, shape) for shape in [(1, 1), (1, 500), (2, 2), (3, 3), (20, 20)]),
        np.random.default_rng(2).normal(100, 5, (20, 2000)),
        *(np.full((90, 90), level, np.uint8) for level in (0, 7, 255)),
        np.where(np.arange(90 * 90).reshape(90, 90) == 4000, 60, 100).astype(np.uint8),
        np.ones((90, 90), dtype=bool),
        100 - 60 * (np.abs(np.arange(300) - 150) < 90)[:, None] * np.ones((1, 200)),
    ],
    ids=["1x1", "1x500", "2x2", "3x3", "20x20", "20x2000", "black", "grey", "white", "one pixel", "full", "too wide"],
)
def test_pictures_without_a_vessel_end_empty(pixels):
    """Wrong if a crash, or radii from a picture that is nothing but vessel."""
    tables = measure(pixels)
    assert len(tables.segments) == 0
    assert tables.status == "empty"


@pytest.mark.parametrize(
    ("pixels", "words"),
    [
        (np.full((40, 40), np.nan), "no pixel is a finite number"),
        (tube((60, 80), 5.0) * 1e-300, "Rescale"),
        (tube((60, 80), 5.0) * 1e300, "Rescale"),
        (tube((60, 80), 5.0) - 500, "light is not negative"),
    ],
)
def test_pictures_that_cannot_be_measured_are_refused_by_word(pixels, words):
    with pytest.raises(ImageError, match=words):
        measure(pixels)


@pytest.mark.slow
def test_a_very_long_strip_is_measured():
    tables = measure(tube((20, 20000), 6.0))
    assert tables.segments.length_um.sum() == pytest.approx(20000, rel=0.001)


def scene(kind: str, size_px: int, seed: int, shape: dict[str, object], **more: object):
    table = {"kind": kind, "width_px": size_px, "height_px": size_px, kind: shape, **more}
    recipe = parse_recipe({"phantom": {"seed": seed}, "scene": table, "image": [{"image_id": "a"}]})
    return build_bed(recipe, recipe.images[0])


def speckled(light: np.ndarray, spread: float, blur_px: float, rng: np.random.Generator) -> np.ndarray:
    """Multiply by gamma-distributed speckle of unit mean, its grains as wide as the blur."""
    smooth = ndimage.gaussian_filter(rng.standard_normal(light.shape), blur_px)
    looks = 1 / spread**2
    return light * gamma.ppf(norm.cdf(smooth / smooth.std()), looks, scale=1 / looks)


def phantom(style: str, seed: int):
    """Picture, polarity and scene of one style."""
    rng = np.random.default_rng(seed)
    cylinder = Optics(profile="cylinder", blur_px=1.0, channels=(Channel(0.1),), polarity="bright")
    if style == "fundus":
        bed = scene("fundus", 640, seed, {"disc_radius_px": 42.0})
        backdrop = Backdrop(slope=0.08, vignette=0.3, texture_sd=0.025, texture_px=16.0, disc=0.5, centre=0.3)
        channel = Channel(0.38, {"arteriole": 0.9, "venule": 1.1})
        optics = replace(cylinder, polarity="dark", contrast=0.45, reference_radius_px=5.5, reflex=0.25)
        optics = replace(optics, channels=(channel,), backdrop=backdrop, camera=Camera(4000, 0.006))
        return np.rint(255 * np.clip(render(bed, optics, rng), 0, 1)), "dark", bed
    if style == "fluorescence":
        entries = [{"side": "left"}, {"side": "top", "crosses": True, "vessel_class": "venule"}]
        shape = {"root_radius_px": 9.0, "min_radius_px": 1.1, "gain_sd": 0.15, "length_ratio": 7.0}
        bed = scene("tree", 512, seed, shape, entry=entries)
        backdrop = Backdrop(slope=0.3, vignette=0.3, texture_sd=0.08, texture_px=40.0)
        optics = replace(cylinder, contrast=0.5, reference_radius_px=8.0, backdrop=backdrop, camera=Camera(400, 0.004))
        return render(bed, optics, rng), "bright", bed
    spread = {"angiogram": 0.3, "strong speckle": 0.4}[style]
    shape = {"spacing_px": 34.0, "radius_px": 1.6, "radius_sd": 0.25, "feeder_radius_px": 6.0, "shortest_px": 12.0}
    bed = scene("mesh", 448, seed, shape)
    optics = replace(cylinder, contrast=0.45, reference_radius_px=3.0, blur_px=0.8, channels=(Channel(0.15),))
    return speckled(render(bed, optics, rng), spread, 0.6, rng), "bright", bed


def truth_of(bed, fov: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Axis points (n, 3) at steps of half a pixel within the field, and the mask of pixels within the lumen."""
    axis = np.concatenate([np.column_stack((v.x_px, v.y_px, v.radius_px))[::2] for v in bed.vessels])
    column, row = np.rint(axis[:, :2]).astype(int).T
    inside = (row >= 0) & (column >= 0) & (row < fov.shape[0]) & (column < fov.shape[1])
    inside[inside] = fov[row[inside], column[inside]]
    mask = np.zeros(fov.shape, dtype=bool)
    rows, columns = np.indices(fov.shape)
    for x, y, radius in axis[::2]:
        reach = int(radius) + 2
        near = (slice(max(int(y) - reach, 0), int(y) + reach + 1), slice(max(int(x) - reach, 0), int(x) + reach + 1))
        mask[near] |= np.hypot(rows[near] - y, columns[near] - x) <= max(radius, 0.7)
    return axis[inside], mask


NO_WORSE = 0.02  # Dice that a style may lie below a filter whose threshold was chosen for the picture
BETTER_THAN_SATO = 0.035  # Dice, mean over the styles
LEAST_DICE, LEAST_CL_DICE, LEAST_RECALL, MOST_FALSE = 0.84, 0.93, 0.92, 0.025


@pytest.mark.slow
def test_published_filters_are_not_better_in_any_style():
    """One setting for all against filters with the best threshold for each picture; seeds that nothing was tuned on."""
    ours, theirs = {}, {}
    for style in ("fundus", "angiogram", "fluorescence", "strong speckle"):
        pixels, polarity, bed = phantom(style, seed=5003)
        image = prepared(pixels, polarity, (1.0, 12.0))
        axis, truth = truth_of(bed, image.fov)
        ours[style] = score(found(image), axis, truth, image.fov)
        even = (image.signal / image.noise_sd).astype(np.float64)
        for name, response in FILTERS.items():
            theirs[style, name] = dice(best_mask(response(even), truth, image.fov), truth & image.fov)
            assert ours[style].dice >= theirs[style, name] - NO_WORSE, (style, name, ours[style], theirs[style, name])
    mixed = [ours[style] for style in ("fundus", "angiogram", "fluorescence")]
    assert np.mean([one.dice for one in mixed]) >= LEAST_DICE
    assert np.mean([one.cl_dice for one in mixed]) >= LEAST_CL_DICE
    assert np.mean([one.recall for one in mixed]) >= LEAST_RECALL
    assert np.mean([one.false for one in mixed]) <= MOST_FALSE
    gain = [ours[style].dice - theirs[style, "sato"] for style in ours]
    assert np.mean(gain) >= BETTER_THAN_SATO


def test_the_baseline_finds_a_plain_tube_and_a_mask_is_taken_as_it_is():
    """The Sato filter and a given mask are registered beside the default: both see one tube where there is one."""
    image = prepared(tube((120, 160), 4.0), "dark")
    truth = np.abs(np.arange(120) - 59.5)[:, None] <= 4.0 * np.ones((1, 160))
    most_of_it = 0.75
    assert dice(found(image, method="hessian"), truth) > most_of_it
    given = segment(image, SegmentSettings("mask", (1.0, 10.0), DEFAULT_FALSE_PX, {}), truth)
    assert np.array_equal(given.pixels, truth)
    assert given.source == "mask_file"
    with pytest.raises(ImageError, match="mask_file"):
        found(image, method="mask")
    with pytest.raises(ImageError, match="no background is left"):
        segment(image, SegmentSettings("mask", (1.0, 10.0), DEFAULT_FALSE_PX, {}), np.ones_like(truth))
