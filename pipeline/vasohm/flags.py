"""Every flag once: its code as it stands in the tables, and what it tells the reader."""

from enum import IntFlag

import numpy as np

from vasohm.arrays import AnyArray, IntArray


class Flag(IntFlag):
    """Codes of doubt, one bit each, so that arrays of them can be combined."""

    NONE = 0
    # points and segments
    UNRESOLVED = 1 << 0
    RIM = 1 << 1
    FAINT = 1 << 2
    BLURRED = 1 << 3
    SHORT = 1 << 4
    INFERRED = 1 << 5
    TIGHT_BEND = 1 << 6
    LAW_RANGE = 1 << 7
    NO_FLOW = 1 << 8
    CLIPPED = 1 << 9
    STEEP_WALL = 1 << 10
    SELF_LOOP = 1 << 11
    NO_INTERVAL = 1 << 12
    UNDEVELOPED = 1 << 13
    INERTIAL = 1 << 14
    PULSATILE = 1 << 15
    # networks
    NO_INLET = 1 << 16
    NO_OUTLET = 1 << 17
    NO_TERMINALS = 1 << 18
    MESH = 1 << 19
    TERMINALS_JOINED = 1 << 20
    TERMINALS_ESTIMATED = 1 << 21
    MONTE_CARLO = 1 << 22
    FEWER_DRAWS = 1 << 23
    OUT_OF_REACH = 1 << 24
    HEMATOCRIT_UNSETTLED = 1 << 25
    BACKWARDS = 1 << 26
    ORDER_LOOPS = 1 << 27
    ORDER_ROOTLESS = 1 << 28
    ORDER_UNSETTLED = 1 << 29
    # images
    TERMINAL_MISSED = 1 << 32
    EDIT_MISSED = 1 << 33
    ORIENTATION_TAG = 1 << 34
    PIXEL_SIZE_SE_UNKNOWN = 1 << 35
    INVALID_PIXELS = 1 << 36
    SATURATED = 1 << 37
    BLANK = 1 << 38
    SCALE_CONFLICT = 1 << 39
    BLUR_ASSUMED = 1 << 40
    PROFILE_ASSUMED = 1 << 41
    OUT_OF_FOCUS = 1 << 42
    ASSUMED_BLUR_SPREAD = 1 << 43
    FEW_ARTERIOLES = 1 << 44
    FEW_VENULES = 1 << 45
    DISC_OUTSIDE = 1 << 46
    ZONE_CUT = 1 << 47
    TISSUE_UNSEEN = 1 << 48
    SCALE_FROM_DISC = 1 << 49
    ZONE_UNSAID = 1 << 50
    DISC_NOT_FOUND = 1 << 51
    BURNED_IN = 1 << 52
    FIELD_ANGLE = 1 << 53
    CLASS_UNSAID = 1 << 54
    # pairs of images
    PROFILES_DIFFER = 1 << 57
    CLASS_DIFFERS = 1 << 58
    SCALES_DISAGREE = 1 << 59
    NO_COMMON_WAY = 1 << 60
    COMMON_ENDS = 1 << 61


MEANING: dict[Flag, str] = {
    Flag.UNRESOLVED: "too thin for the pixel size and blur: the radius is known to worse than 25 %",
    Flag.RIM: "cut by the field of view or the picture's border",
    Flag.FAINT: "contrast below three times the noise",
    Flag.BLURRED: "edges softer than the image's own blur explains: out of focus or two vessels in one",
    Flag.SHORT: "shorter than its own width: its radius borrows from its neighbours",
    Flag.INFERRED: "radius interpolated from neighbouring points, not measured here",
    Flag.TIGHT_BEND: "a bend of less than 5 px radius: the smoothed length is too short here",
    Flag.LAW_RANGE: "radius or hematocrit outside the range in which the viscosity law was fitted",
    Flag.NO_FLOW: "dead end, closed ring or balanced bridge: no flow passes",
    Flag.CLIPPED: "intensities at the limit of the file's scale along the vessel",
    Flag.STEEP_WALL: "wall slope above 0.09: local Poiseuille flow is more than 1 % off",
    Flag.SELF_LOOP: "leaves and returns at the same node",
    Flag.NO_INTERVAL: "the uncertainty of the resistance is too large to bound it",
    Flag.UNDEVELOPED: "shorter than the two lengths in which flow settles at its ends: not Poiseuille's profile",
    Flag.INERTIAL: "Reynolds number above 1: bends and branchings cost more than Poiseuille's law says",
    Flag.PULSATILE: "Womersley number above 1: the flow of a beat is not like steady flow",
    Flag.NO_INLET: "no place where blood enters: no resistance",
    Flag.NO_OUTLET: "no place where blood leaves: no resistance",
    Flag.NO_TERMINALS: "inlets and outlets are not known: no resistance",
    Flag.MESH: "the network has loops: inlets and outlets cannot be told from its shape",
    Flag.TERMINALS_JOINED: "several inlets or outlets were joined to one pressure",
    Flag.TERMINALS_ESTIMATED: "where blood enters and leaves, and how much, was estimated from targets, not known",
    Flag.MONTE_CARLO: "the interval of the resistance comes from random draws",
    Flag.FEWER_DRAWS: "the network is too large for all the draws asked for: fewer were made, or none",
    Flag.OUT_OF_REACH: "no radius factor of the chosen vessels gives the wanted ratio of resistances",
    Flag.HEMATOCRIT_UNSETTLED: "hematocrit and flow came to no state that agrees with itself: no values",
    Flag.BACKWARDS: "the pressure of every inlet lies below that of every outlet: blood runs from outlets to inlets",
    Flag.ORDER_LOOPS: "the network has loops: its vessels have no orders",
    Flag.ORDER_ROOTLESS: "neither one inlet nor one outlet: where the tree begins, and so its orders, cannot be told",
    Flag.ORDER_UNSETTLED: "orders by diameter came to no end that agrees with itself",
    Flag.TERMINAL_MISSED: "a terminal of the terminals file is not near any vessel end and was left out",
    Flag.EDIT_MISSED: "an edit of the edits file is not near any vessel and was left out",
    Flag.ORIENTATION_TAG: "the file carries an orientation tag; coordinates are those of the stored picture",
    Flag.PIXEL_SIZE_SE_UNKNOWN: "no uncertainty of pixel size or camera factor was given; intervals leave it out",
    Flag.INVALID_PIXELS: "pixels that are not finite were taken out of the field of view",
    Flag.SATURATED: "more than 1 % of the field of view is at the limit of the file's scale",
    Flag.BLANK: "the picture holds no contrast above its noise",
    Flag.SCALE_CONFLICT: "the file contradicts the typed pixel size; the typed one was used as the study asks",
    Flag.BLUR_ASSUMED: "the image cannot tell its own blur; an assumed value was used",
    Flag.PROFILE_ASSUMED: "the image cannot tell how its vessels are imaged; an assumed profile was used",
    Flag.OUT_OF_FOCUS: "the blur is wider than 1.5 px and than the thinnest vessels asked for",
    Flag.ASSUMED_BLUR_SPREAD: "the uncertainty of the blur is an assumption",
    Flag.FEW_ARTERIOLES: "fewer arterioles cross the zone around the optic disc than their equivalent asks for",
    Flag.FEW_VENULES: "fewer venules cross the zone around the optic disc than their equivalent asks for",
    Flag.DISC_OUTSIDE: "the optic disc lies partly outside the field of view: no calibre equivalents",
    Flag.ZONE_CUT: "the field of view cuts the zone around the optic disc: vessels may be missing from the equivalents",
    Flag.TISSUE_UNSEEN: "more than 5 % of the tissue lies further from any vessel than the field of view can tell",
    Flag.SCALE_FROM_DISC: "the pixel size rests on a declared width of the optic disc; eyes differ in it by about 9 %",
    Flag.ZONE_UNSAID: "a vessel of no class crosses the zone around the disc, as wide as some that the equivalents use",
    Flag.DISC_NOT_FOUND: "no place in the picture is the optic disc surely enough: nothing that needs one is told",
    Flag.BURNED_IN: "the file says that text is drawn into its picture: it may name the patient, and cover vessels",
    Flag.FIELD_ANGLE: "the angle of view that the file tells does not fit its pixel size",
    Flag.CLASS_UNSAID: "vessels of no class hold over a tenth of its resistance: it may mix arterioles and venules",
    Flag.PROFILES_DIFFER: "each image took its vessels to be imaged in another way: say [radius] profile for both",
    Flag.CLASS_DIFFERS: "arteriole or venule: the two images say it differently",
    Flag.SCALES_DISAGREE: "one image lies on the other at a scale that their pixel sizes do not explain",
    Flag.NO_COMMON_WAY: "what both images show holds no way from an inlet to an outlet: no ratio",
    Flag.COMMON_ENDS: "inlets or outlets were put where what both images show ends",
}


def code(flag: Flag) -> str:
    """Return the code of one flag as it stands in tables."""
    return str(flag.name).lower()


def codes(bits: IntArray) -> AnyArray:
    """Turn an integer array of combined flags into texts such as ``"rim;short"``; empty where nothing is wrong."""
    values, where = np.unique(np.asarray(bits, dtype=np.int64), return_inverse=True)
    texts = [";".join(code(flag) for flag in MEANING if value & flag) for value in values.tolist()]
    return np.array(texts, dtype=object)[where.reshape(np.shape(bits))]
