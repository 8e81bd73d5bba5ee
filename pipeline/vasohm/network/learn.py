"""What the picture tells of its optics, contrast and light reflexes, from the vessels wide enough to show them."""

from dataclasses import dataclass, replace

import numpy as np
from scipy.special import expit

from vasohm.arrays import BoolArray, FloatArray, IntArray
from vasohm.flags import Flag
from vasohm.network.blur import START_PX, ImageOptics, OpticsRequest, advantage, estimate_optics, with_doubt
from vasohm.network.contrast import (
    RESOLVED_SE,
    ContrastPrior,
    KnownContrasts,
    learn_contrast,
    segment_contrasts,
)
from vasohm.network.jointfit import (
    LN_C,
    LN_R,
    REFLEX,
    Observed,
    normal_equations,
)
from vasohm.network.observe import Scene, observe, points_of
from vasohm.network.paths import twice
from vasohm.network.pilot import Guess, bridge, segment_quantile
from vasohm.network.pooled import ROWS, blocks_of, choose_segments, mean_of_block, pool, spaced, widest_of_block
from vasohm.network.priors import Expected, make_priors
from vasohm.network.profiles import (
    Optics,
    ProfileTable,
    profile_table,
    total_blur_px,
)
from vasohm.network.shared import parameters_of, table_like
from vasohm.network.strips import TubeLines, make_frame

ASSUMED_PSF_PX, ASSUMED_REL_SE = 0.9, 0.25  # where the picture cannot tell: sampled as most microscopes and cameras are
TYPED_REL_SE = 0.05  # a typed blur comes without uncertainty
CALM_PX = 6.0  # of smoothing lines: strips aligned to the noise under them would look sharper than the vessel is
ASSUMED_ABSORPTION_SE = 0.7  # of ln mu, a factor of two
RESOLVED_BLURS, RESOLVED_PX = 1.5, 1.8  # medians of radius from which a segment shows blur and contrast
MOST_POINTS = 4000  # of resolved segments that are asked for blur, profile and contrast
WORST_BLUR_SE = 0.25  # of ln blur: beyond, the assumed one is better
FREE_SPREAD = 300.0  # sd of ln contrast that says nothing, whatever the family's units
PROFILE_SE = 0.08  # of ln r: half of what slab and cylinder differ by
FORM_SE = 0.004  # of ln r: light is lost by scattering too, so no absorption fits exactly (.3 to .7 % on phantoms)
REFLEX_BLURS = 3.0  # narrower vessels cannot show a reflex apart from their rims
LOWEST_REFLEX = 0.05  # median of wide segments from which it is one
REFLEX_SPREAD, SMALLEST_REFLEX_SPREAD = 0.5, 0.03  # sd: of a vessel that tells itself, and of those that do not
NO_REFLEX = 1e-3
SHARPER = 0.85  # a slab that stands for round vessels with reflexes is so much more blurred
FIRST_REFLEX = 0.1  # height from which a reflex is searched
# of log likelihood, and of it a px, from which reflexes are believed; noise gives .02 to .05
REFLEX_GAIN = (10.0, 0.08)
REFLEX_DOUBT = 0.25  # share of that gain over which the odds of a reflex change by a factor of e
ALIKE = 5.0  # standard errors: where wide vessels agree so well on a reflex, the first of the two is enough


@dataclass(frozen=True, slots=True)
class TubeSettings:
    """How tubes are imaged, as far as the study says; `dark`: a light reflex may lie on the axis."""

    profile: str  # auto | slab | cylinder | absorber
    blur_px: float | None  # of the optics alone; None: the image tells
    dark: bool


@dataclass(frozen=True, slots=True, eq=False)
class ImageKnowledge:
    """What all segments share: optics, prior of contrast, whether wide vessels show a light reflex."""

    table: ProfileTable
    covariance: FloatArray  # of ln blur, ln absorption
    contrast: ContrastPrior
    contrasts: KnownContrasts  # what that prior is made of
    reflex: tuple[float, float] | None  # mean height in all vessels, and its spread; None where there is none
    profile_se: float  # of ln r: that another family may be right
    flags: Flag


def first_unknowns(guess: Guess) -> FloatArray:
    """Unknowns (n_points, B) as guessed; no slope of the background, no reflex."""
    zero = np.zeros(len(guess.ln_r))
    return np.stack([guess.ln_r, guess.ln_contrast, guess.offset_px, guess.level, zero], axis=1)


def learn_image(scene: Scene, guess: Guess, table: ProfileTable, settings: TubeSettings) -> ImageKnowledge:
    """Ask the resolved segments for blur, profile and contrast."""
    lines, full = scene.lines, table
    blur = table.optics.s_px
    radius = np.exp(segment_quantile(guess.ln_r, lines.offsets, 0.5))
    seen = segment_quantile(guess.detected, lines.offsets, 0.5) > 10.0
    resolved = seen & (radius > max(RESOLVED_PX, RESOLVED_BLURS * blur)) & (np.diff(lines.offsets) >= 12)
    segments = choose_segments(radius, np.diff(lines.offsets), resolved, MOST_POINTS)
    if len(segments) == 0:
        return _nothing_learnt(lines, guess, table, settings)
    wide = 1.5 * float(radius[segments].max())
    table = profile_table(table.optics, wide, int(1.2 * (wide + 3 * max(blur, 3.0) + 3)) + 6)
    observed, theta = _pooled_strips(scene, segments, first_unknowns(guess), table)
    told, reflex, flags = _tell_optics(observed, table, theta, settings)
    table = table_like(table, told.optics)
    none = np.zeros(len(segments))
    expected = reflex or _contrast_unknown(observed, told.theta, none, none + 1)
    priors = spaced(make_priors(observed, table, told.theta, expected))
    normal = normal_equations(observed, table, told.theta)
    contrast, variance, variance_ln_r = segment_contrasts(observed, priors, told.theta, normal)
    answer = np.stack([segment_mean(observed, column) for column in told.answer[:, LN_C].T], axis=1)
    known = KnownContrasts(lines.vessel_class[segments], contrast, variance, answer)
    known = known.select(told.in_focus & (variance_ln_r < RESOLVED_SE**2))
    prior = learn_contrast(known, lines.vessel_class, mean_contrast(lines, guess))
    common = None if reflex is None else (float(reflex.reflex.max()), float(reflex.reflex_sd.min()))
    profile_se = told.family_shift
    if not told.family_told:
        profile_se = max(profile_se, PROFILE_SE if told.optics.family == "cylinder" else 0.0)
    if told.optics.family == "absorber":
        profile_se = float(np.hypot(profile_se, FORM_SE))
    return ImageKnowledge(table_like(full, told.optics), told.covariance, prior, known, common, profile_se, flags)


def recall_image(
    told: ImageKnowledge, lines: TubeLines, guess: Guess, table: ProfileTable, classes: IntArray
) -> ImageKnowledge:
    """Bring what was learnt from another part of the picture to these lines; `classes` are all that there are."""
    prior = learn_contrast(told.contrasts, lines.vessel_class, mean_contrast(lines, guess), classes)
    return replace(told, table=table_like(table, told.table.optics), contrast=prior)


def _pooled_strips(
    scene: Scene, segments: IntArray, theta: FloatArray, table: ProfileTable
) -> tuple[Observed, FloatArray]:
    """Average the strips of chosen segments in blocks; their first unknowns."""
    lines = scene.lines
    calm_x, calm_y = (twice(line, lines.offsets, CALM_PX) for line in (lines.x_px, lines.y_px))
    scene = replace(scene, frame=make_frame(calm_x, calm_y, lines.offsets))
    points, offsets = points_of(lines, segments)
    first, block_offsets = blocks_of(offsets)
    even = theta.copy()
    even[points, LN_R] = widest_of_block(theta[points, LN_R], first)  # strips of a block equally wide
    observed, _ = observe(scene, segments, even, table, alone=True)
    bridged = bridge(theta[points], observed.row_scale > 0, observed.segment)
    return pool(observed, first, block_offsets, scene.covariance), mean_of_block(bridged, first)


def _tell_optics(
    observed: Observed, table: ProfileTable, theta: FloatArray, settings: TubeSettings
) -> tuple[ImageOptics, Expected | None, Flag]:
    """Estimate the optics; where the picture does not tell blur or family, assume them and say so."""
    families: tuple[str, ...] = (settings.profile,)
    if settings.profile == "auto":
        families = ("slab", "absorber") if settings.dark else ("slab", "cylinder", "absorber")
    flags = Flag.NONE
    request = OpticsRequest(families, START_PX, None, settings.dark)
    if settings.blur_px is not None:
        request = OpticsRequest(families, (total_blur_px(settings.blur_px),), TYPED_REL_SE, settings.dark)
        flags |= Flag.ASSUMED_BLUR_SPREAD
    none = np.zeros(observed.n_segments)
    priors = spaced(make_priors(observed, table, theta, _contrast_unknown(observed, theta, none, none + 1)))
    told = estimate_optics(observed, priors, table, theta, request)
    if settings.blur_px is None and told.covariance[0, 0] > WORST_BLUR_SE**2:
        request = OpticsRequest(families, (total_blur_px(ASSUMED_PSF_PX),), ASSUMED_REL_SE, settings.dark)
        flags |= Flag.BLUR_ASSUMED | Flag.ASSUMED_BLUR_SPREAD
        told = estimate_optics(observed, priors, table, theta, request)
    if not told.family_told:
        flags |= Flag.PROFILE_ASSUMED
        request = replace(request, families=(told.optics.family,))
    reflex = None
    if settings.dark:
        told, reflex = _with_reflex(observed, table, told, request)
    return told, reflex, flags


def _with_reflex(
    observed: Observed, table: ProfileTable, told: ImageOptics, request: OpticsRequest
) -> tuple[ImageOptics, Expected | None]:
    """Estimate the optics with light reflexes on the axes, if that explains the wide vessels clearly better.

    Wide vessels tell the height of the reflex by themselves; narrower ones may have the same or none.
    Light is reflected by round surfaces: a slab with a reflex is not asked for unless the study says slab.
    """
    wide = wide_segments(observed, told.theta, told.optics)
    if not wide.any():
        return told, None
    round_ones = tuple(family for family in request.families if family != "slab") or request.families
    starts = (told.optics.s_px,) if request.blur_rel_se else (SHARPER * told.optics.s_px, told.optics.s_px)
    request = replace(request, start_px=starts, families=round_ones)
    none = np.zeros(observed.n_segments)
    expected = _contrast_unknown(observed, told.theta, none, np.where(wide, REFLEX_SPREAD, NO_REFLEX))
    theta = np.column_stack([told.theta, np.where(wide, FIRST_REFLEX, 0.0)[observed.segment]])
    again = _estimate_again(observed, table_like(table, told.optics), theta, expected, request)
    high = segment_mean(observed, again.theta[:, REFLEX])[wide]
    common = float(np.median(high))
    scatter = max(1.4826 * float(np.median(np.abs(high - common))), SMALLEST_REFLEX_SPREAD)
    alike = common > ALIKE * 1.2533 * scatter / np.sqrt(len(high))  # 1.2533: standard error of a median over a mean's
    needed = REFLEX_GAIN[0] + (0.0 if alike else REFLEX_GAIN[1] * ROWS * wide[observed.segment].sum())
    gain = advantage(again.point_cost, told.point_cost, observed.segment)
    chance = float(expit(-abs(gain - needed) / (REFLEX_DOUBT * needed)))
    if common < LOWEST_REFLEX or gain < needed:
        return with_doubt(told, again, chance if common > LOWEST_REFLEX else 0.0), None
    mean, sd = expected_reflex(wide, (common, scatter))
    expected = _contrast_unknown(observed, again.theta, mean, np.where(wide, REFLEX_SPREAD, sd))
    theta = again.theta.copy()
    theta[~wide[observed.segment], REFLEX] = mean[~wide].mean() if not wide.all() else 0.0
    reflecting = _estimate_again(observed, table_like(table, again.optics), theta, expected, request)
    return with_doubt(reflecting, told, chance), replace(expected, reflex_sd=sd)


def expected_reflex(wide: BoolArray, reflex: tuple[float, float] | None) -> tuple[FloatArray, FloatArray]:
    """Mean and spread (n_segments,) of the reflex's height: as in wide vessels, or anything from none to that."""
    common, scatter = reflex or (0.0, 1.0)
    narrow = max(common / 2, scatter)
    return np.where(wide, common, common / 2), np.where(wide, scatter, narrow)


def _estimate_again(
    observed: Observed, table: ProfileTable, theta: FloatArray, expected: Expected, request: OpticsRequest
) -> ImageOptics:
    priors = spaced(make_priors(observed, table, theta, expected))
    return estimate_optics(observed, priors, table, theta, request)


def _contrast_unknown(observed: Observed, theta: FloatArray, reflex: FloatArray, reflex_sd: FloatArray) -> Expected:
    contrast = segment_mean(observed, theta[:, LN_C])
    return Expected(contrast, np.full(observed.n_segments, FREE_SPREAD), reflex, reflex_sd)


def wide_segments(observed: Observed, theta: FloatArray, optics: Optics) -> BoolArray:
    """Segments wide enough to show a reflex apart from their rims."""
    wide: BoolArray = segment_mean(observed, theta[:, LN_R]) > np.log(REFLEX_BLURS * optics.s_px)
    return wide


def segment_mean(observed: Observed, values: FloatArray) -> FloatArray:
    """Mean (n_segments,) of (n_points,) values."""
    return observed.by_segment(values) / np.maximum(np.diff(observed.offsets), 1)


def _nothing_learnt(lines: TubeLines, guess: Guess, table: ProfileTable, settings: TubeSettings) -> ImageKnowledge:
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
    prior = learn_contrast(nobody, lines.vessel_class, mean_contrast(lines, guess))
    profile_se = PROFILE_SE if settings.profile == "auto" else 0.0
    return ImageKnowledge(table, np.diag(variances), prior, nobody, None, profile_se, flags)


def mean_contrast(lines: TubeLines, guess: Guess) -> FloatArray:
    return segment_quantile(guess.ln_contrast, lines.offsets, 0.5)
