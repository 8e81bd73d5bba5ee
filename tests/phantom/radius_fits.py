"""Scenes handed to the fit, and what came back held against the truth."""

from dataclasses import dataclass

import numpy as np

from vasohm.network.learn import TubeSettings
from vasohm.network.strips import TubeLines
from vasohm.network.tubes import TubeFit, TubeImage, fit_tubes

BINS_PX = ((0.6, 1.0), (1.0, 1.5), (1.5, 2.5), (2.5, 4.5), (4.5, 9.0))


@dataclass
class Outcome:
    """Errors of ln r by point, of the mean and of ln R by segment; `total_se` holds random and shared parts."""

    fit: TubeFit
    segment: np.ndarray
    place: np.ndarray  # of each point from its segment's first
    true: np.ndarray  # radius
    error: np.ndarray
    total_se: np.ndarray

    @property
    def n_segments(self):
        return int(self.segment.max()) + 1

    def mean_by_segment(self, values):
        return np.bincount(self.segment, values) / np.bincount(self.segment)

    def segment_error(self):
        """Error of the mean of ln r, and its random standard error."""
        share = 1 / np.bincount(self.segment)[self.segment]
        return self.mean_by_segment(self.error), np.sqrt(self.fit.covariance.segment_variance(share))

    def ln_resistance_error(self):
        """Error of ln of the sum of r^-4, by the median of its posterior, and its total standard error."""
        r, v = np.exp(self.fit.ln_radius), self.fit.ln_radius_random_se**2
        gradient = -4 * r**-4.0 / np.bincount(self.segment, r**-4.0)[self.segment]
        variance = self.fit.covariance.segment_variance(gradient)
        ln_sum = np.log(np.bincount(self.segment, r**-4.0 * np.exp(8 * v))) - variance / 2
        shared = sum(np.bincount(self.segment, gradient * column) ** 2 for column in self.fit.shared.T)
        return ln_sum - np.log(np.bincount(self.segment, self.true**-4.0)), np.sqrt(variance + shared)


def fit_scene(scene, rng, profile="auto", blur_px=None, *, dark=False, seed_sd=0.2, nodes=None, vessel_class=None):
    """Fit the lines of a scene; seeds of the radius are wrong by a factor of their own for each segment."""
    x, y, offsets, true = scene.flat()
    n = len(offsets) - 1
    segment = np.repeat(np.arange(n), np.diff(offsets))
    seed = true * np.exp(seed_sd * rng.standard_normal(n))[segment]
    node_a, node_b = nodes if nodes is not None else (2 * np.arange(n), 2 * np.arange(n) + 1)
    classes = np.zeros(n, np.int64) if vessel_class is None else vessel_class
    lines = TubeLines(x, y, offsets, seed, classes, node_a, node_b)
    image = TubeImage(scene.signal, scene.noise_sd, scene.valid, np.zeros(scene.valid.shape, bool))
    fit = fit_tubes(image, lines, TubeSettings(profile, blur_px, dark))
    total = np.sqrt(fit.ln_radius_random_se**2 + (fit.shared**2).sum(axis=1))
    place = np.arange(len(x)) - offsets[segment]
    return Outcome(fit, segment, place, true, fit.ln_radius - np.log(true), total)


def covered(error, se):
    """Share of errors inside the 95 % interval."""
    return float(np.mean(np.abs(error) < 1.96 * se))


def rms(values):
    return float(np.sqrt(np.mean(np.square(values))))
