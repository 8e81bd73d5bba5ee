"""What colours a segment, on the drawn picture and on the page alike."""

from typing import Literal, TypeAlias

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.colors import ListedColormap, LogNorm, Normalize

from vasohm.arrays import BoolArray, FloatArray
from vasohm.flags import Flag, code

ColourBy: TypeAlias = Literal["radius", "share", "resistance", "uncertainty", "class"]

COLOURED: dict[ColourBy, tuple[str, str]] = {  # what colours a segment: the colour bar's label; and in words
    "radius": ("lumen radius (µm)", "lumen radius"),
    "share": ("share of the network's resistance (%)", "share of the network's resistance"),
    "resistance": ("resistance (Pa·s/m³)", "resistance"),
    "uncertainty": ("standard uncertainty of the radius (%)", "relative standard uncertainty of the radius"),
    "class": ("class", "class of vessel"),
}
# Yellow, purple and green of Okabe & Ito (Color Universal Design, 2008), apart for all kinds of colour vision.
CLASS_COLOURS = {"arteriole": "#f0e442", "venule": "#cc79a7", "capillary": "#009e73"}
DARKEST = 0.12  # start of the colour map: its first tenth is lost on a dark picture
LOGARITHMIC_FROM = 5.0  # ratio of largest to smallest value from which the colours are spread in the logarithm
DOUBTFUL = (Flag.RIM, Flag.UNRESOLVED, Flag.INFERRED)
COLOURED_SHARES = (0.02, 0.98)  # of the length of the sound segments, between which the colours are spread
WIDEST_RATIO = 1e4  # of the colours' range; smaller values take the darkest colour
SHARES_SHOWN = 300.0  # largest over smallest share that has a colour of its own
GREY = "#d0d0d0"
# Sky blue, vermilion and orange of the same palette: no doubt, a doubtful radius, another flag.
SOUND_COLOUR, DOUBTFUL_COLOUR, OTHER_FLAG_COLOUR = "#56b4e9", "#d55e00", "#e69f00"


def coloured_values(segments: pd.DataFrame, colour_by: ColourBy) -> FloatArray:
    """Return what colours each segment (n,), in the unit of the colour bar; NaN where there is no number."""

    def column(name: str) -> FloatArray:
        return segments[name].to_numpy(np.float64)

    if colour_by == "class":
        return np.full(len(segments), np.nan)
    if colour_by == "share":
        return 100.0 * column("resistance_share")
    if colour_by == "uncertainty":
        return 100.0 * column("radius_hydraulic_se_um") / column("radius_hydraulic_um")
    return column("radius_mean_um" if colour_by == "radius" else "resistance_pa_s_m3")


def colours_span(values: FloatArray, segments: pd.DataFrame, colour_by: ColourBy) -> Normalize | None:
    """Return the range of the colour bar; None where there is nothing to colour by."""
    return _share_range(values) if colour_by == "share" else _sound_range(values, segments)


def colour_map() -> ListedColormap:
    """Perceptually uniform and readable without red-green vision."""
    return ListedColormap(mpl.colormaps["viridis"](np.linspace(DARKEST, 1, 256)))


def _sound_range(values: FloatArray, segments: pd.DataFrame) -> Normalize | None:
    """Range of the values of sound segments.

    One false segment, far thinner or wider than all vessels, must not make the others look alike: doubtful segments
    have no say where there are others, and what is left counts by its length.
    """
    known = is_known(values)
    sound = known & ~is_doubtful(segments)
    chosen = sound if sound.any() else known
    if not chosen.any():
        return None
    order = np.argsort(values[chosen], kind="stable")
    sorted_values = values[chosen][order]
    length = np.nan_to_num(segments["length_um"].to_numpy(np.float64)[chosen][order])
    reached = np.cumsum(length) - 0.5 * length
    shares = np.array(COLOURED_SHARES) * length.sum()
    low, high = (float(value) for value in np.interp(shares, reached, sorted_values))
    if high > LOGARITHMIC_FROM * low:
        return LogNorm(max(low, high / WIDEST_RATIO), high, clip=True)
    return Normalize(low, high, clip=True) if low < high else Normalize(0.9 * low, 1.1 * high, clip=True)


def _share_range(values: FloatArray) -> Normalize | None:
    """Range for shares: up to the largest, however short and doubtful its segment is, for it is what matters."""
    known = values[is_known(values)]
    if not known.size:
        return None
    return LogNorm(float(known.max()) / SHARES_SHOWN, float(known.max()), clip=True)


def value_colours(values: FloatArray, norm: Normalize | None) -> FloatArray:
    """Return the colour (n, 4) of each value, grey where it is not known."""
    found = np.tile(mpl.colors.to_rgba(GREY), (len(values), 1))
    if norm is not None:
        known = is_known(values)
        found[known] = colour_map()(norm(values[known]))
    return found


def class_colours(segments: pd.DataFrame) -> FloatArray:
    """Return the colour (n, 4) of each segment's class, grey where none is said."""
    found = [mpl.colors.to_rgba(CLASS_COLOURS.get(word, GREY)) for word in segments["vessel_class"]]
    return np.array(found, dtype=np.float64).reshape(-1, 4)


def is_known(values: FloatArray) -> BoolArray:
    """Tell which values have a colour."""
    return np.asarray(np.isfinite(values) & (values > 0))


def is_doubtful(segments: pd.DataFrame) -> BoolArray:
    """Tell which segments have a doubtful radius."""
    wanted = {code(flag) for flag in DOUBTFUL}
    return np.array([not wanted.isdisjoint(text.split(";")) for text in segments["flags"]], dtype=bool)
