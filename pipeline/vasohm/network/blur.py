"""The image's own blur and profile, from its widest vessels."""

from dataclasses import dataclass, replace

import numpy as np
from scipy.special import expit

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.groups import mean_by, median_by
from vasohm.network.jointfit import (
    LN_C,
    LN_R,
    REFLEX,
    Normal,
    Observed,
    Priors,
    banded,
    factor,
    fit_joint,
    normal_equations,
    prior_pull,
    solve,
    total_cost,
    with_stiffness,
)
from vasohm.network.posterior import weigh_stiffness
from vasohm.network.profiles import Optics, ProfileTable, ln_area, ln_height
from vasohm.network.shared import (
    S_RANGE_PX,
    TAU_RANGE,
    Marginal,
    in_focus,
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
NOTHING_GAINED = 0.005  # of log likelihood: a step of a tenth of a standard deviation
FAMILY_BLURS = 2.5  # some vessel must be so wide before slab and round can be told apart
DECISIVE = 6.0  # difference of log likelihood between slab and round from which the image has told its family
ODD_STRIP = 4.0  # times the cost of the segment's median strip: noise alone never gives so much
STRANGE_SHARE = 0.25  # of a segment's strips that are odd among all: then it is not the vessel it is taken for
VAGUE_SE = 2.0  # of ln blur and ln absorption before the picture is asked
# sd of ln absorption below and above Beer and Lambert's law: scattered and stray light only raise it
ABSORPTION_SE = (0.5, 1.5)
DARKEST = 0.95  # share of light taken away from which the law tells nothing
MISFIT_PRIOR = 4.0  # segments that the belief in the stated noise is worth against the scatter between segments
WIDTH_STEP = 0.03  # of ln blur
MODEL_SE = 0.005  # of ln blur: what pixels, sampling and the shape of the blur leave open


@dataclass(frozen=True, slots=True, eq=False)
class ImageOptics:
    """What the image says about its optics.

    `covariance` (k, k) is that of ln of the parameters of `optics`; a typed blur counts with its own uncertainty.
    `family_told` is false where slab and round vessels explain the picture about equally; `family_shift` is how much
    the family that explains it next best changes ln r, weighed by the chance that it is the right one.
    """

    optics: Optics
    covariance: FloatArray
    family_told: bool
    family_shift: float
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
    by the light they take away, so that how much they take tells how they absorb.
    """

    families: tuple[str, ...]
    start_px: tuple[float, ...]
    blur_rel_se: float | None
    absorbing: bool


@dataclass(frozen=True, slots=True, eq=False)
class _Fit:
    optics: Optics
    theta: FloatArray
    costs: FloatArray  # (n_segments,) minus the log posterior
    prior_cost: float  # of the optics
    normal: Normal
    marginal: Marginal

    def cost(self, segments: BoolArray | None = None) -> float:
        """Minus the log posterior of all, or of chosen, segments."""
        chosen = self.costs if segments is None else self.costs[segments]
        return float(chosen.sum()) + self.prior_cost


@dataclass(frozen=True, slots=True, eq=False)
class _Case:
    """What is fitted: strips, priors, a table over the range needed, what may vary, and ln absorption as expected."""

    observed: Observed
    priors: Priors
    table: ProfileTable
    request: OpticsRequest
    ln_absorption: float
    absorption_told: bool  # by the share of light that the vessels take

    def free(self, optics: Optics) -> tuple[str, ...]:
        names = parameters_of(optics)
        return names if self.request.blur_rel_se is None else names[1:]

    def pull(self, optics: Optics) -> tuple[FloatArray, FloatArray]:
        """Gradient and precision of what is known of the parameters beforehand."""
        precision = np.full(len(parameters_of(optics)), VAGUE_SE**-2)
        gradient = np.zeros(len(precision))
        if optics.family == "absorber" and self.absorption_told:
            above = np.log(optics.mu_per_px) - self.ln_absorption
            precision[1] = ABSORPTION_SE[int(above > 0)] ** -2
            gradient[1] = -precision[1] * above
        return gradient, precision


def estimate_optics(
    observed: Observed, priors: Priors, table: ProfileTable, start: FloatArray, request: OpticsRequest
) -> ImageOptics:
    """Find blur, family and absorption from segments wide enough to show them.

    Parameters
    ----------
    observed, priors, start : strips, priors without a prior of contrast, and first unknowns of the chosen segments.
    table : any table over the range needed; `start` is meant under its optics.
    """
    case = _Case(observed, priors, table, request, *_pure_absorption(table.optics, start))
    case = replace(case, absorption_told=case.absorption_told and request.absorbing)
    first = [f for f in request.families if f != "absorber" or request.absorbing] or ["cylinder"]
    fits = {first[0]: _first(case, start, first[0])}
    known = replace(case, request=replace(request, start_px=(fits[first[0]].optics.s_px,)))
    fits |= {family: _first(known, start, family) for family in first[1:]}
    best = min(fits.values(), key=lambda fit: fit.cost())
    # radii that vary more than the priors allow would look like blur, or like a rounder profile
    stiffness, _ = weigh_stiffness(observed, priors, best.theta, best.normal)
    case = replace(case, priors=with_stiffness(priors, stiffness))
    fits = {
        family: _refine(case, fit.theta, fit.optics, table_like(table, fit.optics), ROUNDS)
        for family, fit in fits.items()
        if _advantage(case, best, fit) < HOPELESS
    }
    best = next(iter(fits.values()))
    for fit in fits.values():
        best = fit if _advantage(case, fit, best) > 0 else best
    gains = [_advantage(case, best, fit) for fit in fits.values() if fit is not best]
    told = min(gains, default=HOPELESS) > DECISIVE
    if "absorber" in request.families and "absorber" not in fits:
        fits["absorber"] = absorbing = _absorber(case, best)
        if _advantage(case, absorbing, best) > DECISIVE + np.log(observed.n_points):
            told, best = True, absorbing
    if len(request.families) == 1:
        best = fits[request.families[0]]
        return _conclude(case, best, [], told=True)
    if not told or _widest(best) < FAMILY_BLURS * best.optics.s_px:
        told, best = False, fits.get(first[-1], best)
    return _conclude(case, best, [fit for fit in fits.values() if fit is not best], told=told)


def _conclude(case: _Case, best: _Fit, rivals: list[_Fit], *, told: bool) -> ImageOptics:
    """State the best fit's doubt: its own, the scatter between segments, and that another family may be right."""
    shift, doubt = 0.0, 0.0
    for rival in rivals:
        chance = float(expit(-_advantage(case, best, rival)))
        if not told:
            chance = max(chance, 0.5)
        shift = max(shift, np.sqrt(chance) * abs(float(np.mean(rival.theta[:, LN_R] - best.theta[:, LN_R]))))
        doubt = max(doubt, chance * float(np.log(rival.optics.s_px / best.optics.s_px)) ** 2)
    best = _marginal(case, best)
    optics, keep = best.optics, in_focus(best.marginal)
    covariance = np.zeros((len(parameters_of(optics)),) * 2)
    n_free = len(case.free(optics))
    if n_free:
        known = np.diag(case.pull(optics)[1][-n_free:])
        information = best.marginal.information[keep][:, -n_free:, -n_free:]
        inverse = np.linalg.inv(information.sum(axis=0) + known)
        misfit = _misfit(inverse, information, best.marginal.gradient[keep][:, -n_free:])
        covariance[-n_free:, -n_free:] = misfit * inverse
    if case.request.blur_rel_se is None:
        covariance[0, 0] += MODEL_SE**2 + doubt
    else:
        covariance[0, 0] = case.request.blur_rel_se**2
    return ImageOptics(optics, covariance, told, shift, best.normal.cost, best.theta, best.marginal.answer, keep)


def with_doubt(best: ImageOptics, rival: ImageOptics, chance: float) -> ImageOptics:
    """Return the best of two answers with the chance that the other one is right in its doubt."""
    covariance = best.covariance.copy()
    covariance[0, 0] += chance * float(np.log(rival.optics.s_px / best.optics.s_px)) ** 2
    apart = np.sqrt(chance) * float(np.mean(rival.theta[:, LN_R] - best.theta[:, LN_R]))
    return replace(best, covariance=covariance, family_shift=float(np.hypot(best.family_shift, apart)))


def _misfit(inverse: FloatArray, information: FloatArray, gradient: FloatArray) -> float:
    """How many times wider than stated the first parameter scatters between segments; 1 where they agree.

    The sandwich estimate (White, Econometrica 1982;50:1, eq. 3.2) leans on the stated noise where segments are few.
    """
    own = information[:, 0, 0]
    n_segments = float(own.sum() ** 2 / max(np.sum(own**2), 1e-30))  # as if all told the same
    pulled = gradient @ inverse[:, 0]
    between = np.sum((pulled - pulled.mean()) ** 2) * len(pulled) / max(len(pulled) - 1, 1)
    ratio = float(between / inverse[0, 0])
    return max((MISFIT_PRIOR + n_segments * ratio) / (MISFIT_PRIOR + n_segments), 1.0)


def _pure_absorption(optics: Optics, theta: FloatArray) -> tuple[float, bool]:
    """Return ln of the absorption per px with which the wider half of the vessels would take the light they take.

    And whether that is a share of the light at all.
    """
    wide = theta[:, LN_R] >= np.median(theta[:, LN_R])
    ln_r = theta[wide, LN_R]
    taken = float(np.median(np.exp(theta[wide, LN_C] + ln_height(optics, ln_r))))
    tau = -np.log1p(-taken) if taken < DARKEST else 1.0
    return float(np.log(tau / 2.0) - np.median(ln_r)), taken < DARKEST


def _advantage(case: _Case, of: _Fit, over: _Fit) -> float:
    return advantage(of.normal.cost, over.normal.cost, case.observed.segment)


def advantage(of: FloatArray, over: FloatArray, segment: IntArray) -> float:
    """Difference of log likelihood by which one model explains the strips better than another.

    Strips that neither explains, though it explains most of their segment (a vessel beside that was not found, dust),
    do not vote: with one of them a wrong profile can gain more than with all others together. Nor does a segment of
    which neither explains many strips, as one traced across two vessels. All arguments are (n_points,).
    """
    least = np.minimum(of, over)
    seen = least > 0
    if not seen.any():
        return 0.0
    usual = np.nan_to_num(median_by(segment[seen], least[seen], int(segment.max()) + 1))
    odd = least[seen] > ODD_STRIP * np.median(usual[usual > 0])
    strange = mean_by(segment[seen], odd, np.ones(len(odd)), len(usual)) > STRANGE_SHARE
    votes = seen & ~strange[segment] & (least <= ODD_STRIP * usual[segment])
    return float(np.sum(over[votes] - of[votes]))


def _first(case: _Case, start: FloatArray, family: str) -> _Fit:
    """Try the blurs to start from, then take a few Newton steps from the best."""
    tried, blurs = [], case.request.start_px
    mu = float(np.exp(case.ln_absorption)) if family == "absorber" else 0.0
    if len(blurs) == 1:
        return _refine(case, start, Optics(family, mu, blurs[0]), case.table, FIRST_ROUNDS)
    for blur in blurs:
        here = table_like(case.table, Optics(family, mu, blur))
        theta, normal = fit_joint(case.observed, case.priors, here, _same_area(start, case.table, here), max_steps=3)
        tried.append((total_cost(case.observed, case.priors, theta, normal), blur, theta))
    _, blur, theta = min(tried, key=lambda one: one[0])
    optics = Optics(family, mu, blur)
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
        newton, gain = _newton_step(case, fit, wide)
        if gain < NOTHING_GAINED:
            break
        step = np.zeros(len(names))
        step[-n_free:] = shrink * newton
        here = table_like(case.table, _stepped(fit.optics, step, wide))
        begin = fit.theta + np.clip(fit.marginal.answer @ step, -0.7, 0.7)
        theta, normal = fit_joint(observed, priors, here, begin, max_steps=4)
        trial = _judge(case, here, theta, normal)
        keep = in_focus(fit.marginal)
        if trial.cost(keep) > fit.cost(keep) + 1e-3:
            shrink /= 4
            if shrink < SMALLEST_SHRINK:
                break
            continue
        fit, shrink = trial, min(4 * shrink, 1.0)
    return fit


def _marginal(case: _Case, fit: _Fit) -> _Fit:
    """Step from where optics and unknowns are most probable together to where the optics by themselves are.

    Sharper optics hold each point's unknowns more firmly, so that fewer of their values explain the picture; without
    that, the blur would come out too small by what the unknowns follow of the noise (Neyman and Scott, Econometrica
    1948;16:1). Laplace's approximation: minus half the ln of the determinant of the normal equations joins the
    posterior.
    """
    if case.request.blur_rel_se is not None:
        return fit
    wide = _widest(fit)
    widths = []
    for ln_step in (WIDTH_STEP, -WIDTH_STEP):
        table = table_like(case.table, shifted(fit.optics, "blur", ln_step))
        theta = fit.theta + ln_step * fit.marginal.answer[:, :, 0]
        widths.append(_ln_width(case, normal_equations(case.observed, table, theta)))
    keep = in_focus(fit.marginal)
    information = fit.marginal.information[keep].sum(axis=0) + np.diag(case.pull(fit.optics)[1])
    step = np.linalg.inv(information)[:, 0] * (widths[1] - widths[0]) / (2 * WIDTH_STEP)
    here = table_like(case.table, _stepped(fit.optics, _shortened(step), wide))
    begin = fit.theta + np.clip(fit.marginal.answer @ step, -0.7, 0.7)
    return _judge(case, here, *fit_joint(case.observed, case.priors, here, begin, max_steps=4))


def _ln_width(case: _Case, normal: Normal) -> float:
    """Half the ln of the determinant of the normal equations, with radius and contrast of each segment as they are.

    Only how these change along the segment may take other values. What they are on average has no prior of its own: a
    flat one would depend on whether radius or area is meant, and thin vessels would tell the blur by it.
    """
    observed = case.observed
    factored = factor(banded(normal.matrix), case.priors.full(observed.segment), case.priors.hold)
    share = 1.0 / np.diff(observed.offsets)[observed.segment]
    n_unknowns = normal.gradient.shape[1]
    kept = [LN_R, LN_C, *range(REFLEX, n_unknowns)]
    right = np.zeros((observed.n_points, n_unknowns, len(kept)))
    right[:, kept, np.arange(len(kept))] = share[:, None]
    answer = solve(factored, right)[:, kept] * share[:, None, None]
    means = np.add.reduceat(answer, observed.offsets[:-1], axis=0)
    return float(np.sum(np.log(factored[0])) + 0.5 * np.sum(np.linalg.slogdet(means)[1]))


def _judge(case: _Case, table: ProfileTable, theta: FloatArray, normal: Normal) -> _Fit:
    response = optics_response(case.observed, table, theta, parameters_of(table.optics))
    marginal = marginalise(case.observed, case.priors, theta, normal, response)
    costs = case.observed.by_segment(normal.cost + prior_pull(case.priors, theta, case.observed.segment)[1])
    gradient, precision = case.pull(table.optics)
    return _Fit(table.optics, theta, costs, 0.5 * float(np.sum(gradient**2 / precision)), normal, marginal)


def _newton_step(case: _Case, fit: _Fit, wide: float) -> tuple[FloatArray, float]:
    """Step of the free parameters, and what it should gain; absorption at its bound does not push further."""
    keep, n_free = in_focus(fit.marginal), len(case.free(fit.optics))
    gradient, precision = case.pull(fit.optics)
    information = fit.marginal.information[keep].sum(axis=0)[-n_free:, -n_free:] + np.diag(precision[-n_free:])
    gradient = (fit.marginal.gradient[keep].sum(axis=0) + gradient)[-n_free:]
    step = np.linalg.solve(information, gradient)
    absorbing = fit.optics.family == "absorber"
    if absorbing and _bounded(shifted(fit.optics, "absorption", float(step[-1])), wide) == fit.optics:
        step[-1] = 0.0
        step[:-1] = np.linalg.solve(information[:-1, :-1], gradient[:-1])
    return _shortened(step), 0.5 * float(step @ gradient)


def _stepped(optics: Optics, step: FloatArray, wide: float) -> Optics:
    for name, ln_step in zip(parameters_of(optics), step, strict=True):
        optics = _bounded(shifted(optics, name, float(ln_step)), wide)
    return optics


def _shortened(step: FloatArray) -> FloatArray:
    return np.asarray(step * min(LONGEST_STEP / max(float(np.abs(step).max()), 1e-12), 1.0))


def _widest(fit: _Fit) -> float:
    return float(np.exp(np.quantile(fit.theta[:, LN_R], 0.95)))


def _bounded(optics: Optics, wide: float) -> Optics:
    mu = optics.mu_per_px
    if optics.family == "absorber":
        mu = float(np.clip(mu, TAU_RANGE[0] / (2 * wide), TAU_RANGE[1] / (2 * wide)))
    # rounded, so that tables are found again
    return Optics(optics.family, float(f"{mu:.9g}"), float(f"{np.clip(optics.s_px, *S_RANGE_PX):.9g}"))
