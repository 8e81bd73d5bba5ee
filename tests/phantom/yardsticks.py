"""Published line filters to hold a segmentation against, and its scores against exact truth; no code under test."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage
from scipy.signal import oaconvolve
from scipy.spatial import cKDTree
from skimage.filters import frangi, sato
from skimage.morphology import remove_small_objects, skeletonize

WINDOW_PX = 15  # twice the width of the widest vessels that the line detector is meant for, as its authors choose it
N_ANGLES = 12
SIGMAS_PX = (1.2, 1.8, 2.7, 4.0, 6.0)
LEAST_PX = 30


def line_detector(image: np.ndarray) -> np.ndarray:
    """Basic line detector at all lengths, standardised and averaged with the picture.

    Nguyen, Bhuiyan, Park and Ramamohanarao, Pattern Recognit 2013;46:703, doi:10.1016/j.patcog.2012.08.009: mean over
    the window against the greatest mean over lines of length 1, 3 ... W through its centre, 12 angles.
    """
    mean = ndimage.uniform_filter(image, WINDOW_PX, mode="reflect")
    padded = np.pad(image, WINDOW_PX, mode="symmetric")
    total, count = _standard(image), 1
    for length in range(1, WINDOW_PX + 1, 2):
        along = np.arange(length) - (length - 1) / 2
        best = np.full(image.shape, -np.inf)
        for angle in np.pi * np.arange(N_ANGLES) / N_ANGLES:
            kernel = np.zeros((length, length))
            middle = (length - 1) // 2
            rows, columns = np.rint(middle + along * np.sin(angle)), np.rint(middle + along * np.cos(angle))
            np.add.at(kernel, (rows.astype(int), columns.astype(int)), 1 / length)
            inner = slice(WINDOW_PX, -WINDOW_PX)
            best = np.maximum(best, oaconvolve(padded, kernel, mode="same")[inner, inner])
        total, count = total + _standard(best - mean), count + 1
    return total / count


def _standard(values: np.ndarray) -> np.ndarray:
    return (values - values.mean()) / values.std()


FILTERS = {
    "line detector": line_detector,
    # scikit-image; Sato et al., Med Image Anal 1998;2:143; Frangi et al., MICCAI 1998, LNCS 1496:130
    "sato": lambda image: sato(image, sigmas=SIGMAS_PX, black_ridges=False),
    "frangi": lambda image: frangi(image, sigmas=SIGMAS_PX, beta=0.7, black_ridges=False),
}


def best_mask(response: np.ndarray, truth: np.ndarray, fov: np.ndarray) -> np.ndarray:
    """The filter's mask at that threshold of this picture which is nearest to the truth: more than a user can have."""
    share = (truth & fov).sum() / fov.sum()
    masks = [
        _clean((response > np.quantile(response[fov], 1 - part * share)) & fov) for part in np.geomspace(0.4, 1.8, 15)
    ]
    return max(masks, key=lambda mask: dice(mask, truth & fov))


def _clean(mask: np.ndarray) -> np.ndarray:
    closed = ndimage.binary_closing(np.pad(mask, 2), np.ones((3, 3)))[2:-2, 2:-2]
    return remove_small_objects(closed, max_size=LEAST_PX)


def dice(mask: np.ndarray, truth: np.ndarray) -> float:
    """Twice the common area over the sum of both."""
    return float(2 * (mask & truth).sum() / max(mask.sum() + truth.sum(), 1))


@dataclass(frozen=True)
class Scores:
    """Against exact truth: areas (dice), centrelines (cl_dice), share of length found, and of length invented."""

    dice: float
    cl_dice: float
    recall: float
    false: float


def score(mask: np.ndarray, axis: np.ndarray, truth: np.ndarray, fov: np.ndarray) -> Scores:
    """Hold a mask against the axis (n, 3): x, y, radius in px at equal steps, and the true mask.

    clDice: Shit et al., CVPR 2021, doi:10.1109/CVPR46437.2021.01629. Found: within max(2 px, 0.75 r) of the axis.
    """
    truth = truth & fov
    line, true_line = skeletonize(mask.copy()), skeletonize(truth)
    precision, sensitivity = (line & truth).sum() / max(line.sum(), 1), (true_line & mask).sum() / true_line.sum()
    rows, columns = np.nonzero(line)
    reach = np.maximum(2, 0.75 * axis[:, 2])
    if not len(rows):
        return Scores(0.0, 0.0, 0.0, 0.0)
    places = np.column_stack((columns, rows))
    found = cKDTree(places).query(axis[:, :2])[0] <= reach
    distance, nearest = cKDTree(axis[:, :2]).query(places)
    return Scores(
        dice(mask, truth),
        float(2 * precision * sensitivity / max(precision + sensitivity, 1e-9)),
        float(found.mean()),
        float(np.sum(distance > reach[nearest]) / true_line.sum()),
    )
