"""The methods paragraph of one study, from the settings that it used, with the sources that it leans on."""

import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from vasohm.flow.estimated_ends import EndTargets
from vasohm.flow.monte_carlo import FIRST_ORDER_UP_TO, IntervalSettings
from vasohm.flow.phase_separation import SPLIT_LAWS
from vasohm.flow.rheology import HUMAN_CELL_VOLUME_FL, BloodSettings, diameter_factor, get_law
from vasohm.flow.terminals import NetworkSettings
from vasohm.image.calibrate import DISC_SPREAD, ScaleSettings
from vasohm.image.eye import LENGTH_SCATTER, REFRACTION_SCATTER
from vasohm.image.prepare import PrepareSettings
from vasohm.image.segment import SegmentSettings
from vasohm.network.class_trees import TreeSettings
from vasohm.network.graph import VesselClass
from vasohm.network.lumenfit import RadiusSettings
from vasohm.network.morphometry import ShapeSettings
from vasohm.results.markup import NOTICE
from vasohm.results.shape_methods import shape_sentences

POISEUILLE = (
    "Sutera SP, Skalak R. The history of Poiseuille's law. Annu Rev Fluid Mech 1993;25:1-20. "
    "doi:10.1146/annurev.fl.25.010193.000245"
)
SHARES = "Cohn RM. The resistance of an electrical network. Proc Am Math Soc 1950;1:316-324."
UNCERTAINTY = (
    "JCGM 100:2008. Evaluation of measurement data: guide to the expression of uncertainty in measurement. "
    "doi:10.59161/JCGM100-2008E"
)
ESTIMATE = (
    "Fry BC, Lee J, Smith NP, Secomb TW. Estimation of blood flow rates in large microvascular networks. "
    "Microcirculation 2012;19:530-538. doi:10.1111/j.1549-8719.2012.00184.x"
)
BENNETT = (
    "Bennett AG, Rudnicka AR, Edgar DF. Improvements on Littmann's method of determining the size of retinal features "
    "by fundus photography. Graefes Arch Clin Exp Ophthalmol 1994;232:361-367. doi:10.1007/BF00175988"
)
BENGTSSON = (
    "Bengtsson B, Krakau CET. Correction of optic disc measurements on fundus photographs. Graefes Arch Clin Exp "
    "Ophthalmol 1992;230:24-28. doi:10.1007/BF00166758"
)
EYE_SCATTER = (
    "Garway-Heath DF, et al. Measurement of optic disc size: equivalence of methods to correct for ocular "
    "magnification. Br J Ophthalmol 1998;82:643-649. doi:10.1136/bjo.82.6.643"
)
DISC_SIZE = (
    "Quigley HA, Brown AE, Morrison JD, Drance SM. The size and shape of the optic disc in normal human eyes. Arch "
    "Ophthalmol 1990;108:51-57. doi:10.1001/archopht.1990.01070030057028"
)
DISC_SPREADS = (
    "Girkin CA, et al. Variation in optic nerve and macular structure with age and race with spectral-domain optical "
    "coherence tomography. Ophthalmology 2011;118:2403-2408."
)
DRAWS = (
    "JCGM 101:2008. Evaluation of measurement data: propagation of distributions using a Monte Carlo method. "
    "doi:10.59161/JCGM101-2008"
)
ARRAYS = "Harris CR, et al. Array programming with NumPy. Nature 2020;585:357-362. doi:10.1038/s41586-020-2649-2"
ALGORITHMS = (
    "Virtanen P, et al. SciPy 1.0: fundamental algorithms for scientific computing in Python. Nat Methods "
    "2020;17:261-272. doi:10.1038/s41592-019-0686-2"
)
PICTURES = "van der Walt S, et al. scikit-image: image processing in Python. PeerJ 2014;2:e453. doi:10.7717/peerj.453"

LAW_CAUTION = (
    "A viscosity law holds within the range in which it was fitted, most laws in rat mesentery or glass tubes; "
    "segments outside of it carry the flag law_range."
)
ONE_VISCOSITY_CAUTION = (
    "One viscosity was taken for all vessels: that blood resists differently in narrow ones, and with its hematocrit, "
    "is left out."
)
ESTIMATE_CAUTION = (
    "Networks with the flag terminals_estimated have flows at their ends that were estimated from targets and not "
    "measured; directions as a whole may be reversed. Their resistance depends on the estimate, which its interval "
    "leaves out."
)
DISC_CAUTION = (
    "Images with the flag scale_from_disc have a pixel size that rests on a declared diameter of the optic disc. Eyes "
    "differ in it, and a resistance goes with the inverse third power of the pixel size: compare such images by ratios "
    "within one picture, not by size."
)
CAUTIONS: tuple[str, ...] = (
    NOTICE,
    (
        "A two-dimensional picture foreshortens vessels that run out of its plane; a fundus image holds only part of a "
        "circulation."
    ),
    "The resistance of a network that the field of view cuts depends on where it is cut.",
    LAW_CAUTION,
    "Absolute calibres differ between cameras and between programs: compare within one set-up.",
)

_DOI = re.compile(r"10\.\d{4,9}/[^\s,;]+[^\s,;.)]")
_YEAR = re.compile(r"\b(1[89]\d\d|20\d\d)\b")
_WORD = re.compile(r"[A-Za-z]+")
_TEX = {"&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_", "{": "", "}": "", "\\": ""}


@dataclass(frozen=True, slots=True)
class MethodsUsed:
    """What a study's methods paragraph depends on."""

    version: str
    scale: ScaleSettings
    prepare: PrepareSettings
    segment: SegmentSettings
    radius: RadiusSettings
    blood: BloodSettings
    network: NetworkSettings
    law_citation: str
    scenario_names: tuple[str, ...]
    n_images: int
    n_masked: int  # images that came with a vessel mask made elsewhere
    intervals: IntervalSettings
    targets: EndTargets | None  # of ends that are estimated
    shape: ShapeSettings
    trees: TreeSettings
    with_disc: bool  # an optic disc is told, or looked for


@dataclass(frozen=True, slots=True)
class Methods:
    """A paragraph whose marks [1], [2] count through `references`, and what the reader must bear in mind."""

    paragraph: str
    references: tuple[str, ...]
    cautions: tuple[str, ...]


def describe_methods(used: MethodsUsed) -> Methods:
    """Write the methods paragraph of a study from its resolved settings.

    Returns
    -------
    Plain text with numbered marks, and the sources in the order of their numbers.
    """
    cited: list[str] = []

    def mark(source: str) -> str:
        if source not in cited:
            cited.append(source)
        return f"[{cited.index(source) + 1}]"

    sentences = [
        (
            f"Images were measured with vasohm {used.version} on NumPy {mark(ARRAYS)}, SciPy {mark(ALGORITHMS)} and "
            f"scikit-image {mark(PICTURES)}."
        ),
        *_scale_sentences(used.scale, mark),
        _vessel_sentence(used),
        _radius_sentence(used.radius),
        (
            "The resistance of a segment is the integral of apparent viscosity over the fourth power of the local "
            f"radius along its centreline, Poiseuille's law applied locally {mark(POISEUILLE)}."
        ),
        _blood_sentence(used.blood, mark(used.law_citation)),
        *_cells_sentences(used.blood, mark),
        *shape_sentences(used.shape, used.trees, mark, with_disc=used.with_disc),
        _network_sentence(used.network, mark(SHARES)),
        *([_estimate_sentence(used.targets, mark(ESTIMATE))] if used.targets is not None else []),
        (
            f"Standard uncertainties follow the GUM {mark(UNCERTAINTY)}; random causes and those that a whole image "
            "shares are kept apart, and 95 % intervals of resistances are symmetric in their logarithm"
            f"{_drawn_words(used.intervals, mark)}."
        ),
    ]
    if used.scenario_names:
        sentences.append(f"Scenarios: {'; '.join(used.scenario_names)}.")
    constant = used.blood.law == "constant"
    cautions = tuple(ONE_VISCOSITY_CAUTION if constant and one == LAW_CAUTION else one for one in CAUTIONS)
    if used.targets is not None:
        cautions += (ESTIMATE_CAUTION,)
    if used.scale.disc_diameter_um is not None:
        cautions += (DISC_CAUTION,)
    if used.radius.plasma_layer_um:
        cautions += ("Radii are those of the red-cell column with a plasma layer added, whose width is an assumption.",)
    return Methods(" ".join(sentences), tuple(cited), cautions)


def _scale_sentences(scale: ScaleSettings, mark: Callable[[str], str]) -> Iterator[str]:
    """Say how pixel sizes follow from eyes or discs, where a study asks for either."""
    eye = scale.eye
    if eye.magnification != "none":
        by_length, by_refraction = f"{100 * LENGTH_SCATTER:g} % by length", f"{100 * REFRACTION_SCATTER:g} %"
        if eye.magnification == "bennett":
            rule, reference = f"axial length {mark(BENNETT)}", f"an eye of {eye.reference_axial_length_mm:g} mm"
            scatter = by_length
        else:
            rule = f"refraction, or by axial length where no refraction was given, {mark(BENGTSSON)}"
            reference = f"an eye without ametropia or of {eye.reference_axial_length_mm:g} mm"
            scatter = f"{by_refraction} by refraction and {by_length}"
        basis = f"told pixel sizes were taken as those of {reference}"
        if eye.camera_factor is not None:
            basis = f"a pixel of the camera spans {eye.camera_factor:g} degrees"
        yield (
            f"Pixel sizes were fitted to each eye by its {rule}; {basis}. The methods' scatter of {scatter} "
            f"{mark(EYE_SCATTER)} is part of their uncertainty."
        )
    if scale.disc_diameter_um is not None:
        of_disc, spread = scale.disc_diameter_se_um, ""
        if of_disc is None:
            of_disc, spread = DISC_SPREAD * scale.disc_diameter_um, f", the spread between people {mark(DISC_SPREADS)}"
        yield (
            f"Where no pixel size was known, the optic disc was taken to be {scale.disc_diameter_um:g} µm wide "
            f"(standard uncertainty {of_disc:.3g} µm{spread}; for published diameters see {mark(DISC_SIZE)})."
        )


def _vessel_sentence(used: MethodsUsed) -> str:
    if used.segment.method == "mask" or 0 < used.n_images == used.n_masked:
        return "Vessels were taken from masks made elsewhere."
    low, high = used.segment.radius_um
    found = (
        f"Vessels, {used.prepare.polarity} against their background, were looked for in the {used.prepare.channel} "
        f"channel by the method {used.segment.method}, for lumen radii from {low:g} to {high:g} µm."
    )
    if used.n_masked:
        found += (
            f" Those of {used.n_masked} of the {used.n_images} images were taken from masks made elsewhere instead."
        )
    return found


def _radius_sentence(radius: RadiusSettings) -> str:
    blur = "told by each image" if radius.blur_px is None else f"{radius.blur_px:g} px"
    profile = "told by each image" if radius.profile == "auto" else radius.profile
    layer = ""
    if radius.plasma_layer_um:
        layer = (
            f" A plasma layer of {radius.plasma_layer_um:g} µm (standard uncertainty {radius.plasma_layer_se_um:g} µm) "
            "was added to the radius of the red-cell column."
        )
    return (
        "Local lumen radii were found by fitting how a round tube is imaged across each centreline "
        f"(profile: {profile}; blur: {blur})." + layer
    )


def _blood_sentence(blood: BloodSettings, mark: str) -> str:
    if blood.law == "constant":
        return f"The apparent viscosity was {blood.viscosity_mpa_s:g} mPa·s everywhere {mark}."
    doubt = f" (standard uncertainty {blood.hematocrit_se:g})" if blood.hematocrit_se else ""
    plasma_se = blood.plasma_viscosity_se_mpa_s
    of_plasma = f" (standard uncertainty {plasma_se:g} mPa·s)" if plasma_se else ""
    return (
        f"The apparent viscosity follows the law {blood.law} {mark} at a discharge hematocrit of {blood.hematocrit:g}"
        f"{doubt} and a plasma viscosity of {blood.plasma_viscosity_mpa_s:g} mPa·s{of_plasma}."
    )


def _cells_sentences(blood: BloodSettings, mark: Callable[[str], str]) -> Iterator[str]:
    """Say which diameter the law was given, and how cells part, where a study asks for either."""
    if blood.red_cell_volume_fl is not None and get_law(blood.law).scales_with_cells:
        factor = diameter_factor(blood.red_cell_volume_fl)
        yield (
            f"Within the law, diameters were multiplied by {factor:.4g}: red cells have {blood.red_cell_volume_fl:g}, "
            f"human ones {HUMAN_CELL_VOLUME_FL:g} fL."
        )
    if blood.split_law is not None:
        shared = ", and the uncertainty of hematocrit counts alike in every segment" if blood.hematocrit_se else ""
        yield (
            f"Cells and plasma part where vessels divide {mark(SPLIT_LAWS[blood.split_law].citation)}, by diameters as "
            "measured (not scaled by red-cell volume), and mix where they meet, in turns with the viscosity until both "
            f"agree; intervals hold the hematocrits found so{shared}."
        )


def _network_sentence(network: NetworkSettings, mark: str) -> str:
    if network.terminals == "none":
        return "Networks were not solved."
    where = (
        "a file"
        if network.terminals == "file"
        else "a file where one was given, else the networks' shape and class and the optic disc where one is known"
    )
    return (
        f"Inlets and outlets of the networks come from {where}; where no pressure was given they differ by "
        f"{network.drive_mmhg:g} mmHg. A segment's share of its network's resistance is its share of the dissipated "
        f"power {mark}."
    )


def _estimate_sentence(targets: EndTargets, mark: str) -> str:
    def said(values: tuple[float, ...], unit: str) -> str:
        if len(set(values)) == 1:
            return f"{values[0]:g} {unit}"
        named = [f"{values[kind]:.3g} {unit} ({kind.name.lower()})" for kind in VesselClass if kind]
        return ", ".join(named) + f", {values[0]:.3g} {unit} elsewhere"

    return (
        "Flows at ends of which nothing was known were estimated as those that bring wall shear stress nearest to "
        f"{said(targets.wall_shear_pa, 'Pa')} (scatter {targets.wall_shear_sd_pa:g} Pa) and pressure nearest to "
        f"{said(targets.pressure_mmhg, 'mmHg')} (scatter {targets.pressure_sd_mmhg:g} mmHg), by least squares {mark}; "
        "the resistance is then the dissipated power over the square of the inflow."
    )


def _drawn_words(intervals: IntervalSettings, mark: Callable[[str], str]) -> str:
    if intervals.method == "delta":
        return ""
    which = (
        "all networks"
        if intervals.method == "monte-carlo"
        else f"networks whose radii are known to worse than {100 * FIRST_ORDER_UP_TO:g} %"
    )
    return f"; those of {which} come from {intervals.draws} random draws (seed {intervals.seed}) {mark(DRAWS)}"


def bibtex(references: Sequence[str]) -> str:
    """Write sources as BibTeX entries; their text stands in `note`, year and DOI in their own fields."""
    entries, keys = [], set[str]()
    for text in references:
        doi, year, word = _DOI.search(text), _YEAR.search(text), _WORD.search(text)
        key = (word.group().lower() if word else "source") + (year.group() if year else "")
        key = next(k for k in (key, *(f"{key}{letter}" for letter in "abcdefghijklmnop")) if k not in keys)
        keys.add(key)
        note = "".join(_TEX.get(letter, letter) for letter in text)
        lines = [f"@misc{{{key},", f"  note = {{{note}}},"]
        if year:
            lines.append(f"  year = {{{year.group()}}},")
        if doi:
            lines.append(f"  doi = {{{doi.group()}}},")
        entries.append("\n".join([*lines, "}"]))
    return "\n\n".join(entries) + "\n"
