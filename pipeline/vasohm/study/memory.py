"""What memory an image will take, and a limit on it that turns want of memory into one failed image."""

import resource
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from vasohm.errors import MemoryLimitError
from vasohm.image.header import declared_size
from vasohm.image.read import shown

# Peak resident memory of whole measurements, fundus pictures of 0.5, 2 and 8 megapixels: 315, 598 and 1102 MB
PROGRAM_MB = 340.0
BYTES_PER_PIXEL = 135.0
BYTES_PER_FURTHER_PLANE = 8.0  # decoded, with its share of a mean
MB = 1024.0 * 1024.0
_PAGE_BYTES = resource.getpagesize()


def predicted_mb(path: Path) -> float | None:
    """Return the peak memory that measuring a picture will take, in MB; None where its header is unreadable."""
    declared = declared_size(path)
    if declared is None:
        return None
    per_pixel = BYTES_PER_PIXEL + BYTES_PER_FURTHER_PLANE * (declared.planes - 1)
    return PROGRAM_MB + declared.width_px * declared.height_px * per_pixel / MB


def refuse_beyond(path: Path, limit_mb: float) -> None:
    """Stop before a picture is decoded that will not fit.

    Raises
    ------
    MemoryLimitError
        Naming what is predicted, and the limit.
    """
    wanted_mb = predicted_mb(path)
    if wanted_mb is not None and wanted_mb > limit_mb:
        msg = (
            f"{shown(path)}: measuring it will take about {wanted_mb:.0f} MB, more than memory_limit_mb = "
            f"{limit_mb:g}. Raise it in [run], with fewer workers if need be, or take a machine with more memory."
        )
        raise MemoryLimitError(msg)


@contextmanager
def memory_limited(limit_mb: float | None) -> Iterator[None]:
    """Let allocations in this block fail, as MemoryError, that would take this process beyond a limit.

    The kernel counts addresses and not memory in use, so that what the program has mapped and not touched is added.

    Parameters
    ----------
    limit_mb
        Of resident memory; None sets no limit.
    """
    if limit_mb is None:
        yield
        return
    before = resource.getrlimit(resource.RLIMIT_AS)
    limit = int(limit_mb * MB) + _untouched_bytes()
    if before[0] != resource.RLIM_INFINITY:
        limit = min(limit, before[0])
    resource.setrlimit(resource.RLIMIT_AS, (limit, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_AS, before)


def _untouched_bytes() -> int:
    """Mapped and not resident so far, from proc(5), statm."""
    try:
        mapped, resident, *_ = Path("/proc/self/statm").read_text(encoding="ascii").split()
    except OSError:  # a system that does not tell: the limit is then on addresses
        return 0
    return (int(mapped) - int(resident)) * _PAGE_BYTES
