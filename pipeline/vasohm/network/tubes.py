"""From strips across centrelines to radii with their doubt: the whole way, arrays only.

Method: a maximum-a-posteriori fit of the imaged tube to every strip, smooth along the segment, with the noise, the
blur, the profile and the contrast of thin vessels taken from the picture itself; uncertainty after JCGM 100:2008 (GUM),
random and shared parts apart.
"""

from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, Float32Array, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.network.contrast import (
    UNKNOWN_SPREAD,
    segment_contrasts,
)
from vasohm.network.correlated import noise_factor
from vasohm.network.jointfit import (
    LN_C,
    LN_R,
    OFFSET,
    Normal,
    Observed,
    Priors,
    fit_joint,
    solve,
    with_stiffness,
)
from vasohm.network.learn import (
    ASSUMED_PSF_PX,
    ASSUMED_REL_SE,
    FREE_SPREAD,
    RESOLVED_BLURS,
    ImageKnowledge,
    TubeSettings,
    expected_reflex,
    first_unknowns,
    learn_image,
    recall_image,
    segment_mean,
    wide_segments,
)
from vasohm.network.noise import noise_correlation
from vasohm.network.observe import Scene, observe
from vasohm.network.pilot import Guess, average_strips, bridge, guess_radii, segment_quantile
from vasohm.network.pooled import blocks_of, mean_of_block, pool, spaced, widest_of_block
from vasohm.network.posterior import (
    LOG10_STIFFNESS,
    BandedCovariance,
    StiffnessDoubt,
    point_variance,
    weigh_stiffness,
)
from vasohm.network.priors import Expected, make_priors
from vasohm.network.profiles import (
    Optics,
    ProfileTable,
    ln_area,
    ln_height,
    optical_blur_px,
    photometric_ln_radius,
    profile_table,
    total_blur_px,
)
from vasohm.network.shared import Marginal, blur_of_segments, marginalise, optics_response, parameters_of, table_like
from vasohm.network.strips import SplineOrder, TubeLines, make_frame, make_picture, offset_from, paint_owners, recentre

BLURRED_SIGNS = (5.0, 0.4)  # out of focus: own ln blur above the picture's by so many standard errors, and by so much
UNRESOLVED_SE = 0.25  # of ln r with the contrast free
FAINT_CNR = 3.0
USUAL_CNR = 8.0  # height of vessels over the noise, before any is measured
SHARP_PSF_PX = 0.85  # blur of the optics below which a quintic spline samples
SHARP_ORDER: SplineOrder = 5
OTHER_BLUR = 0.4  # of ln blur: first guesses whose strips were laid for so different a blur are made anew
NEIGHBOUR_BLURS = 3.5  # beyond its rim a vessel's light is no longer reckoned with


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
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Told:
    """What some part of a large picture tells of all of it."""

    known: ImageKnowledge
    covariance: FloatArray  # of pixels of noise by squared distance
    cnr: float
    classes: IntArray  # of vessels that there are in the whole picture


def fit_tubes(image: TubeImage, lines: TubeLines, settings: TubeSettings, told: Told | None = None) -> TubeFit:
    """Measure the radius at every point of every line.

    Parameters
    ----------
    image : signal proportional to what the vessel does to the light (dark vessels: 1 - I / background).
    lines : smoothed centrelines, points about 1 px apart, up to .3 px off the axis.
    settings : profile and blur where the study says them.
    told : what is known of the whole picture, where this is a part of it; None: this picture tells.

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
    scene, _, known, theta = _begin(image, lines, settings, told)
    reach = np.exp(theta[:, LN_R]) + NEIGHBOUR_BLURS * known.table.optics.s_px
    cnr = _typical_cnr(scene, theta, known.table.optics) if told is None else told.cnr
    noise = noise_factor(known.table, scene.covariance, cnr, float(np.median(known.contrast.spread)))
    scene = replace(scene, owners=paint_owners(scene.frame, reach, scene.shape), noise=noise)
    everything = np.arange(lines.n_segments)
    theta = _near(scene, everything, theta, known)
    scene = replace(scene, frame=recentre(scene.frame, theta[:, OFFSET], lines.offsets))
    theta[:, OFFSET] = 0.0
    observed, _ = observe(scene, everything, theta, known.table, alone=False)
    priors = _priors(observed, known, theta)
    theta, normal = fit_joint(observed, priors, known.table, theta, max_steps=3)
    stiffness, doubt = weigh_stiffness(observed, priors, theta, normal)
    priors = with_stiffness(priors, stiffness)
    theta, normal = fit_joint(observed, priors, known.table, theta, max_steps=12, begun=normal)
    return _report(scene, observed, known, (theta, priors, normal), doubt)


def learn_tubes(image: TubeImage, lines: TubeLines, settings: TubeSettings, classes: IntArray) -> Told:
    """Ask some part of a large picture, with at least one line, what all of it shares; as `fit_tubes`."""
    scene, learnt, known, theta = _begin(image, lines, settings, None)
    return Told(learnt, scene.covariance, _typical_cnr(scene, theta, known.table.optics), classes)


def _begin(
    image: TubeImage, lines: TubeLines, settings: TubeSettings, told: Told | None
) -> tuple[Scene, ImageKnowledge, ImageKnowledge, FloatArray]:
    """Return the scene, what the picture tells, the same as meant for the scene's sampling, and first unknowns."""
    scene, table = _open(image, lines, settings, told)
    windows = average_strips(scene.picture, scene.frame, lines, table, scene.owners)
    guess = guess_radii(windows, scene.frame, lines, table)
    if told is None:
        learnt = learn_image(scene, guess, table, settings)
    else:
        learnt = recall_image(told.known, lines, guess, table, told.classes)
    scene, known = _sharp(image, scene, learnt)
    if abs(np.log(known.table.optics.s_px / table.optics.s_px)) > OTHER_BLUR:
        windows = average_strips(scene.picture, scene.frame, lines, known.table, scene.owners)
    return scene, learnt, known, _start(scene, guess_radii(windows, scene.frame, lines, known.table), known)


# --- what the picture tells -----------------------------------------------------------------------------------------


def _open(image: TubeImage, lines: TubeLines, settings: TubeSettings, told: Told | None) -> tuple[Scene, ProfileTable]:
    """Prepare picture and noise, and a table for first guesses that serves all radii to come."""
    frame = make_frame(lines.x_px, lines.y_px, lines.offsets)
    family = "cylinder" if settings.profile == "auto" else settings.profile
    blur = total_blur_px(ASSUMED_PSF_PX if settings.blur_px is None else settings.blur_px)
    widest = 2.6 * float(segment_quantile(lines.seed_radius_px, lines.offsets, 0.8).max()) + 2.0
    half = int(1.2 * (widest + 3 * max(blur, 3.0) + 3)) + 6
    mu = 1.0 / widest if family == "absorber" else 0.0
    table = profile_table(Optics(family, mu, blur), widest, half)
    shape = (image.signal.shape[0], image.signal.shape[1])
    picture = make_picture(image.signal, image.noise_sd, image.valid, image.clipped)
    owners = paint_owners(frame, 1.5 * lines.seed_radius_px + 3 * blur, shape)
    if told is None:
        free = (owners[0].reshape(shape) < 0) & (picture.precision > 0)
        covariance = noise_correlation(image.signal, image.noise_sd, free)
    else:
        covariance = told.covariance
    noise = noise_factor(table, covariance, USUAL_CNR * float(np.sqrt(covariance[0])), FREE_SPREAD)
    return Scene(picture, lines, frame, owners, covariance, noise), table


def _sharp(image: TubeImage, scene: Scene, known: ImageKnowledge) -> tuple[Scene, ImageKnowledge]:
    """Sample a sharp picture by a spline that blurs less: a cubic one widens thin vessels by 0 to 4 %, by direction."""
    old = known.table.optics
    psf = optical_blur_px(old.s_px)
    if psf > SHARP_PSF_PX:
        return scene, known
    picture = make_picture(image.signal, image.noise_sd, image.valid, image.clipped, SHARP_ORDER)
    optics = replace(old, s_px=total_blur_px(psf, SHARP_ORDER))
    return replace(scene, picture=picture), replace(known, table=table_like(known.table, optics))


# --- the fit of all segments ----------------------------------------------------------------------------------------


def _start(scene: Scene, guess: Guess, known: ImageKnowledge) -> FloatArray:
    """First unknowns; the radius of a thin vessel is the one whose light its contrast explains.

    Where no vessel tells the contrast, a thin one starts from the radius of its outline: a guess of its own would be
    anywhere along the line on which radius and contrast give the same picture.
    """
    theta = first_unknowns(guess)
    optics, prior, segment = known.table.optics, known.contrast, scene.frame.segment
    thin = guess.ln_r < np.log(RESOLVED_BLURS * optics.s_px)
    told = prior.group[segment] >= 0
    outlined = np.log(segment_quantile(scene.lines.seed_radius_px, scene.lines.offsets, 0.5))[segment]
    light, mean = guess.ln_photometric, prior.mean[segment]
    radius = np.where(told, photometric_ln_radius(optics, light - mean), outlined)
    contrast = np.where(told, mean, light - ln_area(optics, outlined)[0])
    theta[thin, LN_R], theta[thin, LN_C] = radius[thin], contrast[thin]
    if known.reflex:
        theta = np.column_stack([theta, np.full(len(theta), known.reflex[0])])
    return theta


def _typical_cnr(scene: Scene, theta: FloatArray, optics: Optics) -> float:
    height, width = scene.shape
    row = np.clip(np.rint(scene.frame.y).astype(np.int64), 0, height - 1)
    column = np.clip(np.rint(scene.frame.x).astype(np.int64), 0, width - 1)
    cnr = np.exp(theta[:, LN_C] + ln_height(optics, theta[:, LN_R])) * np.sqrt(scene.picture.precision[row, column])
    return float(np.clip(np.median(cnr), 1.0, 1e3))


def _priors(observed: Observed, known: ImageKnowledge, theta: FloatArray) -> Priors:
    reflex, sd = expected_reflex(wide_segments(observed, theta, known.table.optics), known.reflex)
    own = segment_mean(observed, theta[:, LN_C])
    contrast = np.where(known.contrast.group >= 0, known.contrast.mean, own)
    expected = Expected(contrast, known.contrast.spread, reflex, sd)
    return make_priors(observed, known.table, theta, expected)


def _near(scene: Scene, everything: IntArray, theta: FloatArray, known: ImageKnowledge) -> FloatArray:
    """Lead first unknowns near the most probable ones by strips averaged along the vessels, which cost a quarter."""
    lines, table = scene.lines, known.table
    first, offsets = blocks_of(lines.offsets)
    even = theta.copy()
    even[:, LN_R] = widest_of_block(theta[:, LN_R], first)
    observed, _ = observe(scene, everything, even, table, alone=True)
    begun = bridge(theta, observed.row_scale > 0, observed.segment)
    pooled, start = pool(observed, first, offsets, scene.covariance), mean_of_block(begun, first)
    priors = spaced(_priors(pooled, known, start))
    found, _ = fit_joint(pooled, priors, table, start, max_steps=4)
    rows = np.diff(first, append=lines.n_points)
    return begun + np.repeat(found - start, rows, axis=0)


# --- what is known afterwards ---------------------------------------------------------------------------------------


def _report(
    scene: Scene,
    observed: Observed,
    known: ImageKnowledge,
    fit: tuple[FloatArray, Priors, Normal],
    doubt: StiffnessDoubt,
) -> TubeFit:
    theta, priors, normal = fit
    optics, lines = known.table.optics, scene.lines
    response = optics_response(observed, known.table, theta, parameters_of(optics))
    marginal = marginalise(observed, priors, theta, normal, response)
    covariance = BandedCovariance(marginal.factored, observed.segment, observed.n_segments, theta.shape[1], doubt)
    shared, causes = _shared_columns(observed, known, priors, marginal)
    psf = optical_blur_px(optics.s_px, scene.picture.order)
    blur_se = float(np.sqrt(known.covariance[0, 0])) * optics.s_px**2 / max(psf, 0.3)
    return TubeFit(
        theta[:, LN_R].copy(),
        np.sqrt(point_variance(observed, priors, normal) + doubt.point_variance(observed.segment)),
        np.exp(theta[:, LN_C] + ln_height(optics, theta[:, LN_R])),
        offset_from(make_frame(lines.x_px, lines.y_px, lines.offsets), scene.frame, theta[:, OFFSET]),
        _point_flags(scene, observed, theta, optics) | _segment_flags(observed, fit, marginal)[observed.segment],
        covariance,
        shared,
        causes,
        psf,
        blur_se,
        optics.family,
        optics.mu_per_px,
        known.flags,
    )


def _shared_columns(
    observed: Observed, known: ImageKnowledge, priors: Priors, marginal: Marginal
) -> tuple[FloatArray, tuple[str, ...]]:
    """Change of ln r for one standard uncertainty of each independent cause."""
    prior, segment = known.contrast, observed.segment
    to_optics = marginal.answer[:, LN_R]
    columns, causes = [], []
    group = prior.group[segment]
    for number, mean_se in enumerate(prior.mean_se):
        right = np.zeros(priors.hold.shape)
        right[:, LN_C] = np.where(group == number, priors.hold[:, LN_C], 0.0)
        to_mean = solve(marginal.factored, right)[:, LN_R]
        to_optics = to_optics + to_mean[:, None] * prior.answer[number]
        columns.append(to_mean * mean_se)
        causes.append("contrast" if len(prior.mean_se) == 1 else f"contrast {number + 1}")
    principal = np.linalg.cholesky(known.covariance + 1e-12 * np.eye(len(known.covariance)))
    columns[:0] = list((to_optics @ principal).T)
    causes[:0] = ["blur", "absorption"][: len(principal)]
    if known.profile_se > 0:
        columns.append(np.full(observed.n_points, known.profile_se))
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


def _segment_flags(observed: Observed, fit: tuple[FloatArray, Priors, Normal], marginal: Marginal) -> IntArray:
    """Unresolved: the radius is known to worse than 25 % once the contrast is free. Blurred: out of focus."""
    theta, priors, normal = fit
    hold = priors.hold.copy()
    hold[:, LN_C] = 1.0 / (UNKNOWN_SPREAD**2 * np.maximum(np.diff(observed.offsets), 1)[observed.segment])
    _, _, variance = segment_contrasts(observed, replace(priors, hold=hold), theta, normal)
    shift, se = blur_of_segments(marginal)
    blurred = (shift > BLURRED_SIGNS[0] * se) & (shift > BLURRED_SIGNS[1])
    unresolved = variance > UNRESOLVED_SE**2
    return np.where(unresolved, int(Flag.UNRESOLVED), 0) | np.where(blurred, int(Flag.BLURRED), 0)


def _no_tubes(settings: TubeSettings) -> TubeFit:
    none = np.zeros(0)
    whole = np.zeros(0, np.int64)
    doubt = StiffnessDoubt(np.zeros((0, len(LOG10_STIFFNESS))), np.zeros((0, len(LOG10_STIFFNESS))))
    covariance = BandedCovariance(np.zeros((11, 0)), whole, 0, 5, doubt)
    blur = ASSUMED_PSF_PX if settings.blur_px is None else settings.blur_px
    family = "cylinder" if settings.profile == "auto" else settings.profile
    flags = Flag.NONE if settings.blur_px is not None else Flag.BLUR_ASSUMED
    return TubeFit(
        none,
        none.copy(),
        none.copy(),
        none.copy(),
        whole.copy(),
        covariance,
        np.zeros((0, 1)),
        ("blur",),
        blur,
        ASSUMED_REL_SE * blur,
        family,
        float("nan"),
        flags,
    )
