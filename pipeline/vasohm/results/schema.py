"""Every output column once: its table, name, type, unit and meaning."""

from collections.abc import Iterable, Mapping
from typing import Any

from vasohm.errors import DomainError
from vasohm.results.column import Column, text
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.results.columns_cohorts import COHORTS, COHORTS_KEYS, COHORTS_MEANING, ZONE
from vasohm.results.columns_images import DISC, FAILURES, IMAGE, NETWORKS, SCENARIOS
from vasohm.results.columns_pairs import PAIRED, PAIRED_KEYS, PAIRED_MEANING
from vasohm.results.columns_shape import BRANCHINGS, CLASS_SHAPES, HORTON, ORDERS, SCALES
from vasohm.results.columns_vessels import CROSSINGS, NODES, POINTS, SEGMENTS

SCHEMA_VERSION = 7  # goes up with every change of a column

COLUMNS: Mapping[str, tuple[Column, ...]] = {
    "image": IMAGE,
    "networks": NETWORKS,
    "segments": SEGMENTS,
    "nodes": NODES,
    "points": POINTS,
    "branchings": BRANCHINGS,
    "orders": ORDERS,
    "horton": HORTON,
    "classes": CLASS_SHAPES,
    "scales": SCALES,
    "crossings": CROSSINGS,
    "scenarios": SCENARIOS,
    "failures": FAILURES,
}

# Tables that a command other than `measure` writes into a folder of its own.
FURTHER_COLUMNS: Mapping[str, tuple[Column, ...]] = {**APPRAISAL, **COHORTS, "zone": ZONE, **PAIRED}

TABLE_MEANING: Mapping[str, str] = {
    "image": "One row an image: morphometry and quality; the sheet's own columns follow.",
    "networks": "One row a connected network.",
    "segments": "One row a vessel segment.",
    "nodes": "One row a node: an end, a rim, a branching or the seam of a ring.",
    "points": "One row a centreline point, ordered from node_a to node_b of its segment.",
    "branchings": "One row a bifurcation.",
    "orders": "One row an order of the vessels of a tree, by Strahler and by diameter.",
    "horton": "One row a network and scheme: how number, length and radius go on from order to order.",
    "classes": "One row a class of vessels, all together first, and a class of calibre within it.",
    "scales": "One row an edge of the boxes that box dimension and lacunarity come from.",
    "crossings": "One row a place where two vessels merely cross in the picture.",
    "scenarios": "One row a network and scenario: what becomes of its resistance when some radii change.",
    "failures": "One row an image that could not be measured.",
    **COHORTS_MEANING,
    **PAIRED_MEANING,
}

PRIMARY_KEYS: Mapping[str, tuple[str, ...]] = {
    "image": ("image_id",),
    "networks": ("image_id", "network_id"),
    "segments": ("image_id", "segment_id"),
    "nodes": ("image_id", "node_id"),
    "points": ("image_id", "segment_id", "point"),
    "branchings": ("image_id", "node_id"),
    "orders": ("image_id", "network_id", "scheme", "order"),
    "horton": ("image_id", "network_id", "scheme"),
    "scales": ("image_id", "vessel_class", "edge_px"),
    "scenarios": ("image_id", "network_id", "scenario"),
    "failures": ("image_id",),
    **COHORTS_KEYS,
    **PAIRED_KEYS,
}

GATHERED: Mapping[str, str] = {  # file at the root: the table whose rows it collects
    "images_all.csv": "image",
    "networks_all.csv": "networks",
    "segments_all.csv": "segments",
    "branchings_all.csv": "branchings",
    "orders_all.csv": "orders",
    "horton_all.csv": "horton",
    "classes_all.csv": "classes",
    "crossings_all.csv": "crossings",
    "scenarios_all.csv": "scenarios",
}

OWN_IMAGE_NAMES = frozenset(column.name for column in IMAGE + DISC)


# Tables whose numbers give one value an image and class, so that cohorts can be compared in them.
OUTCOME_TABLES = ("image", "networks", "segments", "zone")


def outcome_columns(table: str) -> tuple[Column, ...]:
    """Columns of a table of outcomes; of images those of an optic disc too."""
    return {**COLUMNS, "image": IMAGE + DISC, "zone": ZONE}[table]


def column_names(table: str) -> tuple[str, ...]:
    """Names of a table's columns in their order; for `image` without those of an optic disc and of the sheet."""
    return tuple(column.name for column in COLUMNS[table])


def image_columns(design: Iterable[str], *, with_disc: bool) -> tuple[Column, ...]:
    """Columns of image.csv: its own, those of an optic disc where there is one, then the sheet's.

    Raises
    ------
    DomainError : a column of the sheet has the name of one of ours.
    """
    carried = []
    for name in design:
        if name in OWN_IMAGE_NAMES:
            msg = f"column {name!r} of the image sheet has the name of an output column. Rename it in the sheet."
            raise DomainError(msg)
        carried.append(text(name, f"Column {name} of the image sheet, as it stands there."))
    return IMAGE + (DISC if with_disc else ()) + tuple(carried)


def describe() -> list[dict[str, str]]:
    """Return one entry a column of every table: table, name, type, unit and meaning, in the order of the tables."""
    tables = dict(COLUMNS, image=IMAGE + DISC) | dict(FURTHER_COLUMNS)
    return [
        {"table": table, "name": c.name, "type": c.type, "unit": c.unit, "meaning": c.meaning}
        for table, columns in tables.items()
        for c in columns
    ]


def table_schema(columns: Iterable[Column], key: Iterable[str] = ()) -> dict[str, Any]:
    """Frictionless Table Schema (datapackage.org, version 2) of the columns; units stand under the extra key `unit`."""
    fields = []
    for column in columns:
        field: dict[str, Any] = {"name": column.name, "type": column.type, "description": column.meaning}
        if column.type == "list":
            field["delimiter"] = ";"
        if column.unit:
            field["unit"] = column.unit
            field["unitSystem"] = "UCUM"
        if column.words:
            field["constraints"] = {"enum": list(column.words)}
        fields.append(field)
    schema: dict[str, Any] = {"fields": fields, "missingValues": [""]}
    if list(key):
        schema["primaryKey"] = list(key)
    return schema
