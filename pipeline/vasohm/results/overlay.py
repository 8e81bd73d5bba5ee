"""What was measured, drawn on the picture: from the tables, so that the picture shows what the files say."""

import textwrap
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from io import BytesIO
from typing import Any, Literal

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_pdf import FigureCanvasPdf
from matplotlib.cm import ScalarMappable
from matplotlib.collections import PolyCollection
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Circle as CirclePatch
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter
from PIL import Image

from vasohm.arrays import AnyArray, FloatArray, IntArray
from vasohm.results.colouring import (
    CLASS_COLOURS,
    COLOURED,
    GREY,
    ColourBy,
    class_colours,
    colour_map,
    coloured_values,
    colours_span,
    is_doubtful,
    is_known,
    value_colours,
)
from vasohm.results.tables import ImageTables
from vasohm.units import UM_PER_MM

OPAQUE, PALE, STUB = 0.75, 0.5, 0.6  # opacity of sound segments, of doubtful ones, of stubs inside a parent
WHITE_PALE, WHITE_STUB = 0.65, 0.35  # this share of their colour is white: over a dark vessel they are light too
LEAST_STUB_PX = 0.5  # a shorter gap between a node and a segment's first point does not show
LETTER_WIDTH = 0.55  # of a letter's height, on average
CAPTION_SHARE = 0.65  # of the width; the rest is the scale bar's
LINE_SPACING = 1.4  # of a letter's height
LONGEST_SIDE = 2000  # pixels of the drawing
SHORTEST_SIDE = 900  # a small picture is enlarged so that labels do not hide it
DPI = 100
BAR_LETTERS = 9.5  # letters' room beside the picture for the colour bar
LINE_PT, PRINT_LINE_PT = 0.8, 0.4  # width of outlines
COMPRESSION = 3  # of zlib's 9: half the time of the usual 6 for a file a tenth larger
PRINT_WIDTH_MM, PRINT_DPI, PRINT_LETTER_PT = 170.0, 300, 7.0  # two columns of a journal; common practice, no source
MM_PER_INCH = 25.4
BAR_SHARE = 0.2  # the scale bar is at most this share of the width
TICKS = ((1.0, 1.5, 2.0, 3.0, 5.0, 7.0), (1.0, 2.0, 5.0), (1.0,))  # within one decade, two, and more
DISC_OPACITY = 0.8
DASH_PT = (7.0, 4.0)  # on and off, of a broken circle
LABEL_SIZE, LABEL_LETTERS = 0.8, 2.0  # of a letter: a circle's label, and the room above that it needs


@dataclass(frozen=True, slots=True)
class _Sheet:
    """Sizes of the drawing, in pixels of 1/DPI inch."""

    wide: int  # of the picture on it
    high: int
    letter_pt: float
    caption: tuple[str, ...]

    @property
    def letter(self) -> float:
        return self.letter_pt * DPI / 72

    @property
    def foot(self) -> int:
        """Room below the picture."""
        return round((1.6 + LINE_SPACING * len(self.caption)) * self.letter)

    @property
    def total(self) -> FloatArray:
        return np.array([self.wide + round(BAR_LETTERS * self.letter), self.high + self.foot], dtype=np.float64)


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
    wide, high = max(round(width * scale), 1), max(round(height * scale), 1)
    sheet = _sheet(tables, colour_by, wide, high, letter_pt=max(max(wide, high) / 130, 8.0))
    with _drawing_rules(sheet):
        figure, axes = _blank(sheet)
        renderer = FigureCanvasAgg(figure).get_renderer()  # type: ignore[no-untyped-call]
        ground = np.asarray(
            renderer.buffer_rgba()
        )  # the picture goes in as it is: resampling costs half of the drawing
        ground[:] = 255
        shown = Image.fromarray(tables.picture).resize((wide, high), Image.Resampling[_how(scale)])
        ground[:high, :wide, :3] = np.asarray(shown)[:, :, None]
        figure.patch.set_visible(False)
        _draw(figure, axes, tables, colour_by, sheet, line_pt=LINE_PT)
        figure.draw(renderer)
        drawn = Image.fromarray(ground[:, :, :3])
        buffer = BytesIO()
        drawn.save(buffer, "PNG", compress_level=COMPRESSION, dpi=(DPI, DPI))
    return buffer.getvalue()


def draw_for_print(tables: ImageTables, colour_by: ColourBy = "radius") -> bytes:
    """Draw the same for print: 170 mm wide, the picture at no more than 300 dots an inch, all else as vectors and text.

    Returns
    -------
    A PDF with its fonts embedded; the same tables give the same bytes.
    """
    height, width = tables.picture.shape
    wide = round(PRINT_WIDTH_MM / MM_PER_INCH * DPI - BAR_LETTERS * PRINT_LETTER_PT * DPI / 72)
    sheet = _sheet(tables, colour_by, wide, max(round(wide * height / width), 1), letter_pt=PRINT_LETTER_PT)
    with _drawing_rules(sheet):
        mpl.rcParams["pdf.fonttype"] = 42  # fonts as TrueType: text stays text in other programs
        figure, axes = _blank(sheet)
        most = (wide * PRINT_DPI // DPI, sheet.high * PRINT_DPI // DPI)
        picture = Image.fromarray(tables.picture)
        if width > most[0]:
            picture = picture.resize(most, Image.Resampling.BOX)
        extent = (-0.5, width - 0.5, height - 0.5, -0.5)
        axes.imshow(np.asarray(picture), "gray", vmin=0, vmax=255, extent=extent, aspect="auto", interpolation="none")
        _draw(figure, axes, tables, colour_by, sheet, line_pt=PRINT_LINE_PT)
        buffer = BytesIO()
        no_dates = {"CreationDate": None, "Producer": None, "Creator": None}
        FigureCanvasPdf(figure).print_pdf(buffer, metadata=no_dates)  # type: ignore[no-untyped-call]
    return buffer.getvalue()


def _sheet(tables: ImageTables, colour_by: ColourBy, wide: int, high: int, *, letter_pt: float) -> _Sheet:
    letters = int(CAPTION_SHARE * wide / (LETTER_WIDTH * letter_pt * DPI / 72))  # margins grow with the letters
    return _Sheet(wide, high, letter_pt, tuple(_caption(tables, colour_by, letters)))


@contextmanager
def _drawing_rules(sheet: _Sheet) -> Iterator[None]:
    """Draw by the library's own defaults, whatever the person's machine says."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams["font.size"] = sheet.letter_pt
        yield


def _blank(sheet: _Sheet) -> tuple[Figure, Axes]:
    """Make the figure and the axes of the picture on it."""
    figure = Figure(figsize=tuple(sheet.total / DPI), dpi=DPI, facecolor="white")
    axes = figure.add_axes((0, sheet.foot / sheet.total[1], sheet.wide / sheet.total[0], sheet.high / sheet.total[1]))
    return figure, axes


def _draw(
    figure: Figure, axes: Axes, tables: ImageTables, colour_by: ColourBy, sheet: _Sheet, *, line_pt: float
) -> None:
    """Draw everything but the picture."""
    height, width = tables.picture.shape
    total, letter = sheet.total, sheet.letter
    axes.set_xlim(-0.5, width - 0.5)
    axes.set_ylim(height - 0.5, -0.5)
    axes.set_axis_off()
    values = coloured_values(tables.segments, colour_by)
    norm = colours_span(values, tables.segments, colour_by)
    colours = class_colours(tables.segments) if colour_by == "class" else value_colours(values, norm)
    _draw_segments(axes, tables, colours, pale=colour_by != "share", line_pt=line_pt)
    _draw_disc(axes, tables.image.iloc[0], sheet.letter_pt)
    if colour_by == "class":
        _draw_class_legend(figure, set(tables.segments["vessel_class"]), (sheet.wide + 0.5 * letter) / total[0])
    elif norm is not None:
        low_left = ((sheet.wide + 1.5 * letter) / total[0], (sheet.foot + 0.05 * sheet.high) / total[1])
        bar = figure.add_axes((*low_left, 1.5 * letter / total[0], 0.9 * sheet.high / total[1]))
        _draw_colour_bar(figure, bar, norm, COLOURED[colour_by][0], _beyond(values, norm))
    at = (0.5 * letter / total[0], 0.5 * sheet.foot / total[1])
    figure.text(*at, "\n".join(sheet.caption), va="center", linespacing=LINE_SPACING)
    length_um = round_length_um(BAR_SHARE * width * tables.pixel_size_um)
    length_px = length_um / tables.pixel_size_um * sheet.wide / width
    shown = f"{length_um / UM_PER_MM:g} mm" if length_um >= UM_PER_MM else f"{length_um:g} µm"
    left = sheet.wide - length_px - 0.5 * letter
    _draw_scale_bar(figure, left, 0.5 * sheet.foot, length_px=length_px, label=shown)


def _draw_class_legend(figure: Figure, there: set[str], left: float) -> None:
    """Name the colours of the classes that are there beside the picture."""
    shown = {word: colour for word, colour in CLASS_COLOURS.items() if word in there}
    if there - set(CLASS_COLOURS):
        shown["not said"] = GREY
    handles = [Patch(facecolor=colour, edgecolor="black", label=word) for word, colour in shown.items()]
    figure.legend(handles=handles, loc="center left", bbox_to_anchor=(left, 0.5), frameon=False, handlelength=1.0)


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
    n_doubtful = int(is_doubtful(tables.segments).sum())
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


def _how(scale: float) -> str:
    """Name the way to change the picture's size: enlarged it keeps its pixels, made smaller it takes their means."""
    return "NEAREST" if scale >= 1 else "BOX"


def _beyond(values: FloatArray, norm: Normalize) -> Literal["neither", "min", "max", "both"]:
    """Ends of the colour bar beyond which there are values."""
    known = values[is_known(values)]
    below, above = bool((known < (norm.vmin or 0)).any()), bool((known > (norm.vmax or 0)).any())
    if below and above:
        return "both"
    return "min" if below else "max" if above else "neither"


def _draw_colour_bar(
    figure: Figure, place: Axes, norm: Normalize, label: str, beyond: Literal["neither", "min", "max", "both"]
) -> None:
    bar = figure.colorbar(ScalarMappable(norm, colour_map()), cax=place, label=label, extend=beyond, extendfrac=0.03)
    if isinstance(norm, LogNorm):
        decades = np.log10(float(norm.vmax or 1) / float(norm.vmin or 1))
        bar.ax.yaxis.set_major_locator(LogLocator(subs=TICKS[min(int(decades), 2)]))
        bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        bar.ax.yaxis.set_minor_formatter(NullFormatter())


def _draw_segments(axes: Axes, tables: ImageTables, colours: FloatArray, *, pale: bool, line_pt: float) -> None:
    """Draw all segments; `pale` tells whether doubtful ones recede: where shares are shown they may matter most."""
    doubtful = is_doubtful(tables.segments)
    outlines = ribbons(tables.points, tables.segments["n_points"].to_numpy(), tables.pixel_size_um)
    inner, owners = stubs(tables)
    _draw_outlines(axes, inner, _lightened(colours[owners], WHITE_STUB), alpha=STUB)
    if pale:
        colours[doubtful] = _lightened(colours[doubtful], WHITE_PALE)
    for chosen, alpha, style in ((doubtful, PALE if pale else OPAQUE, (0, (3, 2))), (~doubtful, OPAQUE, "solid")):
        shapes = [outlines[i] for i in np.flatnonzero(chosen)]
        _draw_outlines(axes, shapes, colours[chosen], alpha=alpha, style=style, line_pt=line_pt)


def _lightened(colours: FloatArray, white: float) -> FloatArray:
    return white + (1 - white) * colours


def _draw_outlines(
    axes: Axes,
    outlines: list[FloatArray],
    colours: FloatArray,
    *,
    alpha: float,
    style: str | tuple[int, tuple[int, int]] | None = None,
    line_pt: float = 0.0,
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
        linewidths=line_pt,
        linestyles=[style or "solid"],
    )
    axes.add_collection(drawn, autolim=False)


def stubs(tables: ImageTables) -> tuple[list[FloatArray], IntArray]:
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


def ribbons(points: pd.DataFrame, n_points: AnyArray, pixel_size_um: float) -> list[FloatArray]:
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
