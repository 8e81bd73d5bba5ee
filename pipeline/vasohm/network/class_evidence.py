"""What colour says of each vessel's class: two groups, told apart in each picture by itself."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.class_groups import Data, Groups, fit_groups
from vasohm.network.class_inference import Links, infer
from vasohm.network.colours import VesselColours

LEAST_SIGNAL = 3.0  # a green density of fewer standard errors has no colour
LEAST_USED = 12  # segments from which two groups can be told
LEAST_GAIN = 12.0  # in ln likelihood of two groups over one
LEAST_DISTANCE = 1.8  # of the groups' reds, in standard deviations of a well measured segment
LEAST_GROUP = 0.05  # of the segments
WELL_MEASURED = 0.25  # quantile of the noise
FIRST_SHARES = (0.3, 0.5, 0.7)  # of arterioles, tried
FEW_ROUNDS = 12
ROUNDS = 25
KEPT_STARTS = 2
TOLD_ODDS = 7.0  # of a segment that a person classed
STRAY = 0.02  # share of segments whose colour is that of something else: bounds what one segment can say
TEMPER = 0.7  # neighbouring pieces of tissue err alike


@dataclass(frozen=True, slots=True, eq=False)
class Circumstances:
    """What changes a vessel's colour beside its class, by segment."""

    radius_px: FloatArray  # (n_segments,)
    place_px: FloatArray  # (n_segments, 2) middle
    disc_distance_px: FloatArray | None

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class ClassEvidence:
    """Logarithm of the odds that a segment is a venule, from its own colour; 0 where that says nothing."""

    log_odds: FloatArray  # (n_segments,)
    distance: float  # between the two groups' reds in standard deviations; NaN where there are no two
    fault: str  # why no two groups are told; empty where they are

    def __post_init__(self) -> None:
        freeze(self)


def weigh_colours(colours: VesselColours, around: Circumstances, links: Links, told: IntArray) -> ClassEvidence:
    """Part the segments into two groups by their colour and say how well each fits.

    Parameters
    ----------
    colours : densities of all segments.
    around : their circumstances.
    links : which segments belong together.
    told : (n_segments,) -1 arteriole and 1 venule where a person said so, 0 elsewhere.

    Returns
    -------
    Evidence; none, with the fault told, where the colours are those of one group.

    Notes
    -----
    The group that is less dense in red is the arterioles': at 600 to 700 nm oxygenated blood absorbs several times
    less light than deoxygenated blood, while both absorb green about alike (van Assendelft, Spectrophotometry of
    Haemoglobin Derivatives, 1970; Prahl, tabulated molar extinction of hemoglobin, Oregon Medical Laser Center, 1999).
    """
    n = len(told)
    value, noise = _features(colours)
    green = colours.density[:, 1]
    used = np.isfinite(value).all(axis=1) & np.isfinite(noise).all(axis=(1, 2))
    used &= green > LEAST_SIGNAL * np.sqrt(np.where(used, colours.covariance[:, 1, 1], 1.0))
    if used.sum() < LEAST_USED:
        return ClassEvidence(np.zeros(n), np.nan, f"only {used.sum()} segments show a colour, fewer than {LEAST_USED}")
    data = Data(value[used], noise[used], _explaining(around, used)[used])
    one = fit_groups(data, None, _alone, FEW_ROUNDS)
    two, gain = _two_groups(data, _Vessels(links, TOLD_ODDS * told, used), one)
    measured_well = np.quantile(two.inflation * data.noise[:, 0, 0], WELL_MEASURED)
    distance = float(two.shift[0] / np.sqrt(two.spread[0, 0] + measured_well))
    if gain < LEAST_GAIN or distance < LEAST_DISTANCE:
        fault = f"the colours are not those of two groups (distance {distance:.1f} sd, gain {gain:.0f})"
        return ClassEvidence(np.zeros(n), distance, fault)
    log_odds = np.zeros(n)
    log_odds[used] = _bounded(TEMPER * two.log_ratio(data))
    return ClassEvidence(log_odds, distance, "")


@dataclass(frozen=True, slots=True, eq=False)
class _Vessels:
    """How the segments that show a colour speak through all that are linked."""

    links: Links
    said: FloatArray  # (n_segments,) log odds of what persons said
    used: BoolArray

    def probability(self, log_odds: FloatArray) -> FloatArray:
        """Probability of the second group; where a person classed a segment, its colour has no say."""
        own = self.said.copy()
        own[self.used] = np.where(own[self.used] != 0, own[self.used], log_odds)
        return infer(self.links, own, FEW_ROUNDS)[0][self.used]

    def weigh(self, log_odds: FloatArray) -> tuple[FloatArray, float]:
        """Probability of the second group by word and colour, and the log likelihood beyond the first group alone.

        The likelihood is that of the colours given the words: that persons said much makes no two groups of colours.
        """
        own = self.said.copy()
        own[self.used] += log_odds
        probability, both = infer(self.links, own, FEW_ROUNDS)
        return probability[self.used], both - infer(self.links, self.said, FEW_ROUNDS)[1]


def _alone(log_odds: FloatArray) -> FloatArray:
    """Probabilities without neighbours."""
    return np.asarray(1 / (1 + np.exp(-np.clip(log_odds, -50, 50))))


def _two_groups(data: Data, vessels: _Vessels, one: Groups) -> tuple[Groups, float]:
    """Split the features at several places, fit two groups from there, and keep the likeliest.

    Returns
    -------
    The groups, the second denser in red, and how much likelier they are than one group, as a logarithm.
    """
    left = data.value - data.design @ one.line
    left /= np.sqrt(np.diag(one.spread) + one.inflation * np.diagonal(data.noise, axis1=1, axis2=2))
    starts = [
        feature > np.quantile(feature, share)
        for feature in (data.value[:, 0], left[:, 0], left.sum(axis=1))
        for share in FIRST_SHARES
    ]
    fits = [_red_first(fit_groups(data, start.astype(np.float64), _alone, FEW_ROUNDS)) for start in starts]
    fits = sorted(fits, key=lambda fit: -_gain(fit, data, vessels))[:KEPT_STARTS]
    fits = [fit_groups(data, vessels.probability(f.log_ratio(data)), vessels.probability, ROUNDS) for f in fits]
    best = max((_red_first(fit) for fit in fits), key=lambda fit: _gain(fit, data, vessels))
    return best, _gain(best, data, vessels) - float(one.log_density(data, 0.0).sum())


def _gain(groups: Groups, data: Data, vessels: _Vessels) -> float:
    """Log likelihood of two groups that share vessels; nothing where one of them has too few members."""
    probability, beyond = vessels.weigh(groups.log_ratio(data))
    if not LEAST_GROUP < float(probability.mean()) < 1 - LEAST_GROUP:
        return -np.inf
    return float(groups.log_density(data, -0.5).sum()) + beyond


def _red_first(groups: Groups) -> Groups:
    """Return the same groups, the second denser in red."""
    turned = -1.0 if groups.shift[0] < 0 else 1.0
    return Groups(groups.line, turned * groups.shift, groups.spread, groups.inflation)


def _features(colours: VesselColours) -> tuple[FloatArray, FloatArray]:
    """Values (n, 2) and covariance of their errors (n, 2, 2)."""
    red, green, _ = colours.density.T
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = red / green
        value = np.column_stack((ratio, np.log(green)))
        change = np.zeros((len(red), 2, 3))
        change[:, 0, 0], change[:, 0, 1], change[:, 1, 1] = 1 / green, -ratio / green, 1 / green
        noise: FloatArray = change @ colours.covariance @ change.transpose(0, 2, 1)
    return value, noise


def _explaining(around: Circumstances, used: BoolArray) -> FloatArray:
    """What else explains a colour (n, k), each column of mean 0 and spread 1 over the used segments."""
    ln_r = np.log(around.radius_px)
    columns = [ln_r, ln_r**2, *around.place_px.T]
    if around.disc_distance_px is not None:
        columns.append(np.log(np.maximum(around.disc_distance_px, 1.0)))
    x = np.column_stack(columns)
    centre, spread = np.median(x[used], axis=0), np.std(x[used], axis=0)
    x = (x - centre) / np.where(spread > 0, spread, 1.0)
    return np.clip(x, -3.0, 3.0)


def _bounded(log_odds: FloatArray) -> FloatArray:
    """Log odds when a segment's colour is with probability STRAY that of something else."""
    odds = np.clip(log_odds, -50, 50)
    certain, stray = np.log1p(-STRAY), np.log(STRAY)
    return np.asarray(np.logaddexp(certain + odds, stray) - np.logaddexp(certain, stray + odds))
