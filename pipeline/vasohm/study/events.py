"""What a run tells those who listen: the progress line, the log, the file of JSON lines."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

Kind = Literal["run", "measured", "empty", "failed", "current", "retry", "stop", "warning", "end"]


@dataclass(frozen=True, slots=True)
class Event:
    """One thing that happened. `seconds` by stage and `peak_rss_mb` are known for images that came back."""

    kind: Kind
    text: str = ""
    image_id: str = ""
    stage: str = ""  # where an image failed
    seconds: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    peak_rss_mb: float | None = None
    total: int = 0  # of kind "run": images of this run


Listener = Callable[[Event], None]
