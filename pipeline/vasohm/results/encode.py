"""From what is held in memory to the bytes of a file; the same input gives the same bytes. Opens no file."""

import csv
import json
import math
import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from io import BytesIO, StringIO
from typing import Any

import networkx as nx
import numpy as np
import pandas as pd
import tifffile

from vasohm.arrays import AnyArray, BoolArray
from vasohm.image.blocks import is_on_disk, release
from vasohm.results.cells import table_rows
from vasohm.results.column import Column

UM_PER_CM = 1e4
ROWS_AT_ONCE = 20_000
TILE_PX = 256  # of masks that do not fit into memory
_NOT_XML = re.compile("[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")  # XML 1.0, production 2


def csv_bytes(rows: Sequence[Sequence[str]], names: Sequence[str]) -> bytes:
    """Encode a table of texts: UTF-8, one header line, lines end in a line feed."""
    return _lines([names, *rows])


def _lines(rows: Iterable[Sequence[str]]) -> bytes:
    text = StringIO(newline="")
    csv.writer(text, lineterminator="\n").writerows(rows)
    return text.getvalue().encode()


def frame_bytes(frame: pd.DataFrame, columns: Sequence[Column]) -> bytes:
    """Encode a data frame as CSV, in the order of the columns."""
    return b"".join(frame_pieces(frame, columns))


def frame_pieces(frame: pd.DataFrame, columns: Sequence[Column]) -> Iterator[bytes]:
    """Encode a data frame as CSV some thousand rows at a time."""
    yield csv_bytes((), [column.name for column in columns])
    for start in range(0, len(frame), ROWS_AT_ONCE):
        rows = table_rows(frame.iloc[start : start + ROWS_AT_ONCE], columns)
        yield _lines(rows)


def json_bytes(content: Mapping[str, Any]) -> bytes:
    """Encode as JSON without NaN: a key whose value is NaN is left out, in a list it becomes null.

    Raises
    ------
    TypeError, ValueError : a value that JSON cannot hold, such as a path or an infinity.
    """
    return (json.dumps(_plain(content), allow_nan=False, ensure_ascii=False, indent=1) + "\n").encode()


def _plain(value: Any) -> Any:
    if isinstance(value, Mapping):
        return {str(key): _plain(held) for key, held in value.items() if not _is_nan(held)}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [None if _is_nan(held) else _plain(held) for held in value]
    if isinstance(value, np.generic):
        return value.item()
    return value


def _is_nan(value: Any) -> bool:
    return isinstance(value, float | np.floating) and math.isnan(value)


def mask_bytes(mask: BoolArray, pixel_size_um: float) -> bytes:
    """Encode a mask as TIFF, 0 and 255, with its scale in pixels a centimetre: the classic tags know no micrometre.

    One that lies on disk is written in tiles.
    """
    large = is_on_disk(mask)
    buffer = BytesIO()
    tifffile.imwrite(
        buffer,
        _tiles(mask) if large else _grey(mask),
        shape=mask.shape,
        dtype=np.uint8,
        tile=(TILE_PX, TILE_PX) if large else None,
        photometric="minisblack",
        compression="zlib",
        predictor=False,
        resolution=(UM_PER_CM / pixel_size_um, UM_PER_CM / pixel_size_um),
        resolutionunit="CENTIMETER",
        software=False,
        datetime=False,
        metadata=None,
    )
    release(mask)
    return buffer.getvalue()


def _grey(mask: BoolArray) -> AnyArray:
    return mask.astype(np.uint8) * np.uint8(255)


def _tiles(mask: BoolArray) -> Iterator[AnyArray]:
    for top in range(0, mask.shape[0], TILE_PX):
        rows = _grey(mask[top : top + TILE_PX])
        release(mask)
        for left in range(0, mask.shape[1], TILE_PX):
            tile = rows[:, left : left + TILE_PX]
            yield np.pad(tile, [(0, TILE_PX - n) for n in tile.shape])


def graphml_bytes(graph: "nx.MultiGraph[int]") -> bytes:
    """Encode a graph as GraphML with typed keys; characters that XML cannot hold are taken out."""
    clean: nx.MultiGraph[int] = nx.MultiGraph(**_xml_safe(graph.graph))
    clean.add_nodes_from((node, _xml_safe(held)) for node, held in graph.nodes(data=True))
    for a, b, key, held in graph.edges(keys=True, data=True):
        clean.add_edge(a, b, key, **_xml_safe(held))
    buffer = BytesIO()
    nx.write_graphml_xml(clean, buffer, prettyprint=True)
    return buffer.getvalue()


def _xml_safe(held: Mapping[str, Any]) -> dict[str, Any]:
    return {key: _NOT_XML.sub("", value) if isinstance(value, str) else value for key, value in held.items()}
