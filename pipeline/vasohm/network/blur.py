"""The image's own blur and profile, from its widest vessels."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.groups import median_by
from vasohm.network.jointfit import LN_C, LN_R, Normal, Observed, Priors, fit_joint, total_cost
from vasohm.network.profiles import Optics, ProfileTable, ln_area
from vasohm.network.shared import (
    S_RANGE_PX,
    TAU_RANGE,
    Marginal,
    marginalise,
    optics_response,
    parameters_of,
    shifted,
    table_like,
)

START_PX = (0.75, 1.3, 2.2, 3.8)  # blurs tried first
FIRST_ROUNDS, ROUNDS = 3, 10
HOPELESS = 40.0  # difference of log likelihood after the first rounds from which a family is not followed further
LONGEST_STEP, SMALLEST_SHRINK = 0.5, 0.05
NOTHING_GAINED = 0.02  # of log likelihood by a short step
SETTLED = 3e-3  # of ln blur
SE_FACTOR = 1.3  # the curvature of chi^2 states 10 to 30 % too little (measured on phantoms)
DECISIVE = 6.0  # difference of log likelihood between slab and cylinder from which the image has told its family
ODD_STRIP = 4.0  # times the cost of the segment's median strip: noise alone never gives so much
ODD_SEGMENT = (5.0, 0.35)  # out of focus: ln blur off by so many standard errors, and by so much


@dataclass(frozen=True, slots=True, eq=False)
class ImageOptics:
    """What the image says about its optics.

    `covariance` (k, k) is that of ln of the parameters of `optics`; a typed blur counts with its own uncertainty.
    `family_told` is false where slab and cylinder explain the picture about equally.
    """

    optics: Optics
    covariance: FloatArray
    family_told: bool
    point_cost: FloatArray  # (n_points,) minus the log likelihood of each point's strip
    theta: FloatArray  # (n_points, B) unknowns of the chosen segments
    answer: FloatArray  # (n_points, B, k) their change with the optics
    in_focus: BoolArray  # (n_segments,) of the chosen segments

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True)
class OpticsRequest:
    """Families allowed, blurs (all of it, px) to start from, and the blur's relative uncertainty where it is given.

    A given blur is the only one to start from and stays; its `blur_rel_se` is not None. `absorbing`: vessels are seen
    by what they absorb, so that a cylinder is but an absorber of little absorption and need not be told from it.
    """

    families: tuple[str, ...]
    start_px: tuple[float, ...]
    blur_rel_se: float | None
    absorbing: bool


@dataclass(frozen=True, slots=True, eq=False)
class _Fit:
    optics: Optics
    theta: FloatArray
    cost: float  # minus the log posterior
    point_cost: FloatArray
    marginal: Marginal


@dataclass(frozen=True, slots=True, eq=False)
class _Case:
    """What is fitted: strips, priors, a table over the range needed, and what may vary."""

    observed: Observed
    priors: Priors
    table: ProfileTable
    request: OpticsRequest

    def free(self, optics: Optics) -> tuple[str, ...]:
        names = parameters_of(optics)
        return names if self.request.blur_rel_se is None else names[1:]


def estimate_optics(
    observed: Observed, priors: Priors, table: ProfileTable, start: FloatArray, request: OpticsRequest
) -> ImageOptics:
    """Find blur, family and absorption from segments wide enough to show them.

    Parameters
    ----------
    observed, priors, start : strips, priors without a prior of contrast, and first unknowns of the chosen segments.
    table : any table over the range needed.
    """
    case = _Case(observed, priors, table, request)
    families = request.families
    simple = [family for family in ("slab", "cylinder") if family in families] or ["cylinder"]
    fits = {family: _first(case, start, family) for family in simple}
    least = min(fit.cost for fit in fits.values())
    for family, fit in fits.items():
        if fit.cost < least + HOPELESS:
            fits[family] = _refine(case, fit.theta, fit.optics, table_like(table, fit.optics), ROUNDS)
    best, told = next(iter(fits.values())), len(families) == 1 or len(fits) == 1
    if len(fits) > 1:
        gain = advantage(fits["cylinder"].point_cost, fits["slab"].point_cost, observed.segment)
        best, told = fits["cylinder" if gain > 0 else "slab"], told or abs(gain) > DECISIVE
    if "absorber" in families:
        absorbing = _absorber(case, best)
        gain = advantage(absorbing.point_cost, best.point_cost, observed.segment)
        free = request.absorbing and best.optics.family == "cylinder"
        if len(families) == 1 or gain > (0.0 if free else np.log(observed.n_points)):
            told |= gain > DECISIVE
            best = absorbing
    covariance = np.zeros((len(parameters_of(best.optics)),) * 2)
    n_free = len(case.free(best.optics))
    if n_free:
        information = best.marginal.information[_in_focus(best.marginal)].sum(axis=0)[-n_free:, -n_free:]
        covariance[-n_free:, -n_free:] = SE_FACTOR**2 * np.linalg.inv(information + 0.25 * np.eye(n_free))
    if request.blur_rel_se is not None:
        covariance[0, 0] = request.blur_rel_se**2
    keep = _in_focus(best.marginal)
    return ImageOptics(best.optics, covariance, bool(told), best.point_cost, best.theta, best.marginal.answer, keep)


def advantage(of: FloatArray, over: FloatArray, segment: IntArray) -> float:
    """Difference of log likelihood by which one model explains the strips better than another.

    Strips that neither explains, though it explains most of their segment (a vessel beside that was not found, a fold,
    dust), do not vote: with one of them a wrong profile can gain more than with all the others together. What is wrong
    along whole segments, as a light reflex is, does count. All arguments are (n_points,).
    """
    least = np.minimum(of, over)
    seen = least > 0
    if not seen.any():
        return 0.0
    usual = median_by(segment[seen], least[seen], int(segment.max()) + 1)
    votes = seen & (least <= ODD_STRIP * np.nan_to_num(usual)[segment])
    return float(np.sum(over[votes] - of[votes]))


def _first(case: _Case, start: FloatArray, family: str) -> _Fit:
    """Try the blurs to start from, then take a few Newton steps from the best."""
    tried, blurs = [], case.request.start_px
    if len(blurs) == 1:
        return _refine(case, start, Optics(family, 0.0, blurs[0]), case.table, FIRST_ROUNDS)
    for blur in blurs:
        here = table_like(case.table, Optics(family, 0.0, blur))
        theta, normal = fit_joint(case.observed, case.priors, here, _same_area(start, case.table, here), max_steps=3)
        tried.append((total_cost(case.observed, case.priors, theta, normal), blur, theta))
    _, blur, theta = min(tried, key=lambda one: one[0])
    optics = Optics(family, 0.0, blur)
    return _refine(case, theta, optics, table_like(case.table, optics), FIRST_ROUNDS)


def _same_area(theta: FloatArray, old: ProfileTable, new: ProfileTable) -> FloatArray:
    """Give each point the contrast with which the new optics throw as much light as the old."""
    out = theta.copy()
    out[:, LN_C] += ln_area(old.optics, theta[:, LN_R])[0] - ln_area(new.optics, theta[:, LN_R])[0]
    return out


def _absorber(case: _Case, best: _Fit) -> _Fit:
    """Refine from some absorption across the widest vessels, as the better of slab and cylinder suggests."""
    wide = float(np.exp(np.quantile(best.theta[:, LN_R], 0.9)))
    tau = 1.0 if best.optics.family == "cylinder" else 3.0
    optics = Optics("absorber", tau / (2.0 * wide), best.optics.s_px)
    return _refine(case, best.theta, optics, table_like(case.table, best.optics), ROUNDS)


def _refine(case: _Case, start: FloatArray, optics: Optics, started: ProfileTable, rounds: int) -> _Fit:
    """Newton steps in ln blur and ln absorption, each with the unknowns of all points refitted."""
    observed, priors = case.observed, case.priors
    here = table_like(case.table, optics)
    theta, normal = fit_joint(observed, priors, here, _same_area(start, started, here), max_steps=6)
    wide = float(np.exp(np.quantile(theta[:, LN_R], 0.9)))
    names, n_free = parameters_of(optics), len(case.free(optics))
    fit = _judge(case, here, theta, normal)
    shrink = 1.0
    for _ in range(rounds if n_free else 0):
        step = np.zeros(len(names))
        step[-n_free:] = shrink * _newton_step(fit, n_free, wide)
        stepped = fit.optics
        for name, ln_step in zip(names, step, strict=True):
            stepped = _bounded(shifted(stepped, name, float(ln_step)), wide)
        here = table_like(case.table, stepped)
        begin = fit.theta + np.clip(fit.marginal.answer @ step, -0.7, 0.7)
        theta, normal = fit_joint(observed, priors, here, begin, max_steps=4)
        trial = _judge(case, here, theta, normal)
        if trial.cost > fit.cost + 1e-3:
            shrink /= 4
            if shrink < SMALLEST_SHRINK:
                break
            continue
        gained = fit.cost - trial.cost
        fit, shrink = trial, min(4 * shrink, 1.0)
        if (gained < NOTHING_GAINED and np.all(np.abs(step) < 10 * SETTLED)) or np.all(np.abs(step) < SETTLED):
            break
    return fit


def _judge(case: _Case, table: ProfileTable, theta: FloatArray, normal: Normal) -> _Fit:
    response = optics_response(case.observed, table, theta, parameters_of(table.optics))
    marginal = marginalise(case.observed, case.priors, theta, normal, response)
    cost = total_cost(case.observed, case.priors, theta, normal)
    return _Fit(table.optics, theta, cost, normal.cost, marginal)


def _newton_step(fit: _Fit, n_free: int, wide: float) -> FloatArray:
    """Step of the free parameters, the last `n_free`; absorption at its bound does not push further."""
    keep = _in_focus(fit.marginal)
    information = fit.marginal.information[keep].sum(axis=0)[-n_free:, -n_free:] + 1e-3 * np.eye(n_free)
    gradient = fit.marginal.gradient[keep].sum(axis=0)[-n_free:]
    step = np.linalg.solve(information, gradient)
    if (
        fit.optics.family == "absorber"
        and _bounded(shifted(fit.optics, "absorption", float(step[-1])), wide) == fit.optics
    ):
        step[-1] = 0.0
        step[:-1] = np.linalg.solve(information[:-1, :-1], gradient[:-1])
    longest = float(np.abs(step).max())
    return np.asarray(step if longest <= LONGEST_STEP else step * (LONGEST_STEP / longest))


def _bounded(optics: Optics, wide: float) -> Optics:
    mu = optics.mu_per_px
    if optics.family == "absorber":
        mu = float(np.clip(mu, TAU_RANGE[0] / (2 * wide), TAU_RANGE[1] / (2 * wide)))
    # rounded, so that tables are found again
    return Optics(optics.family, float(f"{mu:.9g}"), float(f"{np.clip(optics.s_px, *S_RANGE_PX):.9g}"))


def _in_focus(marginal: Marginal) -> BoolArray:
    """Segments whose own blur does not contradict the others'."""
    shift, se = blur_of_segments(marginal)
    middle = float(np.median(shift)) if len(shift) else 0.0
    odd = (np.abs(shift - middle) > ODD_SEGMENT[0] * se) & (np.abs(shift - middle) > ODD_SEGMENT[1])
    return ~odd if odd.mean() < 0.5 else np.ones(len(odd), np.bool_)


def blur_of_segments(marginal: Marginal) -> tuple[FloatArray, FloatArray]:
    """Return how far each segment's own ln blur lies above the image's, and its standard error."""
    information = np.maximum(marginal.information[:, 0, 0], 1e-9)
    return marginal.gradient[:, 0] / information, 1.0 / np.sqrt(information)


def choose_segments(radius: FloatArray, length: IntArray, usable: BoolArray, most_points: int) -> IntArray:
    """Choose segments, widest first and evenly down the sizes, that hold about `most_points` points."""
    order = np.flatnonzero(usable)[np.argsort(-radius[usable], kind="stable")]
    stride = max(int(np.ceil(length[order].sum() / most_points)), 1)
    return np.sort(order[::stride])
