"""From what is held in memory to the bytes of a file; the same input gives the same bytes. Opens no file."""

import csv
import json
import math
import re
from collections.abc import Mapping, Sequence
from io import BytesIO, StringIO
from typing import Any

import networkx as nx
import numpy as np
import pandas as pd
import tifffile

from vasohm.arrays import BoolArray
from vasohm.results.cells import table_rows
from vasohm.results.column import Column

UM_PER_CM = 1e4
_NOT_XML = re.compile("[^\t\n\r\x20-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]")  # XML 1.0, production 2


def csv_bytes(rows: Sequence[Sequence[str]], names: Sequence[str]) -> bytes:
    """Encode a table of texts: UTF-8, one header line, lines end in a line feed."""
    text = StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(names)
    writer.writerows(rows)
    return text.getvalue().encode()


def frame_bytes(frame: pd.DataFrame, columns: Sequence[Column]) -> bytes:
    """Encode a data frame as CSV, in the order of the columns."""
    return csv_bytes(table_rows(frame, columns), [column.name for column in columns])


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
    """Encode a mask as TIFF, 0 and 255, with its scale in pixels a centimetre: the classic tags know no micrometre."""
    buffer = BytesIO()
    tifffile.imwrite(
        buffer,
        np.where(mask, 255, 0).astype(np.uint8),
        photometric="minisblack",
        compression="zlib",
        predictor=False,
        resolution=(UM_PER_CM / pixel_size_um, UM_PER_CM / pixel_size_um),
        resolutionunit="CENTIMETER",
        software=False,
        datetime=False,
        metadata=None,
    )
    return buffer.getvalue()


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
