"""From strips across centrelines to radii with their doubt: the whole way, arrays only.

Method: a maximum-a-posteriori fit of the imaged tube to every strip, smooth along the segment, with the noise, the
blur, the profile and the contrast of thin vessels taken from the picture itself; uncertainty after JCGM 100:2008 (GUM),
random and shared parts apart.
"""

from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.blur import ImageOptics, OpticsRequest, blur_of_segments, choose_segments, estimate_optics
from vasohm.network.contrast import (
    RESOLVED_SE,
    UNKNOWN_SPREAD,
    ContrastPrior,
    KnownContrasts,
    learn_contrast,
    segment_contrasts,
)
from vasohm.network.jointfit import (
    LEVEL,
    LN_C,
    LN_R,
    OFFSET,
    REFLEX,
    Normal,
    Observed,
    Priors,
    factor,
    fit_joint,
    normal_equations,
    solve,
    with_stiffness,
)
from vasohm.network.noise import noise_correlation, noise_factor
from vasohm.network.observe import Scene, hold_reflex, make_priors, observe, widest_window
from vasohm.network.pilot import Guess, guess_radii, segment_quantile
from vasohm.network.posterior import BandedCovariance, choose_stiffness, evidence, point_variance
from vasohm.network.profiles import (
    FAMILIES,
    Optics,
    ProfileTable,
    ln_height,
    optical_blur_px,
    photometric_ln_radius,
    profile_table,
    total_blur_px,
)
from vasohm.network.shared import Marginal, Response, marginalise, optics_response, parameters_of, table_like
from vasohm.network.strips import TubeLines, claim_pixels, make_frame, make_picture

ASSUMED_PSF_PX, ASSUMED_REL_SE = 0.9, 0.25  # where the picture cannot tell: sampled as most microscopes and cameras are
TYPED_REL_SE = 0.05  # a typed blur comes without uncertainty
ASSUMED_ABSORPTION_SE = 0.7  # of ln mu, a factor of two
RESOLVED_BLURS, RESOLVED_PX = 1.5, 1.8  # medians of radius from which a segment shows blur and contrast
FAMILY_BLURS = 2.5  # some vessel must be so wide before slab and cylinder can be told apart
MOST_POINTS = 4000  # of resolved segments that are asked for blur, profile and contrast
FEWEST_SEGMENTS = 3
WORST_BLUR_SE = 0.25  # of ln blur: beyond, the assumed one is better
FREE_SPREAD = 10.0  # sd of ln contrast that says nothing, whatever the family's units
PROFILE_SE = 0.08  # of ln r: half of what slab and cylinder differ by
REFLEX_BLURS = 3.0  # narrower vessels cannot show a reflex apart from their rims
REFLEX_SIGNS = (4.0, 0.05)  # a reflex counts from so many standard errors, and from so high
BLURRED_SIGNS = (5.0, 0.4)  # out of focus: own ln blur above the picture's by so many standard errors, and by so much
UNRESOLVED_SE = 0.25  # of ln r with the contrast free
FAINT_CNR = 3.0


@dataclass(frozen=True, slots=True)
class TubeSettings:
    """How tubes are imaged, as far as the study says; `dark`: a light reflex may lie on the axis."""

    profile: str  # auto | slab | cylinder | absorber
    blur_px: float | None  # of the optics alone; None: the image tells
    dark: bool


@dataclass(frozen=True, slots=True, eq=False)
class TubeImage:
    """What is measured, (h, w): vessels positive on a background near 0, and the sd of a pixel's noise."""

    signal: Float32Array
    noise_sd: Float32Array
    valid: BoolArray
    clipped: BoolArray


@dataclass(frozen=True, slots=True, eq=False)
class TubeFit:
    """Radii of all points in pixels, and what is doubtful about them.

    `shared` (n_points, n_causes) holds the change of ln r for one standard uncertainty of each independent cause that
    all segments have in common. `contrast` is the unblurred height on the axis in units of the signal.
    """

    ln_radius: FloatArray  # (n_points,)
    ln_radius_random_se: FloatArray
    contrast: FloatArray
    offset_px: FloatArray  # of the axis from the given centreline, along (-dy, dx)
    point_flags: IntArray
    covariance: BandedCovariance
    shared: FloatArray
    shared_causes: tuple[str, ...]
    blur_px: float  # of the optics alone, without pixel and sampling
    blur_se_px: float
    profile: str
    mu_per_px: float
    noise_factor: float  # variance of radii over that under independent noise of the stated size
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class _ImageKnowledge:
    table: ProfileTable
    covariance: FloatArray  # of ln blur, ln absorption
    contrast: ContrastPrior
    flags: Flag


def fit_tubes(image: TubeImage, lines: TubeLines, settings: TubeSettings) -> TubeFit:
    """Measure the radius at every point of every line.

    Parameters
    ----------
    image : signal proportional to what the vessel does to the light (dark vessels: 1 - I / background).
    lines : smoothed centrelines, points about 1 px apart, up to .3 px off the axis.
    settings : profile and blur where the study says them.

    Returns
    -------
    Radii with random and shared uncertainty. Points without usable strips are bridged by the smoothness of ln r and
    flagged `INFERRED`; segments whose radius hangs on the prior of contrast alone are flagged `UNRESOLVED`.

    Notes
    -----
    Straight strips: bends of less than five blurs radius bias the radius by more than 2 %. One blur for the picture.
    """
    if lines.n_points == 0:
        return _no_tubes(settings)
    scene, table = _open(image, lines, settings)
    guess = _guess(scene, table)
    known = _learn_image(scene, guess, table, settings)
    theta = _start(scene, _guess(scene, known.table), known)
    everything = np.arange(lines.n_segments)
    observed, _ = observe(scene, everything, theta, known.table, alone=False)
    priors = _priors(observed, known, theta)
    theta, normal = fit_joint(observed, priors, known.table, theta, max_steps=8)
    observed, _ = observe(scene, everything, theta, known.table, alone=False)
    theta, priors = _add_reflex(observed, known, theta, settings)
    normal = normal_equations(observed, known.table, theta)
    stiffness = choose_stiffness(evidence(observed, priors, theta, normal))
    priors = with_stiffness(priors, stiffness)
    theta, normal = fit_joint(observed, priors, known.table, theta, max_steps=8)
    return _report(scene, observed, known, (theta, priors, normal))


# --- what the picture tells -----------------------------------------------------------------------------------------


def _open(image: TubeImage, lines: TubeLines, settings: TubeSettings) -> tuple[Scene, ProfileTable]:
    """Prepare picture and noise, and a table for first guesses that serves all radii to come."""
    frame = make_frame(lines)
    family = "cylinder" if settings.profile == "auto" else settings.profile
    blur = total_blur_px(ASSUMED_PSF_PX if settings.blur_px is None else settings.blur_px)
    widest = 2.6 * float(segment_quantile(lines.seed_radius_px, lines.offsets, 0.8).max()) + 2.0
    half = int(1.2 * (widest + 3 * max(blur, 3.0) + 3)) + 6
    mu = 1.0 / widest if family == "absorber" else 0.0
    table = profile_table(Optics(family, mu, blur), widest, half)
    shape = (image.signal.shape[0], image.signal.shape[1])
    picture = make_picture(image.signal, image.noise_sd, image.valid, image.clipped)
    lowest, _ = claim_pixels(frame, 1.5 * lines.seed_radius_px + 3 * blur, shape)
    free = (lowest.reshape(shape) < 0) & (picture.precision > 0)
    return Scene(picture, lines, frame, noise_correlation(image.signal, image.noise_sd, free)), table


def _guess(scene: Scene, table: ProfileTable) -> Guess:
    reach = scene.lines.seed_radius_px + table.optics.s_px
    foreign = claim_pixels(scene.frame, reach, scene.shape)
    return guess_radii(scene.picture, scene.frame, scene.lines, table, foreign)


def _theta(guess: Guess) -> FloatArray:
    zero = np.zeros(len(guess.ln_r))
    return np.stack([guess.ln_r, guess.ln_contrast, guess.offset_px, guess.level, zero], axis=1)


def _learn_image(scene: Scene, guess: Guess, table: ProfileTable, settings: TubeSettings) -> _ImageKnowledge:
    """Ask the resolved segments for blur, profile and contrast."""
    lines = scene.lines
    blur = table.optics.s_px
    radius = np.exp(segment_quantile(guess.ln_r, lines.offsets, 0.5))
    seen = segment_quantile(guess.detected, lines.offsets, 0.5) > 10.0
    resolved = seen & (radius > max(RESOLVED_PX, RESOLVED_BLURS * blur)) & (np.diff(lines.offsets) >= 12)
    segments = choose_segments(radius, np.diff(lines.offsets), resolved, MOST_POINTS)
    if len(segments) < FEWEST_SEGMENTS:
        return _nothing_learnt(lines, guess, table, settings)
    observed, points = observe(scene, segments, _theta(guess), table, alone=True)
    theta = _theta(guess)[points]
    unknown = np.full(len(segments), FREE_SPREAD)
    centre = observed.by_segment(theta[:, LN_C]) / np.diff(observed.offsets)
    priors = make_priors(observed, table, theta, centre, unknown)
    told, flags = _tell_optics(observed, priors, table, theta, settings)
    table = table_like(table, told.optics)
    normal = normal_equations(observed, table, told.theta)
    contrast, variance, variance_ln_r = segment_contrasts(observed, priors, told.theta, normal)
    share = 1.0 / np.diff(observed.offsets)
    answer = np.stack([observed.by_segment(column) * share for column in told.answer[:, LN_C].T], axis=1)
    known = KnownContrasts(lines.vessel_class[segments], contrast, variance, answer)
    known = known.select(told.in_focus & (variance_ln_r < RESOLVED_SE**2))
    prior = learn_contrast(known, lines.vessel_class, _mean_contrast(lines, guess))
    return _ImageKnowledge(table, told.covariance, prior, flags)


def _tell_optics(
    observed: Observed, priors: Priors, table: ProfileTable, theta: FloatArray, settings: TubeSettings
) -> tuple[ImageOptics, Flag]:
    """Estimate the optics; where the picture does not tell blur or family, assume them and say so."""
    families = FAMILIES if settings.profile == "auto" else (settings.profile,)
    flags = Flag.NONE
    request = OpticsRequest(families, None, 0.0)
    if settings.blur_px is not None:
        request = OpticsRequest(families, total_blur_px(settings.blur_px), TYPED_REL_SE)
        flags |= Flag.ASSUMED_BLUR_SPREAD
    told = estimate_optics(observed, priors, table, theta, request)
    if settings.blur_px is None and told.covariance[0, 0] > WORST_BLUR_SE**2:
        request = OpticsRequest(families, total_blur_px(ASSUMED_PSF_PX), ASSUMED_REL_SE)
        flags |= Flag.BLUR_ASSUMED | Flag.ASSUMED_BLUR_SPREAD
        told = estimate_optics(observed, priors, table, theta, request)
    widest = np.exp(np.quantile(told.theta[:, LN_R], 0.95))
    if len(families) > 1 and not (told.family_told and widest > FAMILY_BLURS * told.optics.s_px):
        flags |= Flag.PROFILE_ASSUMED
        told = estimate_optics(observed, priors, table, theta, replace(request, families=("cylinder",)))
    return told, flags


def _nothing_learnt(
    lines: TubeLines, guess: Guess, table: ProfileTable, settings: TubeSettings
) -> _ImageKnowledge:
    """Too few vessels show anything: what the study says, else what is common."""
    optics, flags = table.optics, Flag.ASSUMED_BLUR_SPREAD
    blur_se = TYPED_REL_SE
    if settings.blur_px is None:
        flags |= Flag.BLUR_ASSUMED
        blur_se = ASSUMED_REL_SE
    if settings.profile == "auto":
        flags |= Flag.PROFILE_ASSUMED
    variances = [blur_se**2, ASSUMED_ABSORPTION_SE**2][: len(parameters_of(optics))]
    nobody = KnownContrasts(np.zeros(0, np.int64), np.zeros(0), np.zeros(0), np.zeros((0, len(variances))))
    prior = learn_contrast(nobody, lines.vessel_class, _mean_contrast(lines, guess))
    return _ImageKnowledge(table, np.diag(variances), prior, flags)


def _mean_contrast(lines: TubeLines, guess: Guess) -> FloatArray:
    return segment_quantile(guess.ln_contrast, lines.offsets, 0.5)


# --- the fit of all segments ----------------------------------------------------------------------------------------


def _start(scene: Scene, guess: Guess, known: _ImageKnowledge) -> FloatArray:
    """First unknowns; the radius of a thin vessel is the one whose light its contrast explains."""
    theta = _theta(guess)
    prior, segment = known.contrast, scene.frame.segment
    thin = (guess.ln_r < np.log(RESOLVED_BLURS * known.table.optics.s_px)) & (prior.group[segment] >= 0)
    mean = prior.mean[segment[thin]]
    theta[thin, LN_R] = photometric_ln_radius(known.table.optics, guess.ln_photometric[thin] - mean)
    theta[thin, LN_C] = mean
    return theta


def _priors(observed: Observed, known: _ImageKnowledge, theta: FloatArray) -> Priors:
    return make_priors(observed, known.table, theta, known.contrast.mean, known.contrast.spread)


def _add_reflex(
    observed: Observed, known: _ImageKnowledge, theta: FloatArray, settings: TubeSettings
) -> tuple[FloatArray, Priors]:
    """Add the height of a light reflex to the unknowns where wide dark vessels clearly show one."""
    priors = _priors(observed, known, theta)
    radius = np.exp(observed.by_segment(theta[:, LN_R]) / np.diff(observed.offsets))
    wide = radius > REFLEX_BLURS * known.table.optics.s_px
    if not (settings.dark and wide.any()):
        return theta, priors
    more = np.column_stack([theta, np.zeros(len(theta))])
    normal = normal_equations(observed, known.table, more, wide[observed.segment])
    matrix, gradient = normal.matrix, normal.gradient
    response = Response(gradient[:, REFLEX:], matrix[:, REFLEX:, REFLEX:], matrix[:, :REFLEX, REFLEX:])
    plain = Normal(matrix[:, :REFLEX, :REFLEX], gradient[:, :REFLEX], normal.cost)
    marginal = marginalise(observed, priors, theta, plain, response)
    information = np.maximum(marginal.information[:, 0, 0], 1e-9)
    high = marginal.gradient[:, 0] / information
    shown = wide & (high > REFLEX_SIGNS[1]) & (high * np.sqrt(information) > REFLEX_SIGNS[0])
    if not shown.any():
        return theta, priors
    more[:, REFLEX] = np.where(shown, np.clip(high, 0.0, 0.6), 0.0)[observed.segment]
    priors = _priors(observed, known, more)
    hold_reflex(priors, observed.segment, shown)
    return more, priors


# --- what is known afterwards ---------------------------------------------------------------------------------------


def _report(
    scene: Scene, observed: Observed, known: _ImageKnowledge, fit: tuple[FloatArray, Priors, Normal]
) -> TubeFit:
    theta, priors, normal = fit
    optics = known.table.optics
    factored = factor(normal.matrix, priors.full(observed.segment), priors.hold)
    covariance = BandedCovariance(factored, observed.segment, observed.n_segments, theta.shape[1])
    names = parameters_of(optics)
    response = optics_response(observed, known.table, theta, names)
    marginal = marginalise(observed, priors, theta, normal, response)
    shared, causes = _shared_columns(observed, known, factored, priors, marginal)
    psf = optical_blur_px(optics.s_px)
    blur_se = float(np.sqrt(known.covariance[0, 0])) * optics.s_px**2 / max(psf, 0.3)
    factors = noise_factor(known.table, scene.covariance, theta[:, LN_R])
    return TubeFit(
        theta[:, LN_R].copy(),
        np.sqrt(point_variance(observed, priors, normal)),
        np.exp(theta[:, LN_C] + ln_height(optics, theta[:, LN_R])),
        theta[:, OFFSET].copy(),
        _point_flags(scene, observed, theta, optics) | _segment_flags(observed, fit, marginal)[observed.segment],
        covariance,
        shared,
        causes,
        psf,
        blur_se,
        optics.family,
        optics.mu_per_px,
        float(np.median(factors)),
        known.flags,
    )


def _shared_columns(
    observed: Observed, known: _ImageKnowledge, factored: FloatArray, priors: Priors, marginal: Marginal
) -> tuple[FloatArray, tuple[str, ...]]:
    """Change of ln r for one standard uncertainty of each independent cause."""
    prior, segment = known.contrast, observed.segment
    to_optics = marginal.answer[:, LN_R]
    columns, causes = [], []
    group = prior.group[segment]
    for number, mean_se in enumerate(prior.mean_se):
        right = np.zeros(priors.hold.shape)
        right[:, LN_C] = np.where(group == number, priors.hold[:, LN_C], 0.0)
        to_mean = solve(factored, right)[:, LN_R]
        to_optics = to_optics + to_mean[:, None] * prior.answer[number]
        columns.append(to_mean * mean_se)
        causes.append("contrast" if len(prior.mean_se) == 1 else f"contrast {number + 1}")
    principal = np.linalg.cholesky(known.covariance + 1e-12 * np.eye(len(known.covariance)))
    columns[:0] = list((to_optics @ principal).T)
    causes[:0] = ["blur", "absorption"][: len(principal)]
    if known.flags & Flag.PROFILE_ASSUMED:
        columns.append(np.full(observed.n_points, PROFILE_SE))
        causes.append("profile")
    return np.stack(columns, axis=1), tuple(causes)


def _point_flags(scene: Scene, observed: Observed, theta: FloatArray, optics: Optics) -> IntArray:
    flags = np.where(observed.row_scale > 0, 0, int(Flag.INFERRED))
    frame, clipped = scene.frame, scene.picture.clipped
    height, width = clipped.shape
    radius = np.exp(theta[:, LN_R])
    for part in (-1.0, -0.5, 0.0, 0.5, 1.0):
        reach = theta[:, OFFSET] + part * radius
        row = np.clip(np.rint(frame.y + reach * frame.normal_y).astype(np.int64), 0, height - 1)
        column = np.clip(np.rint(frame.x + reach * frame.normal_x).astype(np.int64), 0, width - 1)
        flags |= np.where(clipped[row, column], int(Flag.CLIPPED), 0)
        if part == 0.0:
            high = np.exp(theta[:, LN_C] + ln_height(optics, theta[:, LN_R]))
            faint = high * np.sqrt(scene.picture.precision[row, column]) < FAINT_CNR
            flags |= np.where(faint & (observed.row_scale > 0), int(Flag.FAINT), 0)
    return flags.astype(np.int64)


def _segment_flags(
    observed: Observed, fit: tuple[FloatArray, Priors, Normal], marginal: Marginal
) -> IntArray:
    """Unresolved: the radius is known to worse than 25 % once the contrast is free. Blurred: out of focus."""
    theta, priors, normal = fit
    hold = priors.hold.copy()
    hold[:, LN_C] = 1.0 / (UNKNOWN_SPREAD**2 * np.maximum(np.diff(observed.offsets), 1)[observed.segment])
    _, _, variance = segment_contrasts(observed, replace(priors, hold=hold), theta, normal)
    shift, se = blur_of_segments(marginal)
    blurred = (shift > BLURRED_SIGNS[0] * se) & (shift > BLURRED_SIGNS[1])
    flags: IntArray = np.where(variance > UNRESOLVED_SE**2, int(Flag.UNRESOLVED), 0)
    flags = flags | np.where(blurred, int(Flag.BLURRED), 0)
    return flags


def _no_tubes(settings: TubeSettings) -> TubeFit:
    none = np.zeros(0)
    whole = np.zeros(0, np.int64)
    covariance = BandedCovariance(np.zeros((11, 0)), whole, 0, 5)
    blur = ASSUMED_PSF_PX if settings.blur_px is None else settings.blur_px
    family = "cylinder" if settings.profile == "auto" else settings.profile
    flags = Flag.NONE if settings.blur_px is not None else Flag.BLUR_ASSUMED
    return TubeFit(
        none, none.copy(), none.copy(), none.copy(), whole.copy(), covariance, np.zeros((0, 1)), ("blur",),
        blur, ASSUMED_REL_SE * blur, family, float("nan"), 1.0, flags,
    )
