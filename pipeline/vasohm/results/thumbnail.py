"""A small picture of an image and its segments, for the study's page."""

from io import BytesIO

import numpy as np
from PIL import Image, ImageDraw

from vasohm.arrays import AnyArray
from vasohm.results.colouring import ColourBy, class_colours, coloured_values, colours_span, value_colours
from vasohm.results.overlay import ribbons
from vasohm.results.tables import ImageTables

LONGEST_SIDE = 320  # pixels: twice the size it is shown at, for screens of high density
FINER = 2  # drawn so much larger first, so that edges are smooth
QUALITY = 80  # of JPEG
OPACITY = 0.8


def draw_thumbnail(tables: ImageTables, colour_by: ColourBy) -> bytes:
    """Draw the segments in colour on the grey picture, as a JPEG; the same tables give the same bytes."""
    height, width = tables.picture.shape
    scale = FINER * LONGEST_SIDE / max(height, width)
    size = (max(FINER, round(width * scale)), max(FINER, round(height * scale)))
    ground = Image.fromarray(tables.picture).resize(size, Image.Resampling.BOX).convert("RGB")
    paint = ground.copy()
    brush = ImageDraw.Draw(paint)
    for outline, colour in zip(_outlines(tables), _colours(tables, colour_by), strict=True):
        told = tuple(int(one) for one in colour)
        points = [(float(x), float(y)) for x, y in (outline + 0.5) * scale]
        brush.polygon(points, fill=told, outline=told)
    drawn = Image.blend(ground, paint, OPACITY)
    drawn.thumbnail((LONGEST_SIDE, LONGEST_SIDE), Image.Resampling.BOX)
    buffer = BytesIO()
    drawn.save(buffer, "JPEG", quality=QUALITY)
    return buffer.getvalue()


def _outlines(tables: ImageTables) -> list[AnyArray]:
    if tables.segments.empty:
        return []
    return list(ribbons(tables.points, tables.segments["n_points"].to_numpy(), tables.pixel_size_um))


def _colours(tables: ImageTables, colour_by: ColourBy) -> AnyArray:
    segments = tables.segments
    values = coloured_values(segments, colour_by)
    colours = (
        class_colours(segments)
        if colour_by == "class"
        else value_colours(values, colours_span(values, segments, colour_by))
    )
    return np.rint(255 * colours[:, :3]).astype(int)
