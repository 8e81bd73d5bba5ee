"""The resolved settings of a study: one frozen noun per stage, parsed once and handed down in pieces."""

from dataclasses import dataclass

from vasohm.flow.estimated_ends import EndTargets
from vasohm.flow.monte_carlo import IntervalSettings
from vasohm.flow.rheology import BloodSettings
from vasohm.flow.scenarios import Scenario
from vasohm.flow.terminals import NetworkSettings
from vasohm.image.calibrate import ScaleSettings
from vasohm.image.prepare import PrepareSettings
from vasohm.image.read import ReadSettings
from vasohm.image.segment import SegmentSettings
from vasohm.network.class_trees import TreeSettings
from vasohm.network.classes import ClassSettings
from vasohm.network.crossings import CrossingSettings
from vasohm.network.lumenfit import RadiusSettings
from vasohm.network.morphometry import ShapeSettings
from vasohm.network.skeletonize import SkeletonizeSettings
from vasohm.results.colouring import ColourBy


@dataclass(frozen=True, slots=True)
class OutputSettings:
    """What is written beside the tables."""

    overlay: bool
    colour: ColourBy
    for_print: bool  # whether the overlay is drawn for print too


@dataclass(frozen=True, slots=True)
class Settings:
    """Everything that shapes a number, with its source."""

    preset: str
    read: ReadSettings
    scale: ScaleSettings
    prepare: PrepareSettings
    segment: SegmentSettings
    skeletonize: SkeletonizeSettings
    crossings: CrossingSettings
    classes: ClassSettings
    radius: RadiusSettings
    trees: TreeSettings
    shape: ShapeSettings
    blood: BloodSettings
    network: NetworkSettings
    targets: EndTargets | None  # of networks whose ends are estimated
    intervals: IntervalSettings
    scenarios: tuple[Scenario, ...]
    output: OutputSettings


@dataclass(frozen=True, slots=True)
class RunSettings:
    """What one image may take; no result depends on it, so it makes none out of date."""

    image_timeout_s: float | None  # from the moment its worker begins it
    memory_limit_mb: float | None  # of the worker's resident memory


NO_LIMITS = RunSettings(None, None)


@dataclass(frozen=True, slots=True)
class CompareSettings:
    """What `compare` asks of the results: parsed with the study, used after it was measured."""

    outcomes: tuple[str, ...]  # table.column
    by: str  # column of the sheet
    reference: str  # its value that the others are held against
    covariates: tuple[str, ...]  # columns of the sheet
    plan_ratio: float | None  # the ratio that a next study should be able to see
    radius_um: tuple[tuple[float, float], ...]  # classes of calibre, compared apart; empty: all vessels together
    outcomes_named: bool = True  # whether the study names them; else they are what is usual
