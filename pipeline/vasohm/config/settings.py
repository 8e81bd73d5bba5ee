"""The resolved settings of a study: one frozen noun per stage, parsed once and handed down in pieces."""

from dataclasses import dataclass

from vasohm.flow.rheology import BloodSettings
from vasohm.flow.scenarios import Scenario
from vasohm.flow.terminals import NetworkSettings
from vasohm.image.calibrate import ScaleSettings
from vasohm.image.prepare import PrepareSettings
from vasohm.image.read import ReadSettings
from vasohm.image.segment import SegmentSettings
from vasohm.network.crossings import CrossingSettings
from vasohm.network.radius import RadiusSettings
from vasohm.network.skeletonize import SkeletonizeSettings


@dataclass(frozen=True, slots=True)
class OutputSettings:
    """What is written beside the tables."""

    overlay: bool


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
    radius: RadiusSettings
    blood: BloodSettings
    network: NetworkSettings
    scenarios: tuple[Scenario, ...]
    output: OutputSettings
