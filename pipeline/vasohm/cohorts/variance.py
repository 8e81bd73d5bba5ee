"""Where the spread of an outcome comes from, and what a single image can tell of a change."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import FloatArray, IntArray
from vasohm.cohorts.mixed import is_singular, split_variance
from vasohm.cohorts.observations import Observations

REPEATABILITY_FACTOR = 1.96 * np.sqrt(2.0)  # Bland and Altman 1999, section 3


@dataclass(frozen=True, slots=True)
class Spread:
    """Standard deviations on the scale of the observations; NaN where nothing tells them."""

    between_subjects_sd: float
    between_eyes_sd: float
    between_images_sd: float
    measurement_sd: float
    calibration_sd: float
    repeats_df: int
    repeat_sd: float

    @property
    def repeatability_coefficient(self) -> float:
        """Two repeats differ by less with a probability of 95 %."""
        return float(REPEATABILITY_FACTOR * self.repeat_sd)


def repeats(value: FloatArray, cells: IntArray) -> tuple[float, int]:
    """Standard deviation within cells of repeated values, and its degrees of freedom.

    References
    ----------
    Bland JM, Altman DG. Stat Methods Med Res 1999;8:135-160, doi:10.1177/096228029900800204, section 3.
    """
    _, held, counts = np.unique(cells, return_inverse=True, return_counts=True)
    mean = np.bincount(held, weights=value) / counts
    df = int(np.sum(counts - 1))
    return (float(np.sqrt(np.sum(np.square(value - mean[held])) / df)) if df else np.nan), df


def spread(observed: Observations, occasion: IntArray) -> Spread:
    """Split the spread of an outcome.

    Parameters
    ----------
    observed : observations of all levels; the first of `within`, where there is one, is called eye.
    occasion : (n,) code of subject, eye, level and whatever else was not the same: images of one code are repeats.

    Notes
    -----
    Levels and covariates are taken out first. Variances come from a mixed model by restricted maximum likelihood (see
    `vasohm.cohorts.mixed`); what is stated of the measurement is taken out of the innermost of them.
    """
    levels = (observed.level[:, None] == np.unique(observed.level)).astype(np.float64)
    design = np.column_stack([levels, observed.covariates])
    if np.linalg.matrix_rank(design) < design.shape[1]:
        design = levels
    own = float(np.mean(observed.variance))
    sd, df = repeats(observed.value, occasion)
    between = eyes = images = np.nan
    components = split_variance(observed, design)
    if components is not None:
        between = 0.0 if is_singular(components) else np.sqrt(components.subject)
        images = np.sqrt(max(components.residual - own, 0.0))
        if components.nested:
            eyes = float(np.sqrt(sum(components.nested)))
        elif observed.within and len(np.unique(observed.within[0])) == len(observed.value):
            eyes, images = images, np.nan  # one image an eye: both are one
    elif (left := len(observed.value) - np.linalg.matrix_rank(design)) > 0:
        residual = observed.value - design @ np.linalg.lstsq(design, observed.value, rcond=None)[0]
        between = np.sqrt(max(float(residual @ residual) / left - own, 0.0))
    return Spread(
        float(between),
        eyes,
        float(images),
        float(np.sqrt(own)),
        float(np.sqrt(np.mean(np.square(observed.shared_se)))),
        df,
        sd,
    )
