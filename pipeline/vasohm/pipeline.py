"""The whole way of one image, from its files to its tables. Read this first."""

from collections.abc import Callable
from dataclasses import replace

from vasohm.arrays import BoolArray
from vasohm.config.settings import Settings
from vasohm.config.sheet import ImageSource
from vasohm.flow.estimated_ends import estimate_ends
from vasohm.flow.hydraulics import solve_flow, tell_unsaid
from vasohm.flow.monte_carlo import find_intervals
from vasohm.flow.scenarios import run_scenarios
from vasohm.flow.terminals import place_terminals
from vasohm.image.calibrate import calibrate, guess_for_disc, rests_on_disc
from vasohm.image.disc import OpticDisc, check_disc
from vasohm.image.eye import check_side
from vasohm.image.prepare import prepare
from vasohm.image.prepare_blocks import prepare_in_blocks
from vasohm.image.read import RawImage, read_image, read_labels, read_mask
from vasohm.image.segment import segment
from vasohm.network.centreline import extend_ends, refine_centrelines
from vasohm.network.class_trees import part_trees
from vasohm.network.classes import classes_from_labels, classify_vessels
from vasohm.network.crossings import resolve_crossings
from vasohm.network.edits import apply_edits, forced_places
from vasohm.network.graph import build_graph
from vasohm.network.morphometry import Surroundings, describe_shape
from vasohm.network.optic_disc import DiscSearch, find_disc
from vasohm.network.radius import measure_radii
from vasohm.network.skeletonize import skeletonize
from vasohm.results.tables import Findings, ImageTables, tabulate


def measure_source(source: ImageSource, settings: Settings, stage: Callable[[str], None]) -> ImageTables:
    """Read one image of the sheet and measure it; `stage` is told the name of each stage as it begins."""
    stage("read")
    return measure_pixels(read_image(source.file, settings.read), source, settings, stage)


def measure_pixels(raw: RawImage, source: ImageSource, settings: Settings, stage: Callable[[str], None]) -> ImageTables:
    """Measure a picture that is already in memory; `source` says what a person knows about it."""
    check_side(source.design.get("eye", ""), raw.subject.side)
    shape = (raw.pixels.shape[0], raw.pixels.shape[1])
    given = read_mask(source.mask_file, shape) if source.mask_file else None
    fov = read_mask(source.fov_file, shape) if source.fov_file else None
    if source.disc is not None:
        check_disc(source.disc, shape)
    labels = read_labels(source.class_file, shape) if source.class_file else None
    stage("prepare")
    if source.disc is None and settings.shape.disc == "find" and rests_on_disc(raw, source.scale, settings.scale):
        source = replace(source, disc=_find_disc_first(raw, settings, given, fov))
    flatten = prepare_in_blocks if raw.block_px else prepare
    prepared = flatten(calibrate(raw, source.scale, settings.scale, disc=source.disc), settings.prepare, fov)
    stage("segment")
    mask = segment(prepared, settings.segment, given)
    stage("graph")
    traced = build_graph(skeletonize(mask, prepared, settings.skeletonize))
    overlap_adds = settings.crossings.overlap_adds and not raw.is_maximum
    crossings = replace(settings.crossings, overlap_adds=overlap_adds)
    uncrossed, places_met = resolve_crossings(traced, prepared, crossings, forced_places(source.edits))
    graph = extend_ends(refine_centrelines(uncrossed, prepared), prepared)
    if labels is not None:
        graph = classes_from_labels(graph, labels)
    graph, notes, edit_flags = apply_edits(graph, source.edits, places_met)
    looks = source.disc is None and settings.shape.disc == "find"
    sought = find_disc(graph, prepared, mask.pixels) if looks else DiscSearch(source.disc)
    notes, flags = prepared.notes + notes + sought.notes, prepared.flags | edit_flags | sought.flags
    prepared = replace(prepared, notes=notes, flags=flags)
    stage("radius")
    measured = measure_radii(graph, prepared, settings.radius)
    stage("classes")
    measured, notes = classify_vessels(measured, raw, prepared, sought.disc, settings.classes)
    prepared = replace(prepared, notes=prepared.notes + notes)
    measured = part_trees(measured, settings.trees)
    stage("flow")
    blood = settings.blood
    if source.hematocrit is not None:
        blood = replace(blood, hematocrit=source.hematocrit)
    placed = place_terminals(measured, source.terminals, settings.network, sought.disc)
    terminals = estimate_ends(measured, placed, blood, settings.targets)
    flow = solve_flow(measured, terminals, blood)
    if settings.trees.by_class:
        flow = tell_unsaid(measured, flow)
    intervals = find_intervals(measured, flow, blood, settings.intervals)
    scenarios = run_scenarios(measured, terminals, blood, settings.scenarios, intervals)
    stage("tables")
    around = Surroundings(
        vessels=mask.pixels,
        fov=prepared.fov,
        disc=sought.disc,
        role=terminals.role,
        flow_nl_min=flow.flow_nl_min,
        resistance_pa_s_m3=flow.resistance_pa_s_m3,
        ln_resistance_random_se=flow.ln_resistance_random_se,
        ln_resistance_shared_se=flow.ln_resistance_shared_se,
    )
    shape_of = describe_shape(measured, around, settings.shape)
    findings = Findings(prepared, mask, measured, flow, shape_of, scenarios, intervals, source.edits)
    return tabulate(source.image_id, source.design, findings)


def _find_disc_first(
    raw: RawImage, settings: Settings, given: BoolArray | None, fov: BoolArray | None
) -> OpticDisc | None:
    """Find the optic disc at a guessed pixel size, where only the disc can tell the true one."""
    flatten = prepare_in_blocks if raw.block_px else prepare
    guessed = flatten(guess_for_disc(raw, settings.scale), settings.prepare, fov)
    mask = segment(guessed, settings.segment, given)
    graph = build_graph(skeletonize(mask, guessed, settings.skeletonize))
    return find_disc(graph, guessed, mask.pixels).disc
