"""What was measured, drawn on the picture: from the tables, so that the picture shows what the files say."""

import textwrap
from io import BytesIO
from typing import Any, Literal, TypeAlias

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.collections import PolyCollection
from matplotlib.colors import ListedColormap, LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Circle as CirclePatch
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter
from PIL import Image

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray
from vasohm.flags import Flag, code
from vasohm.results.tables import ImageTables
from vasohm.units import UM_PER_MM

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
OPAQUE, PALE, STUB = 0.75, 0.5, 0.6  # opacity of sound segments, of doubtful ones, of stubs inside a parent
WHITE_PALE, WHITE_STUB = 0.65, 0.35  # this share of their colour is white: over a dark vessel they are light too
LEAST_STUB_PX = 0.5  # a shorter gap between a node and a segment's first point does not show
LETTER_WIDTH = 0.55  # of a letter's height, on average
CAPTION_SHARE = 0.65  # of the width; the rest is the scale bar's
LINE_SPACING = 1.4  # of a letter's height
LONGEST_SIDE = 2000  # pixels of the drawing
SHORTEST_SIDE = 900  # a small picture is enlarged so that labels do not hide it
DPI = 100
BAR_SHARE = 0.2  # the scale bar is at most this share of the width
WIDEST_RATIO = 1e4  # of the colours' range; smaller values take the darkest colour
SHARES_SHOWN = 300.0  # largest over smallest share that has a colour of its own
TICKS = ((1.0, 1.5, 2.0, 3.0, 5.0, 7.0), (1.0, 2.0, 5.0), (1.0,))  # within one decade, two, and more
GREY = "#d0d0d0"
DISC_OPACITY = 0.8
DASH_PT = (7.0, 4.0)  # on and off, of a broken circle
LABEL_SIZE, LABEL_LETTERS = 0.8, 2.0  # of a letter: a circle's label, and the room above that it needs


def draw_overlay(tables: ImageTables, colour_by: ColourBy = "radius") -> bytes:
    """Draw the segments at their measured width on the grey picture.

    Parameters
    ----------
    tables : of one image.
    colour_by : what colours a segment: its mean lumen radius (um), its share of the network's resistance, its
        resistance (Pa s/m3), the relative standard uncertainty of its hydraulic radius, or its class.

    Returns
    -------
    A PNG; the same tables give the same bytes. The colours are spread over the middle 96 % of the length of the
    segments that are not doubtful; arrows at the colour bar tell of values beyond. Segments that the field of view
    cuts, that are too thin for the pixels, or whose radius is interpolated are drawn pale with a broken outline (not
    pale where shares are shown, whose colours reach up to the largest), and
    the stub between a branching and a child's first point, which carries no resistance, in a lighter tone.
    """
    height, width = tables.picture.shape
    scale = _drawing_scale(height, width)
    size = np.maximum(np.array([width, height]) * scale, 1.0)
    letter_pt = max(float(size.max()) / 130, 8.0)  # margins grow with the letters
    letter = letter_pt * DPI / 72
    caption = _caption(tables, colour_by, int(CAPTION_SHARE * size[0] / (LETTER_WIDTH * letter)))
    foot = (1.6 + LINE_SPACING * len(caption)) * letter  # pixels below the picture
    total = size + np.array([9.5 * letter, foot])
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams["font.size"] = letter_pt
        figure = Figure(figsize=tuple(total / DPI), dpi=DPI, facecolor="white")
        canvas = FigureCanvasAgg(figure)
        axes = figure.add_axes((0, foot / total[1], size[0] / total[0], size[1] / total[1]))
        _draw_picture(axes, tables.picture, scale)
        label, _ = COLOURED[colour_by]
        values = _coloured_values(tables.segments, colour_by)
        norm = _share_range(values) if colour_by == "share" else _colour_range(values, tables.segments)
        colours = _class_colours(tables.segments) if colour_by == "class" else _colours(values, norm)
        _draw_segments(axes, tables, colours, pale=colour_by != "share")
        _draw_disc(axes, tables.image.iloc[0], letter_pt)
        if colour_by == "class":
            _draw_class_legend(figure, (size[0] + 0.5 * letter) / total[0])
        elif norm is not None:
            low_left = ((size[0] + 1.5 * letter) / total[0], (foot + 0.05 * size[1]) / total[1])
            bar = figure.add_axes((*low_left, 1.5 * letter / total[0], 0.9 * size[1] / total[1]))
            _draw_colour_bar(figure, bar, norm, label, _beyond(values, norm))
        figure.text(
            0.5 * letter / total[0],
            0.5 * foot / total[1],
            "\n".join(caption),
            va="center",
            linespacing=LINE_SPACING,
        )
        length_um = round_length_um(BAR_SHARE * width * tables.pixel_size_um)
        length_px = length_um / tables.pixel_size_um * scale
        shown = f"{length_um / UM_PER_MM:g} mm" if length_um >= UM_PER_MM else f"{length_um:g} µm"
        _draw_scale_bar(figure, size[0] - length_px - 0.5 * letter, 0.5 * foot, length_px=length_px, label=shown)
        buffer = BytesIO()
        canvas.print_png(buffer, metadata={"Software": None})  # type: ignore[no-untyped-call]
    return buffer.getvalue()


def _class_colours(segments: pd.DataFrame) -> FloatArray:
    """Return the colour (n, 4) of each segment's class, grey where none is said."""
    colours = [mpl.colors.to_rgba(CLASS_COLOURS.get(word, GREY)) for word in segments["vessel_class"]]
    return np.array(colours, dtype=np.float64).reshape(-1, 4)


def _draw_class_legend(figure: Figure, left: float) -> None:
    """Name the colours beside the picture."""
    shown = {**CLASS_COLOURS, "not said": GREY}
    handles = [Patch(facecolor=colour, edgecolor="black", label=word) for word, colour in shown.items()]
    figure.legend(handles=handles, loc="center left", bbox_to_anchor=(left, 0.5), frameon=False, handlelength=1.0)


def _coloured_values(segments: pd.DataFrame, colour_by: ColourBy) -> FloatArray:
    def column(name: str) -> FloatArray:
        return segments[name].to_numpy(np.float64)

    if colour_by == "class":
        return np.full(len(segments), np.nan)
    if colour_by == "share":
        return 100.0 * column("resistance_share")
    if colour_by == "uncertainty":
        return 100.0 * column("radius_hydraulic_se_um") / column("radius_hydraulic_um")
    return column("radius_mean_um" if colour_by == "radius" else "resistance_pa_s_m3")


def _share_caption(tables: ImageTables) -> str:
    """Say what a share is, how few segments hold half, and what is grey."""
    solved = tables.networks[tables.networks["resistance_pa_s_m3"].notna()]
    if solved.empty:
        return " No network has a resistance, so no segment has a share of one: all are grey."
    longest = solved.sort_values("length_um", ascending=False, kind="stable").iloc[0]
    shares = tables.segments["resistance_share"]
    return (
        f" Where a change of radius changes the network's resistance most: {longest['n_half_resistance']} of the "
        f"{longest['n_segments']} segments of network {longest['network_id']} hold half of it."
        + (" Grey: no blood passes between inlets and outlets." if (shares.isna() | (shares == 0)).any() else "")
    )


def _caption(tables: ImageTables, colour_by: ColourBy, letters: int) -> list[str]:
    """Return the caption in lines of at most so many letters."""
    n_doubtful = int(_is_doubtful(tables.segments).sum())
    caption = f"{tables.image_id}: {len(tables.segments)} segments, coloured by {COLOURED[colour_by][1]}."
    if colour_by == "share":
        caption += _share_caption(tables)
    if n_doubtful:
        how = "With" if colour_by == "share" else "Pale with"
        caption += (
            f" {how} a broken outline: {n_doubtful} whose radius is doubtful, being cut by the rim of the picture, "
            "too thin for the pixels, or interpolated."
        )
    if "disc_x_px" in tables.image:
        caption += _disc_caption(tables.image.iloc[0])
    if len(tables.branchings):
        caption += " Lighter pieces at branchings lie inside the wider vessel and are not measured."
    return textwrap.wrap(caption, max(letters, 20))


def _disc_caption(image: "pd.Series[Any]") -> str:
    """Say what the circles are, and who told where the disc is."""
    told = "told by the sheet" if image["disc_source"] == "sheet" else "found in the image"
    sure = "" if image["disc_source"] == "sheet" else f" with a probability of {image['disc_confidence']:.2f}"
    return f" White circles: the margin of the optic disc, {told}{sure}; broken, the zone of the calibre equivalents."


def _draw_disc(axes: Axes, image: "pd.Series[Any]", letter_pt: float) -> None:
    """Draw the disc's margin and the limits of the zone around it, labelled where they run upwards."""
    if "disc_x_px" not in image:
        return
    x, y, height = float(image["disc_x_px"]), float(image["disc_y_px"]), float(image["height_px"])
    for column, label in (("disc_radius_px", "disc"), ("zone_inner_px", "zone"), ("zone_outer_px", "")):
        radius = float(image[column])
        for colour, width in (("black", 1.8), ("white", 0.9)):  # seen on bright and on dark ground
            dashes = (0.0, (DASH_PT[0] / width, DASH_PT[1] / width)) if column != "disc_radius_px" else "solid"
            circle = CirclePatch((x, y), radius, fill=False, edgecolor=colour, linewidth=width, linestyle=dashes)
            circle.set_alpha(DISC_OPACITY)
            axes.add_patch(circle)
        at = y - radius if y - radius > LABEL_LETTERS * letter_pt else y + radius
        if label and 0 <= at < height:
            axes.text(
                x, at, label, color="white", fontsize=LABEL_SIZE * letter_pt, ha="center", va="center", clip_on=True,
                bbox={"boxstyle": "round,pad=0.15", "facecolor": "black", "edgecolor": "none", "alpha": 0.5},
            )  # fmt: skip


def _drawing_scale(height: int, width: int) -> float:
    """Pixels of the drawing a pixel of the picture."""
    longest = max(height, width)
    if longest > LONGEST_SIDE:
        return LONGEST_SIDE / longest
    return max(1.0, SHORTEST_SIDE / longest)


def _draw_picture(axes: Axes, picture: AnyArray, scale: float) -> None:
    height, width = picture.shape
    shown: AnyArray = picture
    if scale < 0.5:  # means of blocks first: cheaper than the plotting library's own resampling
        shown = np.asarray(Image.fromarray(picture).reduce(int(1 / scale)))
    extent = (-0.5, width - 0.5, height - 0.5, -0.5)
    axes.imshow(shown, cmap="gray", vmin=0, vmax=255, extent=extent, aspect="auto", interpolation="nearest")
    axes.set_axis_off()


def _colour_map() -> ListedColormap:
    """Perceptually uniform and readable without red-green vision."""
    return ListedColormap(mpl.colormaps["viridis"](np.linspace(DARKEST, 1, 256)))


def _colour_range(values: FloatArray, segments: pd.DataFrame) -> Normalize | None:
    """Range of the colour bar; None where there is nothing to colour by.

    One false segment, far thinner or wider than all vessels, must not make the others look alike: doubtful segments
    have no say where there are others, and what is left counts by its length.
    """
    known = _is_known(values)
    sound = known & ~_is_doubtful(segments)
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
    known = values[_is_known(values)]
    if not known.size:
        return None
    return LogNorm(float(known.max()) / SHARES_SHOWN, float(known.max()), clip=True)


def _beyond(values: FloatArray, norm: Normalize) -> Literal["neither", "min", "max", "both"]:
    """Ends of the colour bar beyond which there are values."""
    known = values[_is_known(values)]
    below, above = bool((known < (norm.vmin or 0)).any()), bool((known > (norm.vmax or 0)).any())
    if below and above:
        return "both"
    return "min" if below else "max" if above else "neither"


def _is_known(values: FloatArray) -> BoolArray:
    return np.asarray(np.isfinite(values) & (values > 0))


def _draw_colour_bar(
    figure: Figure, place: Axes, norm: Normalize, label: str, beyond: Literal["neither", "min", "max", "both"]
) -> None:
    bar = figure.colorbar(ScalarMappable(norm, _colour_map()), cax=place, label=label, extend=beyond, extendfrac=0.03)
    if isinstance(norm, LogNorm):
        decades = np.log10(float(norm.vmax or 1) / float(norm.vmin or 1))
        bar.ax.yaxis.set_major_locator(LogLocator(subs=TICKS[min(int(decades), 2)]))
        bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        bar.ax.yaxis.set_minor_formatter(NullFormatter())


def _colours(values: FloatArray, norm: Normalize | None) -> FloatArray:
    """Return the colour (n, 4) of each value, grey where it is not known."""
    colours = np.tile(mpl.colors.to_rgba(GREY), (len(values), 1))
    if norm is not None:
        known = _is_known(values)
        colours[known] = _colour_map()(norm(values[known]))
    return colours


def _draw_segments(axes: Axes, tables: ImageTables, colours: FloatArray, *, pale: bool) -> None:
    """Draw all segments; `pale` tells whether doubtful ones recede: where shares are shown they may matter most."""
    doubtful = _is_doubtful(tables.segments)
    outlines = _ribbons(tables.points, tables.segments["n_points"].to_numpy(), tables.pixel_size_um)
    stubs, owners = _stubs(tables)
    _draw_outlines(axes, stubs, _lightened(colours[owners], WHITE_STUB), alpha=STUB)
    if pale:
        colours[doubtful] = _lightened(colours[doubtful], WHITE_PALE)
    for chosen, alpha, style in ((doubtful, PALE if pale else OPAQUE, (0, (3, 2))), (~doubtful, OPAQUE, "solid")):
        shapes = [outlines[i] for i in np.flatnonzero(chosen)]
        _draw_outlines(axes, shapes, colours[chosen], alpha=alpha, style=style)


def _lightened(colours: FloatArray, white: float) -> FloatArray:
    return white + (1 - white) * colours


def _draw_outlines(
    axes: Axes,
    outlines: list[FloatArray],
    colours: FloatArray,
    *,
    alpha: float,
    style: str | tuple[int, tuple[int, int]] | None = None,
) -> None:
    """Fill the outlines; they are edged where a style of line is given."""
    if not outlines:
        return
    faces = colours.copy()
    faces[:, 3] = alpha
    drawn = PolyCollection(
        outlines,
        facecolors=faces,
        edgecolors=colours if style else "none",
        linewidths=0.8 if style else 0.0,
        linestyles=[style or "solid"],
    )
    axes.add_collection(drawn, autolim=False)


def _stubs(tables: ImageTables) -> tuple[list[FloatArray], IntArray]:
    """Outline of each piece between a node and the segment that begins beyond its lumen; and the segment's index."""
    segments = tables.segments
    n_points = segments["n_points"].to_numpy(np.int64)
    last = np.cumsum(n_points) - 1
    points = tables.points[["x_px", "y_px"]].to_numpy(np.float64)
    radius_px = np.nan_to_num(tables.points["radius_um"].to_numpy(np.float64)) / tables.pixel_size_um
    nodes = tables.nodes[["x_px", "y_px"]].to_numpy(np.float64)
    outlines, owners = [], []
    for column, ends in (("node_a", last - n_points + 1), ("node_b", last)):
        for segment, (node, end) in enumerate(zip(segments[column].to_numpy(np.int64) - 1, ends, strict=True)):
            along = points[end] - nodes[node]
            length = float(np.hypot(*along))
            if length < LEAST_STUB_PX:
                continue
            across = np.array([-along[1], along[0]]) / length * radius_px[end]
            outlines.append(
                np.array([nodes[node] + across, points[end] + across, points[end] - across, nodes[node] - across])
            )
            owners.append(segment)
    return outlines, np.array(owners, dtype=np.int64)


def _ribbons(points: pd.DataFrame, n_points: AnyArray, pixel_size_um: float) -> list[FloatArray]:
    """Outline of each segment's lumen, (2 n, 2) x and y in pixels of the picture."""
    centre = points[["x_px", "y_px"]].to_numpy(np.float64)
    radius_px = np.nan_to_num(points["radius_um"].to_numpy(np.float64), nan=0.0) / pixel_size_um
    ends = np.cumsum(n_points)
    first, last = np.repeat(ends - n_points, n_points), np.repeat(ends - 1, n_points)
    index = np.arange(len(centre))
    along = centre[np.minimum(index + 1, last)] - centre[np.maximum(index - 1, first)]
    length = np.hypot(along[:, 0], along[:, 1])
    across = np.column_stack([-along[:, 1], along[:, 0]]) / np.where(length > 0, length, 1.0)[:, None]
    left, right = centre + across * radius_px[:, None], centre - across * radius_px[:, None]
    cuts = ends[:-1]
    return [np.concatenate([a, b[::-1]]) for a, b in zip(np.split(left, cuts), np.split(right, cuts), strict=True)]


def _is_doubtful(segments: pd.DataFrame) -> BoolArray:
    wanted = {code(flag) for flag in DOUBTFUL}
    return np.array([not wanted.isdisjoint(text.split(";")) for text in segments["flags"]], dtype=bool)


def round_length_um(longest_um: float) -> float:
    """Return the greatest of 1, 2, 5 times a power of ten that is not above `longest_um`."""
    decade = 10.0 ** np.floor(np.log10(longest_um))
    return float(max(step * decade for step in (1.0, 2.0, 5.0) if step * decade <= longest_um))


def _draw_scale_bar(figure: Figure, left_px: float, middle_px: float, *, length_px: float, label: str) -> None:
    """Draw the bar below the picture, where it hides nothing; positions in pixels of the drawing."""
    wide, high = figure.get_size_inches() * DPI
    left, right, middle = left_px / wide, (left_px + length_px) / wide, middle_px / high
    figure.add_artist(Line2D([left, right], [middle, middle], color="black", linewidth=4, solid_capstyle="butt"))
    figure.text(left - 6 / wide, middle, label, ha="right", va="center")
