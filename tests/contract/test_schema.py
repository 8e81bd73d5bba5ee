"""The output columns as the interface promises them: names, order, units, meanings. Scripts of others read these."""

import json
from collections.abc import Collection

import pytest
from frictionless import Schema

from vasohm.errors import DomainError
from vasohm.results.column import Column
from vasohm.results.columns_images import DISC
from vasohm.results.schema import (
    COLUMNS,
    FURTHER_COLUMNS,
    PRIMARY_KEYS,
    column_names,
    describe,
    image_columns,
    table_schema,
)

# Typed from the documented interface, not from the code.
PROMISED = {
    "segments": """image_id, segment_id, network_id, node_a, node_b, vessel_class, class_probability, n_points,
        length_um, length_se_um, chord_um, tortuosity, curvature_rad,
        squared_curvature_per_um, inflections, radius_mean_um, radius_sd_um, radius_hydraulic_um,
        radius_hydraulic_se_um, hematocrit, hematocrit_tube, viscosity_mpa_s, resistance_pa_s_m3, resistance_lo_pa_s_m3,
        resistance_hi_pa_s_m3, ln_resistance_random_se, ln_resistance_shared_se, flow_nl_min, pressure_a_mmhg,
        pressure_b_mmhg, velocity_mm_s, transit_s, wall_shear_pa, wall_shear_rate_per_s, reynolds, womersley,
        resistance_share, order_strahler, order_diameter, flags""",
    "points": "image_id, segment_id, point, s_um, x_px, y_px, radius_um, radius_se_um, contrast, flags",
    "nodes": "image_id, node_id, network_id, x_px, y_px, kind, degree, role, pressure_mmhg",
    "crossings": "image_id, x_px, y_px, segment_over, segment_under, probability",
    "networks": """image_id, network_id, vessel_class, class_probability, n_segments, n_branchings, n_inlets, n_outlets,
        terminals, length_um, area_um2, volume_um3, loops, resistance_pa_s_m3, resistance_lo_pa_s_m3,
        resistance_hi_pa_s_m3, ln_resistance_random_se, ln_resistance_shared_se, n_half_resistance, flow_nl_min,
        hematocrit_turns, flags""",
    "scenarios": """image_id, network_id, scenario, n_segments_changed, radius_factor, resistance_before_pa_s_m3,
        resistance_after_pa_s_m3, ratio, ratio_lo, ratio_hi, flags""",
    "branchings": """image_id, node_id, network_id, vessel_class, parent_segment, child_1_segment, child_2_segment,
        parent_by, radius_parent_um, radius_parent_se_um, radius_child_1_um, radius_child_1_se_um, radius_child_2_um,
        radius_child_2_se_um, angle_1_deg, angle_1_se_deg, angle_2_deg, angle_2_se_deg, angle_total_deg,
        angle_total_se_deg, area_ratio, area_ratio_se, asymmetry, asymmetry_se, junction_exponent, junction_exponent_se,
        murray_ratio, murray_ratio_se, volume_angle_1_deg, volume_angle_1_se_deg, volume_angle_2_deg,
        volume_angle_2_se_deg, surface_angle_1_deg, surface_angle_1_se_deg, surface_angle_2_deg, surface_angle_2_se_deg,
        volume_imbalance, surface_imbalance, flags""",
    "orders": """image_id, network_id, vessel_class, scheme, order, n_segments, n_elements, length_um, length_sd_um,
        radius_um, radius_sd_um, resistance_series_pa_s_m3, ln_resistance_series_random_se,
        ln_resistance_series_shared_se, resistance_parallel_pa_s_m3, ln_resistance_parallel_random_se,
        ln_resistance_parallel_shared_se""",
    "horton": """image_id, network_id, vessel_class, scheme, highest_order, bifurcation_ratio, bifurcation_ratio_se,
        length_ratio, length_ratio_se, radius_ratio, radius_ratio_se, flags""",
    "classes": """image_id, vessel_class, from_um, to_um, n_segments, length_um, length_density_per_mm, area_density,
        diameter_index_um, radius_mean_um, tortuosity_mean, curvature_per_mm, squared_curvature_per_mm2,
        inflections_per_mm, tissue_distance_mean_um, tissue_distance_sd_um, tissue_distance_p05_um,
        tissue_distance_median_um, tissue_distance_p95_um, tissue_unseen_fraction, box_dimension, box_dimension_se,
        box_least_px, box_most_px, lacunarity""",
    "scales": "image_id, vessel_class, edge_px, edge_um, n_occupied, lacunarity",
    "image": """image_id, status, width_px, height_px, pixel_size_um, pixel_size_se_um, pixel_size_source,
        magnification, pixel_size_before_um, fov_area_um2,
        vessel_area_um2, vessel_area_fraction, length_um, length_density_per_mm, diameter_index_um, n_segments,
        n_branchings, n_ends, n_networks, radius_mean_um, tortuosity_mean, curvature_per_mm, squared_curvature_per_mm2,
        inflections_per_mm,
        tissue_distance_mean_um, tissue_distance_sd_um, tissue_distance_p05_um, tissue_distance_median_um,
        tissue_distance_p95_um, tissue_unseen_fraction, avascular_area_um2, avascular_radius_um, avascular_x_px,
        avascular_y_px, box_dimension, box_dimension_se, box_least_px, box_most_px, lacunarity, profile,
        blur_px, blur_se_px, noise, contrast, saturated_fraction, invalid_fraction, focus_ok, exposure_ok, flags""",
    "failures": "image_id, stage, error, message",
}

# Unit that the end of a name stands for, in UCUM (ucum.org; `[px]` and `um` with a Greek letter are not valid there).
SUFFIX_UNITS = {
    "_pa_s_m3": "Pa.s/m3",
    "_mpa_s": "mPa.s",
    "_nl_min": "nL/min",
    "_mmhg": "mm[Hg]",
    "_per_mm2": "/mm2",
    "_per_mm": "/mm",
    "_per_um": "/um",
    "_rad": "rad",
    "_um2": "um2",
    "_um3": "um3",
    "_deg": "deg",
    "_um": "um",
    "_px": "{pixel}",
    "_pa": "Pa",
    "_mm_s": "mm/s",
    "_per_s": "/s",
    "_s": "s",
}
# Ratios and counts; intensities in the picture's own units; what is compared, in the unit of its own column.
NO_SUFFIX_UNITS = {"1", "{signal}", "{outcome}"}


def all_columns() -> Collection[Column]:
    return {
        id(column): column for columns in (*COLUMNS.values(), DISC, *FURTHER_COLUMNS.values()) for column in columns
    }.values()


@pytest.mark.parametrize("table", PROMISED)
def test_columns_are_those_promised(table: str) -> None:
    """A script that reads a column by name or place would break."""
    assert list(column_names(table)) == [name.strip() for name in PROMISED[table].split(",")]
    assert set(COLUMNS) == set(PROMISED)


def test_every_column_has_a_meaning_of_its_own() -> None:
    """Two columns with one description: one of them is described wrongly."""
    meanings = [column.meaning for column in all_columns()]
    assert all(meaning.endswith(".") and len(meaning) > 10 for meaning in meanings)
    assert len(set(meanings)) == len(meanings)


def test_unit_is_the_one_in_the_name() -> None:
    """A name that says µm over a column in mm would put a factor of 1000 into somebody's resistance."""
    for column in all_columns():
        if column.type in ("string", "boolean", "list"):
            assert column.unit == "", column.name
            continue
        plain = column.name.replace("_se_", "_").replace("_lo_", "_").replace("_hi_", "_")
        unit = next((unit for end, unit in SUFFIX_UNITS.items() if plain.endswith(end)), None)
        assert column.unit == unit if unit else column.unit in NO_SUFFIX_UNITS, column.name


@pytest.mark.parametrize("table", PROMISED)
def test_schema_is_a_valid_table_schema(table: str) -> None:
    """Other tools could not read the tables by their description. Checked by the reference library frictionless."""
    descriptor = json.loads(json.dumps(table_schema(COLUMNS[table], PRIMARY_KEYS.get(table, ()))))
    schema = Schema.from_descriptor(descriptor)
    assert schema.field_names == list(column_names(table))
    assert all(field.description for field in schema.fields)


def test_description_lists_every_column_once() -> None:
    """`vasohm columns` would leave a column of the results unexplained."""
    told = [(entry["table"], entry["name"]) for entry in describe()]
    assert len(set(told)) == len(told)
    written = {(table, column.name) for table, held in (COLUMNS | FURTHER_COLUMNS).items() for column in held}
    assert written | {("image", column.name) for column in DISC} == set(told)


def test_a_sheet_column_with_the_name_of_ours_is_refused() -> None:
    """Two columns of one name: whoever reads the table gets one of them at random."""
    names = [column.name for column in image_columns(["subject", "age_years"], with_disc=False)]
    assert names == [*column_names("image"), "subject", "age_years"]
    with pytest.raises(DomainError, match="'length_um' of the image sheet has the name of an output column"):
        image_columns(["subject", "length_um"], with_disc=False)
