"""Phantoms like a measured study: what they take over from it, and what they refuse."""

import json
import tomllib
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from vasohm_synthetic.errors import RecipeError
from vasohm_synthetic.like import recipe_like
from vasohm_synthetic.make import build_bed, draw, study_text
from vasohm_synthetic.render import render_vessels
from vasohm_synthetic.tubes import Tube, tube_scene


def results(folder, *, polarity="dark", loops=0, typed=None, **image):
    """Write the few files of a measured study that are read, with made-up numbers; `typed` stood in the study file."""
    study = {
        "study.name": "own",
        "image.preset": "intravital",
        "image.polarity": polarity,
        "segment.radius_um": [2.0, 40.0],
        "network.drive_mmhg": 2.0,
        "blood.law": "pries-in-vivo",
        "blood.hematocrit": 0.4,
        "blood.plasma_viscosity_mpa_s": 1.1,
        "blood.viscosity_mpa_s": 3.0,
        **(typed or {}),
    }
    one = folder / "images" / "007"
    one.mkdir(parents=True)
    configuration = {key: {"value": value, "source": "study"} for key, value in study.items()}
    (folder / "study.json").write_text(json.dumps({"configuration": configuration}))
    (one / "record.json").write_text("{}")
    row = {
        "width_px": 200,
        "height_px": 180,
        "pixel_size_um": 2.0,
        "profile": "slab",
        "blur_px": 1.3,
        "noise": 0.02,
        "contrast": 0.3,
    }
    pd.DataFrame([{"image_id": "007", **row, **image}]).to_csv(one / "image.csv", index=False)
    radius = np.geomspace(4.0, 20.0, 30)
    segments = {"radius_mean_um": radius, "radius_sd_um": 0.06 * radius, "length_um": 12 * radius}
    pd.DataFrame(segments).to_csv(one / "segments.csv", index=False)
    pd.DataFrame({"loops": [0, loops]}).to_csv(one / "networks.csv", index=False)
    return folder


def test_phantom_takes_over_what_shapes_the_uncertainty(tmp_path):
    """Blur, profile, scale, contrast over noise and calibres are the measured picture's own."""
    recipe = recipe_like(results(tmp_path / "dark"))
    (image,) = recipe.images
    assert (image.image_id, image.pixel_size_um, image.scene.kind) == ("007", 2.0, "tree")
    assert (image.optics.profile, image.optics.blur_px) == ("slab", 1.3)
    assert np.exp(-image.optics.contrast) == pytest.approx(0.7)  # Beer and Lambert: 30 % of the light is taken away
    assert recipe.radius_um == (2.0, 40.0)
    assert (recipe.blood.hematocrit, recipe.drive_mmhg) == (0.4, 2.0)
    assert image.scene.tree.root_radius_px == pytest.approx(10.0, rel=0.05)
    assert image.scene.tree.min_radius_px == pytest.approx(2.0, rel=0.05)
    assert image.scene.tree.variation_sd == pytest.approx(0.06)
    bed = build_bed(recipe, image)
    picture = draw(recipe, image, bed) / 65535
    beside = picture[render_vessels(bed, image.optics)[0] > 1 - 1e-6]
    sampling = 4 / np.sqrt(2 * beside.size)
    assert (beside / beside.mean()).std() == pytest.approx(0.02, rel=sampling)  # noise of ln I


def test_phantom_of_a_bright_mesh_is_a_bright_mesh_of_equal_contrast_over_noise(tmp_path):
    """A bright picture's units are those of its file; loops make a mesh."""
    bright = results(tmp_path, polarity="bright", loops=9, noise=12.0, contrast=240.0)
    (image,) = recipe_like(bright).images
    assert image.scene.kind == "mesh"
    assert image.optics.polarity == "bright"
    assert image.optics.contrast / image.optics.camera.noise_sd == pytest.approx(240 / 12)


def test_blur_that_was_typed_is_read_from_the_study(tmp_path):
    """`image.csv` holds the blur only where vessels tell it; the phantoms must be measured with what was typed, too."""
    typed = {"radius.blur_px": 1.7, "radius.profile": "cylinder", "segment.method": "mask"}
    recipe = recipe_like(results(tmp_path, typed=typed, blur_px=np.nan, pixel_size_se_um=0.04))
    assert recipe.images[0].optics.blur_px == 1.7
    assert recipe.pixel_size_se_um == 0.04
    study = tomllib.loads(study_text(recipe))
    assert study["radius"] == {"blur_px": 1.7, "profile": "cylinder"}
    assert study["segment"] == {"radius_um": [2.0, 40.0]}  # phantoms have no masks


@pytest.mark.parametrize("polarity", ["dark", "bright"])
def test_absorber_stands_out_as_it_was_measured(tmp_path, polarity):
    """A vessel of the median radius must take away (or add) the measured light: the fit's precision hangs on it."""
    measured = {"profile": "absorber", "contrast": 0.3, "noise": 0.02}
    (image,) = recipe_like(results(tmp_path, polarity=polarity, **measured)).images
    radius = image.optics.reference_radius_px
    optics = replace(image.optics, blur_px=0.0, supersample=5)
    (drawn,) = render_vessels(tube_scene([Tube(60, 60, radius, 300)], (121, 121)), optics)
    axis = abs(drawn[60, 60] - (1.0 if polarity == "dark" else 0.0))
    noise = image.optics.camera.noise_sd / (0.6 if polarity == "dark" else 1.0)  # of the background
    pixel = 1 / (8 * radius**2)  # the axis pixel's mean chord is shorter than the diameter
    assert axis / noise == pytest.approx(0.3 / 0.02, rel=pixel)


def test_folder_without_a_measured_picture_is_refused(tmp_path):
    """A recipe from nothing would look like knowledge."""
    with pytest.raises(RecipeError, match=r"holds no study\.json"):
        recipe_like(tmp_path)
    with pytest.raises(RecipeError, match="known blur, noise and contrast"):
        recipe_like(results(tmp_path / "blind", blur_px=np.nan))
