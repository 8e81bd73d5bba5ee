"""The field of view: found where a camera masks its corners, and nowhere else."""

import numpy as np

from vasohm.image.fov import find_field_of_view, mirror_outside


def round_field(size: int = 200, radius: float = 90.0) -> np.ndarray:
    rows, columns = np.indices((size, size)) - (size - 1) / 2
    return np.hypot(rows, columns) <= radius


def test_a_round_field_is_found():
    truth = round_field()
    picture = np.where(truth, 150.0, 3.0).astype(np.float32)
    found = find_field_of_view(picture, vessels_are_dark=True)
    one_pixel_of_border = 2 * np.pi * 90 * 2 / truth.size
    assert np.mean(found != truth) < one_pixel_of_border


def test_a_dark_vessel_from_border_to_border_does_not_cut_the_field():
    """Wrong if whatever is dark and touches the border were taken for a mask: half of the picture would be lost."""
    picture = np.full((96, 96), 180.0, np.float32)
    picture[44:53] = 120.0
    assert find_field_of_view(picture, vessels_are_dark=True).all()


def test_dark_tissue_between_bright_vessels_is_inside():
    picture = np.random.default_rng(0).normal(5, 1, (96, 96)).astype(np.float32)
    picture[40:44] = 100.0
    assert find_field_of_view(picture, vessels_are_dark=False).all()


def test_vessels_on_a_background_without_noise_are_not_the_field():
    """Wrong if the exactly black background of a counting camera were taken for the outside."""
    picture = np.zeros((96, 96), np.float32)
    picture[40:50] = 100.0
    picture[:, 20:26] = 80.0
    assert find_field_of_view(picture, vessels_are_dark=False).all()


def test_a_constant_picture_is_all_field():
    assert find_field_of_view(np.full((40, 40), 7.0, np.float32), vessels_are_dark=False).all()


def test_the_mirror_image_draws_no_edge():
    """A straight ramp stays a ramp folded at the border: no step that a filter could take for a vessel."""
    truth = round_field()
    rows = np.indices(truth.shape)[0].astype(np.float32)
    filled = mirror_outside(np.where(truth, rows, -1000).astype(np.float32), truth)
    assert filled.min() >= rows[truth].min()
    steepest_fold = 3 * 2 * 4  # three pixels along, folded at an inset of four
    assert np.abs(np.diff(filled, axis=0)).max() <= steepest_fold
