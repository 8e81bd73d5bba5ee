"""What lies in the output folder, byte by byte: built from a hand-made Y of three vessels."""

import csv
import hashlib
import json
import math
import os
import re
from dataclasses import dataclass, replace
from io import BytesIO
from pathlib import Path

import networkx as nx
import numpy as np
import pandas as pd
import pytest
import tifffile
from frictionless import Package
from PIL import Image
from scipy.spatial import cKDTree

from vasohm.arrays import FloatArray, IntArray
from vasohm.errors import DomainError
from vasohm.flags import Flag
from vasohm.flow.development import Motion
from vasohm.flow.hydraulics import NetworkFlow
from vasohm.flow.monte_carlo import IntervalSettings, ResistanceIntervals, find_intervals
from vasohm.flow.rheology import BloodSettings
from vasohm.flow.scenarios import ScenarioOutcomes
from vasohm.flow.terminals import NetworkSettings, Terminals
from vasohm.image.calibrate import ScaleSettings
from vasohm.image.disc import OpticDisc
from vasohm.image.eye import EyeSettings
from vasohm.image.prepare import ImageQuality, PreparedImage, PrepareSettings
from vasohm.image.segment import SegmentSettings, VesselMask
from vasohm.network.class_trees import TreeSettings
from vasohm.network.graph import Crossings, NodeKind, VesselClass, VesselGraph
from vasohm.network.lumenfit import RadiusSettings
from vasohm.network.morphometry import Morphometry, ShapeSettings, Surroundings, describe_shape
from vasohm.network.radius import MeasuredGraph
from vasohm.results.cells import guard_text, unguard_text
from vasohm.results.colouring import COLOURED, ColourBy
from vasohm.results.encode import json_bytes
from vasohm.results.image_page import image_page
from vasohm.results.methods import Methods, MethodsUsed, bibtex, describe_methods
from vasohm.results.overlay import draw_overlay, round_length_um
from vasohm.results.pages import Study, images_without_resistance, lines_without_resistance, write_study_page
from vasohm.results.schema import COLUMNS, column_names
from vasohm.results.tables import Findings, ImageTables, tabulate
from vasohm.results.wording import pixel_size_words
from vasohm.results.write import read_record, record_is_whole, remove_partials, write_image
from vasohm.results.write_study import (
    Failure,
    gather_tables,
    write_datapackage,
    write_failures,
    write_references,
    write_study_json,
)

PIXEL_UM, PIXEL_REL_SE = 2.0, 0.01
HEIGHT, WIDTH = 100, 120
RADIUS_UM = np.array([10.0, 8.0, 6.0])
ARMS = np.array([[[20.0, 50.0], [50.0, 50.0]], [[50.0, 50.0], [80.0, 20.0]], [[50.0, 50.0], [80.0, 80.0]]])
N = 31  # points of each arm
HOSTILE = '=cmd|"/c calc"!A0<script>alert(1)</script>'
DESIGN = {"subject": "007", "group": HOSTILE, "age_years": "-2.5"}


@dataclass(frozen=True)
class Covariance:
    """Independent points of equal variance."""

    variance: float

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        return self.variance * np.square(gradient).reshape(-1, N).sum(axis=1)


def whole(*values: int) -> IntArray:
    return np.array(values, dtype=np.int64)


def real(*values: float) -> FloatArray:
    return np.array(values, dtype=np.float64)


def crossings(n: int) -> Crossings:
    return Crossings(
        real(*[50.5] * n),
        real(*[30.25] * n),
        whole(*[0] * n),
        whole(*[1] * n),
        real(*[0.9] * n),
        np.zeros(n, dtype=bool),
    )


def make_graph(n_segments: int) -> VesselGraph:
    along = np.linspace(0, 1, N)[:, None]
    lines = [start + along * (end - start) for start, end in ARMS[:n_segments]]
    points = np.concatenate(lines) if lines else np.zeros((0, 2))
    some = n_segments > 0
    return VesselGraph(
        shape=(HEIGHT, WIDTH),
        node_x_px=real(20, 50, 80, 80) if some else real(),
        node_y_px=real(50, 50, 20, 80) if some else real(),
        node_kind=whole(NodeKind.END, NodeKind.BRANCHING, NodeKind.END, NodeKind.RIM) if some else whole(),
        node_a=whole(0, 1, 1)[:n_segments],
        node_b=whole(1, 2, 3)[:n_segments],
        offsets=np.arange(n_segments + 1) * N,
        x_px=points[:, 0].copy(),
        y_px=points[:, 1].copy(),
        seed_radius_px=np.full(len(points), 3.0),
        vessel_class=whole(VesselClass.ARTERIOLE, VesselClass.ARTERIOLE, VesselClass.NONE)[:n_segments],
        class_probability=real(0.9, 0.8, np.nan)[:n_segments],
        segment_flags=whole(0, 0, Flag.RIM)[:n_segments],
        crossings=crossings(int(some)),
    )


def make_measured(n_segments: int) -> MeasuredGraph:
    graph = make_graph(n_segments)
    radius = np.repeat(RADIUS_UM[:n_segments], N)
    length = np.hypot(*(ARMS[:, 1] - ARMS[:, 0]).T)[:n_segments] * PIXEL_UM
    return MeasuredGraph(
        graph=graph,
        pixel_size_um=PIXEL_UM,
        pixel_size_rel_se=PIXEL_REL_SE,
        s_um=np.concatenate([np.linspace(0, one, N) for one in length]) if n_segments else real(),
        radius_um=radius,
        column=np.ones(len(radius)),
        ln_radius_random_se=np.full(len(radius), 0.03),
        shared=np.full((len(radius), 1), 0.02),
        shared_causes=("blur",),
        covariance=Covariance(0.03**2),
        noise_sign=1,
        contrast=np.full(len(radius), 0.2),
        point_flags=np.full(len(radius), int(Flag.INFERRED)),
        length_um=length,
        length_random_se_um=np.full(n_segments, 0.5),
        chord_um=length,
        segment_flags=whole(0, 0, Flag.SHORT)[:n_segments],
        blur_px=1.2 if n_segments else math.nan,
        blur_se_px=0.03 if n_segments else math.nan,
        profile="cylinder",
        image_contrast=0.2,
        flags=Flag.PROFILE_ASSUMED,
    )


def make_flow(n: int) -> NetworkFlow:
    one = int(n > 0)
    nodes = 4 * one
    terminals = Terminals(
        node_network=whole(*[0] * nodes),
        segment_network=whole(*[0] * n),
        role=whole(1, 0, -1, -1)[:nodes],
        pressure_mmhg=np.full(nodes, np.nan),
        flow_nl_min=np.full(nodes, np.nan),
        hematocrit=np.full(nodes, np.nan),
        source=("auto",) * one,
        network_flags=whole(*[int(Flag.TERMINALS_JOINED)] * one),
        notes=(f"terminal at (3, 4) left out: {HOSTILE}",),
        flags=Flag.TERMINAL_MISSED,
        drive_mmhg=1.0,
    )
    return NetworkFlow(
        terminals=terminals,
        hematocrit=real(0.45, 0.45, np.nan)[:n],
        hematocrit_tube=real(0.38, 0.37, np.nan)[:n],
        radius_hydraulic_um=RADIUS_UM[:n],
        radius_hydraulic_random_se_um=real(0.3, 0.3, 0.3)[:n],
        radius_hydraulic_shared_se_um=real(0.4, 0.4, 0.4)[:n],
        viscosity_mpa_s=real(3.1, 3.0, 2.9)[:n],
        resistance_pa_s_m3=real(1 / 3 * 1e13, 0.1 + 0.2, np.nan)[:n],
        ln_resistance_random_se=real(0.03, 0.03, np.nan)[:n],
        ln_resistance_shared_se=real(0.04, 0.04, np.nan)[:n],
        flow_nl_min=real(2.0, 2.0, 0.0)[:n],
        motion=make_motion(n),
        share=real(0.6, 0.4, 0.0)[:n],
        segment_flags=whole(0, 0, Flag.NO_FLOW)[:n],
        pressure_mmhg=real(1.0, 0.5, 0.0, 0.0)[:nodes],
        network_resistance_pa_s_m3=real(1e14)[:one],
        network_ln_resistance_random_se=real(0.3)[:one],
        network_ln_resistance_shared_se=real(0.4)[:one],
        network_flow_nl_min=real(2.0)[:one],
        network_flags=whole(0)[:one],
        hematocrit_turns=real(np.nan)[:one],
    )


def make_motion(n: int) -> Motion:
    return Motion(
        velocity_mm_s=real(1.2, 1.1, 0.0)[:n],
        transit_s=real(0.3, 0.4, np.nan)[:n],
        wall_shear_rate_per_s=real(500.0, 480.0, 0.0)[:n],
        wall_shear_pa=real(1.5, 1.4, np.nan)[:n],
        reynolds=real(np.nan, np.nan, np.nan)[:n],
        womersley=real(np.nan, np.nan, np.nan)[:n],
        flags=whole(0, 0, 0)[:n],
    )


def make_shape(n: int, disc: OpticDisc | None = None) -> Morphometry:
    mask = np.zeros((HEIGHT, WIDTH), dtype=bool)
    mask[45:56, 20:51] = n > 0
    around = Surroundings(
        vessels=mask,
        fov=np.ones((HEIGHT, WIDTH), dtype=bool),
        disc=disc,
        role=make_flow(n).terminals.role,
        flow_nl_min=make_flow(n).flow_nl_min,
        resistance_pa_s_m3=make_flow(n).resistance_pa_s_m3,
        ln_resistance_random_se=make_flow(n).ln_resistance_random_se,
        ln_resistance_shared_se=make_flow(n).ln_resistance_shared_se,
    )
    found = describe_shape(make_measured(n), around, ShapeSettings((0.5, 1.0), "knudtson", (8.5,), "none"))
    return replace(found, tortuosity=real(1.0, 1.0, np.nan)[:n])  # a gap, as a ring would leave


def make_findings(n_segments: int = 3, scenario: str = "Arterioles dilate", disc: OpticDisc | None = None) -> Findings:
    rng = np.random.default_rng(0)
    grey = rng.integers(0, 256, (HEIGHT, WIDTH)).astype(np.uint8)
    mask = np.zeros((HEIGHT, WIDTH), dtype=bool)
    mask[45:56, 20:51] = n_segments > 0
    prepared = PreparedImage(
        signal=grey.astype(np.float32),
        noise_sd=np.ones((HEIGHT, WIDTH), np.float32),
        picture=grey,
        fov=np.ones((HEIGHT, WIDTH), dtype=bool),
        clipped=np.zeros((HEIGHT, WIDTH), dtype=bool),
        polarity="dark",
        pixel_size_um=PIXEL_UM,
        pixel_size_se_um=math.nan,
        pixel_size_source="sheet",
        quality=ImageQuality(noise=0.02, saturated_fraction=0.0, invalid_fraction=0.0, exposure_ok=True),
        notes=("dots per inch ignored",),
        flags=Flag.PIXEL_SIZE_SE_UNKNOWN,
    )
    n = 2 * int(bool(scenario) and n_segments > 0)
    outcomes = ScenarioOutcomes(
        network=whole(0, 0)[:n],
        scenario=(scenario, "All dilate")[:n],
        n_segments_changed=whole(2, 3)[:n],
        radius_factor=real(1.1, 1.2)[:n],
        resistance_before_pa_s_m3=real(1e14, 1e14)[:n],
        resistance_after_pa_s_m3=real(7e13, 5e13)[:n],
        ratio=real(0.7, 0.5)[:n],
        ratio_lo=real(0.69, 0.49)[:n],
        ratio_hi=real(0.71, 0.51)[:n],
        flags=whole(0, 0)[:n],
    )
    measured, flow = make_measured(n_segments), make_flow(n_segments)
    return Findings(
        prepared,
        VesselMask(mask, "ridge"),
        measured,
        flow,
        make_shape(n_segments, disc),
        outcomes,
        make_intervals(measured, flow),
    )


def make_intervals(measured: MeasuredGraph, flow: NetworkFlow) -> ResistanceIntervals:
    return find_intervals(measured, flow, make_blood_settings("constant"), IntervalSettings("delta", 1000, 0))


def make_blood_settings(law: str) -> BloodSettings:
    return BloodSettings(
        law=law,
        hematocrit=0.45,
        hematocrit_se=0.02,
        plasma_viscosity_mpa_s=1.2,
        viscosity_mpa_s=3.0,
        parameters={},
    )


def make_tables(
    image_id: str = "a", n_segments: int = 3, scenario: str = "Arterioles dilate", disc: OpticDisc | None = None
) -> ImageTables:
    return tabulate(image_id, DESIGN, make_findings(n_segments, scenario, disc))


def make_methods(law: str = "constant", method: str = "ridge", n_masked: int = 0) -> Methods:
    return describe_methods(methods_used(law, method, n_masked))


def methods_used(law: str = "constant", method: str = "ridge", n_masked: int = 0) -> MethodsUsed:
    return MethodsUsed(
        version="0.1.0",
        scale=ScaleSettings(7.0, 0.7, "stop", EyeSettings("none", None, None, 24.0), None, None),
        prepare=PrepareSettings(channel="green", polarity="dark", gamma=1.0, radius_um=(4.0, 120.0)),
        segment=SegmentSettings(method=method, radius_um=(4.0, 120.0), false_alarms_per_mpx=10.0, parameters={}),
        radius=RadiusSettings(
            profile="auto", blur_px=None, plasma_layer_um=1.0, plasma_layer_se_um=0.5, least_radius_um=2.0
        ),
        blood=make_blood_settings(law),
        network=NetworkSettings(terminals="auto", drive_mmhg=1.0),
        law_citation="no source given",
        scenario_names=(HOSTILE,),
        n_images=3,
        n_masked=n_masked,
        intervals=IntervalSettings("auto", 1000, 0),
        targets=None,
        shape=ShapeSettings((0.5, 1.0), "knudtson", (8.5,), "none"),
        trees=TreeSettings(by_class=False),
        with_disc=True,
    )


def read_csv(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, strict=True))


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The results of a study: two images measured, one empty, one failed."""
    root = tmp_path_factory.mktemp("results")
    images = root / "images"
    write_image(make_tables("a"), images / "a", {"key": "k1"}, overlay=True)
    write_image(
        make_tables("b", disc=OpticDisc(60.0, 50.0, 9.0, "sheet", 1.0)), images / "b", {"key": "k2"}, overlay=True
    )
    write_image(make_tables("e", n_segments=0), images / "e", {"key": "k3"}, overlay=True)
    ids = ("b", "a", "e")  # the order of the sheet
    failures = (Failure("z", "read", "truncated", HOSTILE),)
    tables = (*gather_tables(root, ids), write_failures(root, failures))
    methods = make_methods()
    write_datapackage(root, "Demo <b>", tables, ids)
    write_study_json(root, {"name": "Demo", "images": {"a": "measured"}, "gone": math.nan})
    write_references(root, methods.references)
    write_study_page(root, Study("Demo <b>", ids, failures, methods))
    return root


def test_tables_have_the_promised_columns_with_and_without_rows() -> None:
    """A table without rows must still say its columns: whoever joins it would fail downstream."""
    for n_segments in (0, 3):
        tables = make_tables(n_segments=n_segments)
        assert tables.status == ("measured" if n_segments else "empty")
        for name, frame in tables.tables.items():
            extra = tuple(DESIGN) if name == "image" else ()
            assert tuple(frame.columns) == column_names(name) + extra, name
            assert (frame["image_id"] == "a").all()
        assert len(tables.image) == 1
        assert len(tables.segments) == n_segments
    with_disc = make_tables(disc=OpticDisc(1, 2, 3, "sheet", 1.0)).image
    added = "disc_x_px disc_y_px disc_radius_px disc_source disc_confidence zone_inner_px zone_outer_px"
    added += " crae_um crae_se_um crve_um crve_se_um avr avr_se n_zone_arterioles n_zone_venules calibre_formula"
    assert list(with_disc.columns)[len(column_names("image")) :] == [*added.split(), *DESIGN]


def test_radii_of_points_take_from_the_pixel_size_what_was_measured_with_it() -> None:
    """A plasma layer in micrometres does not grow with the pixel: half of a radius takes half of the pixel's doubt."""
    findings = make_findings()
    half = replace(findings.measured, column=np.full(len(findings.measured.radius_um), 0.5))
    for measured, part in ((findings.measured, 1.0), (half, 0.5)):
        points = tabulate("a", {}, replace(findings, measured=measured)).points
        expected = math.hypot(0.03, 0.02, part * PIXEL_REL_SE)  # JCGM 100:2008, eq. 10
        np.testing.assert_allclose(points["radius_se_um"] / points["radius_um"], expected, rtol=1e-12)


def test_what_cannot_be_bounded_has_no_bounds_and_says_so() -> None:
    """A bound of infinity is no number, and an empty cell without a reason is a riddle."""
    findings = make_findings()
    hopeless = replace(findings.flow, ln_resistance_random_se=real(0.03, 500.0, np.nan))
    tables = tabulate("a", {}, replace(findings, flow=hopeless, intervals=make_intervals(findings.measured, hopeless)))
    assert tables.segments["flags"].tolist() == ["", "no_interval", "rim;short;no_flow"]
    bounds = tables.segments[["resistance_lo_pa_s_m3", "resistance_hi_pa_s_m3"]].notna()
    assert bounds.to_numpy().tolist() == [[True, True], [False, False], [False, False]]
    doubtful = replace(findings.flow, network_ln_resistance_shared_se=real(500.0))
    intervals = make_intervals(findings.measured, doubtful)
    tables = tabulate("a", {}, replace(findings, flow=doubtful, intervals=intervals))
    assert "no_interval" in tables.networks.loc[0, "flags"]


def test_ids_degrees_classes_and_flags_are_those_of_the_graph() -> None:
    """An id off by one would join a radius to its neighbour's length."""
    tables = make_tables()
    assert tables.segments["segment_id"].tolist() == [1, 2, 3]
    assert tables.segments[["node_a", "node_b"]].to_numpy().tolist() == [[1, 2], [2, 3], [2, 4]]
    assert tables.nodes["kind"].tolist() == ["end", "branching", "end", "rim"]
    assert tables.nodes["degree"].tolist() == [1, 3, 1, 1]
    assert tables.nodes["role"].tolist() == ["inlet", "", "outlet", "outlet"]
    assert tables.points["point"].tolist() == [*range(1, N + 1)] * 3
    assert tables.segments["flags"].tolist() == ["", "", "rim;short;no_flow"]
    assert tables.networks.loc[0, ["vessel_class", "n_inlets", "n_outlets"]].tolist() == ["arteriole", 1, 2]
    lengths = tables.segments["length_um"]
    mean_probability = (0.9 * lengths[0] + 0.8 * lengths[1]) / (lengths[0] + lengths[1])
    assert tables.networks.loc[0, "class_probability"] == pytest.approx(mean_probability)
    assert tables.image.loc[0, "flags"] == "terminal_missed;pixel_size_se_unknown;profile_assumed"
    assert tables.image.loc[0, ["n_ends", "n_branchings"]].tolist() == [2, 1]
    assert tables.scenarios[["network_id", "scenario", "n_segments_changed", "ratio"]].to_numpy().tolist() == [
        [1, "Arterioles dilate", 2, 0.7],
        [1, "All dilate", 3, 0.5],
    ]
    # 30 px and two diagonals of 30 px, of 2 um, in 100 times 120 px: mm in mm2
    assert tables.image.loc[0, "length_density_per_mm"] == pytest.approx(60 * (1 + 2 * math.sqrt(2)) / 48)


def test_doubt_of_a_quantity_is_the_whole_of_it() -> None:
    """A `_se` or interval that left out the shared part would promise too much. GUM (JCGM 100:2008), eq. 10."""
    tables = make_tables()
    network = tables.networks.iloc[0]
    reach = 1.959963984540054 * 0.5  # normal quantile of 0.975; 0.3 and 0.4 in quadrature
    assert network["resistance_hi_pa_s_m3"] / network["resistance_pa_s_m3"] == pytest.approx(math.exp(reach))
    assert network["resistance_lo_pa_s_m3"] / network["resistance_pa_s_m3"] == pytest.approx(math.exp(-reach))
    assert tables.segments["radius_hydraulic_se_um"][0] == pytest.approx(0.5)
    relative = tables.points["radius_se_um"][0] / tables.points["radius_um"][0]
    assert relative == pytest.approx(math.sqrt(0.03**2 + 0.02**2 + PIXEL_REL_SE**2))
    length = tables.segments["length_um"][0]
    assert tables.segments["length_se_um"][0] == pytest.approx(math.hypot(0.5, PIXEL_REL_SE * length))


def test_numbers_read_back_exactly_and_gaps_are_empty(results: Path) -> None:
    """A lost last digit breaks the promise that the table is the measurement; a 0 for a gap would be a lie."""
    segments = read_csv(results / "images/a/segments.csv")
    written = make_tables("a").segments
    for name in ("length_um", "resistance_pa_s_m3", "resistance_lo_pa_s_m3", "pressure_a_mmhg"):
        for cell, value in zip((row[name] for row in segments), written[name], strict=True):
            assert (cell == "" and math.isnan(value)) or float(cell) == value
    assert segments[2]["resistance_pa_s_m3"] == segments[2]["tortuosity"] == segments[2]["vessel_class"] == ""
    assert segments[2]["flow_nl_min"] == "0.0"  # no flow is a result, not a gap
    assert segments[0]["n_points"] == str(N)
    image = (results / "images/a/image.csv").read_bytes()
    assert image.count(b"\n") == 2
    assert b"\r" not in image
    assert b",true,true," in image  # focus_ok, exposure_ok
    empty = read_csv(results / "images/e/image.csv")[0]
    assert (empty["status"], empty["n_segments"], empty["focus_ok"], empty["radius_mean_um"]) == ("empty", "0", "", "")
    assert (results / "images/e/points.csv").read_text() == ",".join(column_names("points")) + "\n"


def test_an_infinite_value_is_never_written(tmp_path: Path) -> None:
    """An infinity reads as a number in some tools and as text in others; none of our quantities can be one."""
    findings = make_findings()
    flow = replace(findings.flow, motion=replace(findings.flow.motion, wall_shear_pa=real(1.0, math.inf, 1.0)))
    with pytest.raises(DomainError, match="column wall_shear_pa, row 2: the value is infinite"):
        write_image(tabulate("a", {}, replace(findings, flow=flow)), tmp_path / "a", {}, overlay=False)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    "text", ["=1+1", "+SUM(A1)", "-x", "@cmd", "\tx", "\rx", "'=1", "'plain", "plain", "", "-2", "+1e5"]
)
def test_formulas_become_text_and_come_back(text: str) -> None:
    """A spreadsheet would run a cell that begins with one of = + - @, tab, return (rule of the OWASP Foundation)."""
    guarded = guard_text(text)
    assert unguard_text(guarded) == text
    number = text in ("-2", "+1e5")
    dangerous = text[:1] in tuple("=+-@\t\r") and not number
    assert (guarded == f"'{text}") if dangerous else (guarded == text or text.startswith("'="))


def test_carried_cells_are_guarded_but_numbers_are_not(results: Path) -> None:
    """A prefix before a number would turn a covariate into text."""
    row = read_csv(results / "images_all.csv")[1]
    assert row["group"] == f"'{HOSTILE}"
    assert row["age_years"] == "-2.5"
    assert row["subject"] == "007"


def test_gathered_tables_hold_every_row_in_the_order_of_the_sheet(results: Path) -> None:
    """A row lost or moved in gathering would change a cohort."""
    assert [row["image_id"] for row in read_csv(results / "images_all.csv")] == ["b", "a", "e"]
    assert read_csv(results / "images_all.csv")[0]["disc_source"] == "sheet"
    assert read_csv(results / "images_all.csv")[1]["disc_source"] == ""
    for table in ("networks", "segments", "branchings", "orders", "horton", "classes", "crossings", "scenarios"):
        rows = [row for name in ("b", "a") for row in read_csv(results / f"images/{name}/{table}.csv")]
        assert read_csv(results / f"{table}_all.csv") == rows
        assert rows
    assert read_csv(results / "failures.csv") == [
        {"image_id": "z", "stage": "read", "error": "truncated", "message": f"'{HOSTILE}"}
    ]
    assert not list(results.rglob("*.partial"))


def test_a_table_of_another_version_is_not_gathered(tmp_path: Path) -> None:
    """Rows under the wrong header would move each value into its neighbour's column."""
    write_image(make_tables("a"), tmp_path / "images/a", {}, overlay=False)
    table = tmp_path / "images/a/networks.csv"
    table.write_text(table.read_text().replace("network_id", "net", 1))
    with pytest.raises(ValueError, match="the columns are not those of this version"):
        gather_tables(tmp_path, ["a"])


def test_data_package_is_valid(results: Path) -> None:
    """Checked by the reference library frictionless: every table as described, carried columns and empty ones too."""
    package = Package(str(results / "datapackage.json"))
    report = package.validate()
    assert report.valid, report.flatten(["name", "rowNumber", "fieldName", "message"])
    names = {resource.name for resource in package.resources}
    tables = "images networks segments branchings orders horton classes crossings scenarios"
    gathered = {f"{table}_all" for table in tables.split()}
    assert names == gathered | {"failures", "nodes", "points", "scales"}
    described = json.loads((results / "datapackage.json").read_text())
    fields = {r["name"]: [f["name"] for f in r["schema"]["fields"]] for r in described["resources"]}
    for resource in described["resources"]:
        path = resource["path"] if isinstance(resource["path"], str) else resource["path"][0]
        assert (results / path).read_text(encoding="utf-8").split("\n")[0].split(",") == fields[resource["name"]]
    flags = package.get_resource("segments_all").read_rows()[2]["flags"]
    assert flags == ["rim", "short", "no_flow"]


def test_data_package_check_has_teeth(results: Path, tmp_path: Path) -> None:
    """One cell of text in a column of numbers must make the package invalid."""
    text = (results / "segments_all.csv").read_text().replace(f",{N},", ",many,", 1)
    (tmp_path / "segments_all.csv").write_text(text)
    described = json.loads((results / "datapackage.json").read_text())
    resource = next(r for r in described["resources"] if r["name"] == "segments_all")
    del resource["bytes"], resource["hash"]
    (tmp_path / "datapackage.json").write_text(json.dumps({"resources": [resource]}))
    assert not Package(str(tmp_path / "datapackage.json")).validate().valid


def test_graph_reads_back_with_types(results: Path) -> None:
    """Other tools would get texts for numbers, or a graph without its parallel vessels."""
    graph = nx.read_graphml(results / "images/a/graph.graphml", node_type=int, force_multigraph=True)
    assert graph.number_of_edges() == 3
    held = graph.get_edge_data(1, 2)
    segment = next(iter(held.values()))
    assert segment["segment_id"] == 1
    assert segment["length_um"] == make_tables().segments["length_um"][0]
    assert "tortuosity" not in next(iter(graph.get_edge_data(2, 4).values()))  # missing, hence absent
    assert graph.nodes[1] == {"x_px": 20.0, "y_px": 50.0, "kind": "end", "role": "inlet", "pressure_mmhg": 1.0}
    assert set(make_tables().graph[1][2]) == {1}  # edges of m.graph are keyed by segment_id


def test_mask_opens_with_its_scale(results: Path) -> None:
    """A mask at a wrong scale would be measured wrongly elsewhere. TIFF 6.0: ResolutionUnit 3 is cm."""
    with tifffile.TiffFile(results / "images/a/mask.tif") as file:
        tags = file.pages[0].tags
        numerator, denominator = tags["XResolution"].value
        assert 1e4 / (numerator / denominator) == pytest.approx(PIXEL_UM)
        assert tags["ResolutionUnit"].value == 3
        assert not {"DateTime", "Software", "ImageDescription"} & {tag.name for tag in tags}
        pixels = file.asarray()
    assert pixels.dtype == np.uint8
    np.testing.assert_array_equal(pixels, np.where(make_findings().mask.pixels, 255, 0))


def coloured_shares(tables: ImageTables, points: pd.DataFrame) -> tuple[float, float]:
    """How much of the lumina that `points` tell is coloured, and how much of the colour lies outside of them."""
    drawn = np.asarray(Image.open(BytesIO(draw_overlay(tables))).convert("RGB")).astype(int)
    scale = 900 / WIDTH  # small pictures are enlarged to 900 pixels
    part = drawn[: int(HEIGHT * scale), : int(WIDTH * scale)]
    coloured = np.ptp(part, axis=2) > 12  # the picture beneath is grey
    y, x = np.mgrid[: part.shape[0], : part.shape[1]] / scale - 0.5
    reach, nearest = cKDTree(points[["x_px", "y_px"]]).query(np.column_stack([x.ravel(), y.ravel()]))
    margin = (reach - points["radius_um"].to_numpy()[nearest] / PIXEL_UM).reshape(x.shape)
    ends = np.isin(points["point"].to_numpy()[nearest], (1, N)).reshape(x.shape)  # cut straight, not round
    line_px = 1.0  # outline and rounding, in pixels of the picture
    return coloured[(margin < -line_px) & ~ends].mean(), (margin[coloured] > line_px).mean()


def test_overlay_shows_the_segments_at_their_width() -> None:
    """The picture must show what the table says: colour within a radius of a centreline, and there only."""
    tables = make_tables()
    inside, outside = coloured_shares(tables, tables.points)
    assert inside > 0.99
    assert outside < 0.01
    for wrong in (0.7, 1.4):  # teeth: a picture of other radii is told from this one
        points = tables.points.assign(radius_um=tables.points["radius_um"] * wrong)
        inside, outside = coloured_shares(tables, points)
        assert outside > 0.01 or inside < 0.99


@pytest.mark.parametrize("radius_um", [0.35, 175.0])
def test_one_doubtful_segment_does_not_stretch_the_colours(radius_um: float) -> None:
    """One false segment would make all vessels look alike. Common practice of drawing, no source."""
    tables = make_tables()  # its third segment is cut by the rim
    drawn = []
    for radius in (6.0, radius_um):
        segments = tables.segments.assign(radius_mean_um=[10.0, 8.0, radius])
        one = replace(tables, tables={**tables.tables, "segments": segments})
        drawn.append(np.asarray(Image.open(BytesIO(draw_overlay(one))).convert("RGB")).astype(int))
    scale = 900 / WIDTH
    first, second = (tuple(int((at + 0.5) * scale) for at in place) for place in ((50, 35), (35, 65)))  # y, x in lumina
    assert (drawn[0][first] == drawn[1][first]).all()
    assert (drawn[0][second] == drawn[1][second]).all()
    assert np.abs(drawn[0][first] - drawn[0][second]).max() > 100  # 10 and 8 um stay far apart


@pytest.mark.parametrize("colour_by", COLOURED)
@pytest.mark.parametrize("n_segments", [0, 3])
def test_overlay_is_drawn_for_every_colouring_and_for_nothing(colour_by: ColourBy, n_segments: int) -> None:
    """An image without vessels, or values that are missing or zero, must not stop the batch; bytes must repeat."""
    tables = make_tables(n_segments=n_segments)
    first = draw_overlay(tables, colour_by)
    assert Image.open(BytesIO(first)).size[0] > 900
    assert first == draw_overlay(tables, colour_by)
    assert b"Software" not in first
    assert b"tEXt" not in first


def test_scale_bar_has_a_round_length() -> None:
    """A bar of 137 um cannot be read off."""
    assert [round_length_um(x) for x in (137.0, 1.0, 0.3, 4999.0, 5000.0)] == pytest.approx([100, 1, 0.2, 2000, 5000])


def test_same_input_gives_same_bytes(results: Path, tmp_path: Path) -> None:
    """Reruns on another machine or with other workers could not be compared."""
    write_image(make_tables("a"), tmp_path / "a", {"key": "k1"}, overlay=True)
    files = sorted(path.name for path in (results / "images/a").iterdir())
    assert files == sorted(path.name for path in (tmp_path / "a").iterdir())
    for name in files:
        assert (tmp_path / "a" / name).read_bytes() == (results / "images/a" / name).read_bytes(), name


def test_record_names_every_file_and_its_hash(results: Path) -> None:
    """The record commits the folder: what it does not name could be half there."""
    folder = results / "images/a"
    record = read_record(folder)
    assert record["key"] == "k1"
    assert record["status"] == "measured"
    assert set(record["files"]) == {path.name for path in folder.iterdir()} - {"record.json"}
    points = (folder / "points.csv").read_bytes()
    assert record["files"]["points.csv"] == {
        "sha256": hashlib.sha256(points).hexdigest(),
        "bytes": len(points),
        "rows": 3 * N,
    }


@pytest.mark.parametrize("damage", ["truncated", "edited", "deleted", "no record", "half a record"])
def test_damage_is_noticed(tmp_path: Path, damage: str) -> None:
    """A power cut or an edit would pass for a measurement."""
    folder = tmp_path / "a"
    write_image(make_tables(), folder, {}, overlay=False)
    assert record_is_whole(folder)
    table = folder / "segments.csv"
    content = table.read_bytes()
    if damage == "truncated":
        table.write_bytes(content[:-20])
    elif damage == "edited":
        table.write_bytes(content.replace(b"60.0", b"61.0"))
    elif damage == "deleted":
        table.unlink()
    elif damage == "no record":
        (folder / "record.json").unlink()
    else:
        (folder / "record.json").write_bytes((folder / "record.json").read_bytes()[:50])
    assert not record_is_whole(folder)


def test_an_older_folder_is_replaced_and_foreign_files_stay(tmp_path: Path) -> None:
    """Files of an older run beside those of a newer one would be read as its results."""
    folder = tmp_path / "a"
    write_image(make_tables(), folder, {}, overlay=True)
    (folder / "notes.txt").write_text("mine")
    write_image(make_tables(n_segments=0, scenario=""), folder, {}, overlay=False)
    assert record_is_whole(folder)
    assert (folder / "notes.txt").read_text() == "mine"
    assert not (folder / "overlay.png").exists()
    assert not (folder / "scenarios.csv").exists()
    assert read_record(folder)["status"] == "empty"
    assert [path.name for path in tmp_path.iterdir()] == ["a"]


def test_a_link_in_the_place_of_a_folder_is_not_followed(tmp_path: Path) -> None:
    """Results would be written over somebody's files elsewhere."""
    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    (elsewhere / "segments.csv").write_text("precious")
    (tmp_path / "a").symlink_to(elsewhere, target_is_directory=True)
    write_image(make_tables(), tmp_path / "a", {}, overlay=False)
    assert [(path.name, path.read_text()) for path in elsewhere.iterdir()] == [("segments.csv", "precious")]
    assert record_is_whole(tmp_path / "a")


def test_a_failed_write_leaves_the_older_results(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A full disk must cost neither the earlier results nor leave half a folder."""
    folder = tmp_path / "a"
    write_image(make_tables(), folder, {"key": "old"}, overlay=False)
    calls: list[int] = []

    def full_disk(handle: int) -> None:
        calls.append(handle)
        if len(calls) == 4:
            raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full_disk)
    with pytest.raises(OSError, match="No space left"):
        write_image(make_tables(n_segments=0), folder, {"key": "new"}, overlay=False)
    monkeypatch.undo()
    assert record_is_whole(folder)
    assert read_record(folder)["key"] == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["a"]


def test_leftovers_of_dead_runs_can_be_removed(tmp_path: Path) -> None:
    """Half-written folders would pile up and be taken for results."""
    (tmp_path / ".a.1-00.partial").mkdir()
    (tmp_path / ".a.1-00.partial" / "points.csv").write_text("half")
    (tmp_path / ".x.csv.1-00.partial").write_text("half")
    (tmp_path / "kept.csv").write_text("whole")
    remove_partials(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["kept.csv"]


def test_a_record_cannot_replace_our_own_keys(tmp_path: Path) -> None:
    """A caller's `files` would hide the hashes by which damage is noticed."""
    with pytest.raises(ValueError, match="keys files, status are written here"):
        write_image(make_tables(), tmp_path / "a", {"status": "x", "files": {}}, overlay=False)


def test_json_holds_no_nan() -> None:
    """NaN is no JSON: strict readers refuse the whole file (RFC 8259, section 6)."""
    text = json_bytes({"a": math.nan, "b": [1.0, math.nan], "c": {"d": np.float64(2.5)}, "e": np.arange(2)})
    assert json.loads(text, parse_constant=pytest.fail) == {"b": [1.0, None], "c": {"d": 2.5}, "e": [0, 1]}
    with pytest.raises(ValueError, match="not JSON compliant"):
        json_bytes({"a": math.inf})


def test_pages_show_text_as_text(results: Path) -> None:
    """A group, an error or a note from a file must not run in the reader's browser."""
    for page in (results / "index.html", results / "images/a/index.html"):
        text = page.read_text(encoding="utf-8")
        assert "<script>" not in text.lower()
        inside = re.findall(r"<script([^>]*)>([^<]*)</script>", text)
        assert all(not held or 'type="application/json"' in kind for kind, held in inside)  # data only, never run
        assert "&lt;script&gt;alert(1)" in text
        assert "default-src 'none'" in text
        assert "http://" not in text
        assert 'src="http' not in text
    assert "Demo <b>" not in (results / "index.html").read_text(encoding="utf-8")


def test_study_page_tells_failures_cautions_and_every_image(results: Path) -> None:
    """A reader must not overlook a failed image, nor take research for diagnosis."""
    text = (results / "index.html").read_text(encoding="utf-8")
    assert "4 images: 2 measured, 1 empty (no vessel found), 1 failed." in text
    assert text.index("<h2>Failed images") < text.index("<h2>Images</h2>")
    assert "no basis for the diagnosis or treatment of a person" in text
    assert "local rules and licensed practice come first" in text
    for name in ("a", "b", "e"):
        assert f'href="images/{name}/index.html"' in text
        assert f'src="images/{name}/thumbnail.jpg"' in text
    assert (
        "1.00&nbsp;×&nbsp;10<sup>14</sup> <br>(3.75&nbsp;×&nbsp;10<sup>13</sup> to 2.66&nbsp;×&nbsp;10<sup>14</sup>)"
        in text
    )
    assert '<span id="flag-terminals_joined">' in text
    assert "plasma layer" in text


def test_the_methods_say_what_was_done_and_caution_against_what_was_used() -> None:
    """A paragraph goes into print as it is: a method that was not used must not stand in it."""
    assert "by the method ridge" in make_methods().paragraph
    some = make_methods(n_masked=1).paragraph
    assert "by the method ridge" in some
    assert "1 of the 3 images were taken from masks made elsewhere" in some
    for every in (make_methods(n_masked=3), make_methods(method="mask", n_masked=3)):
        assert "taken from masks made elsewhere" in every.paragraph
        assert "ridge" not in every.paragraph
    constant, fitted = make_methods("constant"), make_methods("pries-in-vivo")
    assert "hematocrit of 0.45 (standard uncertainty 0.02)" in fitted.paragraph
    assert any("rat mesentery or glass tubes" in caution for caution in fitted.cautions)
    assert not any("rat mesentery" in caution for caution in constant.cautions)
    assert any("One viscosity was taken for all vessels" in caution for caution in constant.cautions)


def test_a_blur_that_the_picture_does_not_tell_says_nothing_of_its_focus() -> None:
    """An assumed blur in the table would be taken for a measured one."""
    findings = make_findings()
    for flag in (Flag.BLUR_ASSUMED, Flag.ASSUMED_BLUR_SPREAD):
        measured = replace(findings.measured, flags=flag | Flag.OUT_OF_FOCUS)
        image = tabulate("a", {}, replace(findings, measured=measured)).image.iloc[0]
        assert np.isnan(image["blur_px"])
        assert np.isnan(image["blur_se_px"])
        assert image["focus_ok"] is None
        assert "out_of_focus" not in image["flags"]
    blurred = replace(findings.measured, flags=Flag.OUT_OF_FOCUS)
    image = tabulate("a", {}, replace(findings, measured=blurred)).image.iloc[0]
    assert (image["blur_px"], image["blur_se_px"], image["focus_ok"]) == (1.2, 0.03, False)
    bare = make_findings(0)
    nothing = replace(bare, measured=replace(bare.measured, blur_px=0.9, flags=Flag.NONE))
    image = tabulate("a", {}, nothing).image.iloc[0]
    assert np.isnan(image["blur_px"])
    assert image["focus_ok"] is None


def test_pages_tell_scale_order_and_why_there_is_no_resistance(tmp_path: Path) -> None:
    """Who reads only the page must learn how sure the scale is, and why the main result is missing."""
    tables = make_tables("a")
    page = image_page(tables, None)
    assert "Pixel size: 2 µm, its uncertainty is not told, from the image sheet" in page
    assert pixel_size_words(7.0, 0.7, "study") == "7 µm ± 0.7 µm (k = 1), from [scale] of the study"
    assert 'href="#flag-terminals_joined"' not in page  # how it was done, no doubt; explained once at the end
    assert page.index("No doubt, and therefore not marked") < page.index('<span id="flag-terminals_joined">')
    order = [page.index(f'">{share}</td>', page.index('<td data-name="share"')) for share in ("0.600", "0.400", "0")]
    assert order == sorted(order)
    assert "has no resistance" not in page
    networks = tables.networks.assign(resistance_pa_s_m3=math.nan, flags="no_terminals;mesh")
    lacking = replace(tables, tables={**tables.tables, "networks": networks})
    why = (
        "inlets and outlets are not known; the network has loops: inlets and outlets cannot be told from its shape. "
        "Name them in a terminals_file of the image sheet."
    )
    assert f"The longest network (number 1, 3 of 3 segments) has no resistance: {why}" in image_page(lacking, None)
    write_image(lacking, tmp_path / "images/a", {}, overlay=False)
    gather_tables(tmp_path, ["a"])
    found = images_without_resistance(tmp_path)
    assert lines_without_resistance(found, 1) == [f"1 of 1 image without resistance of the longest network (a): {why}"]


def test_every_mark_of_the_methods_has_its_reference() -> None:
    """A number without a source, or a source never named, misleads a reviewer."""
    methods = make_methods()
    marks = {int(part.split("]")[0]) for part in methods.paragraph.split("[")[1:]}
    assert marks == set(range(1, len(methods.references) + 1))
    entries = bibtex(methods.references)
    assert entries.count("@misc{") == len(methods.references)
    assert "doi = {10.1146/annurev.fl.25.010193.000245}" in entries
    assert "year = {1993}" in entries


def test_the_methods_tell_how_cells_part_and_which_diameter_the_law_was_given() -> None:
    """Rat blood by a law for human cells: the factor (92/55)^(1/3) stands in the report, and the law of parting."""
    told = describe_methods(
        replace(
            methods_used(),
            blood=replace(make_blood_settings("pries-in-vivo"), red_cell_volume_fl=55.0, split_law="1990"),
        )
    )
    assert "multiplied by 1.187" in told.paragraph
    assert any("Circ Res 67:826-834" in reference for reference in told.references)


def test_columns_of_tables_have_the_types_of_the_schema() -> None:
    """Booleans as texts or ids as floats would surprise whoever works with the frames."""
    tables = make_tables()
    kinds = {"integer": "iu", "number": "f", "string": "OUT", "list": "OUT", "boolean": "bO"}
    for table, frame in tables.tables.items():
        for column in COLUMNS[table]:
            if frame[column.name].notna().all():
                assert frame[column.name].dtype.kind in kinds[column.type], (table, column.name)
    assert tables.image["focus_ok"].tolist() == [True]
