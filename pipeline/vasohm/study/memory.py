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
BYTES_BEYOND_BLOCK = 12.0  # a pixel of a picture that is measured in blocks, beyond what the first block takes
BYTES_PER_FURTHER_PLANE = 8.0  # decoded, with its share of a mean
MB = 1024.0 * 1024.0


def predicted_mb(path: Path, block_megapixels: float) -> float | None:
    """Return the peak memory that measuring a picture will take, in MB; None where its header is unreadable.

    Larger pictures than `block_megapixels` are measured in blocks of so many.
    """
    declared = declared_size(path)
    if declared is None:
        return None
    n_pixels = declared.width_px * declared.height_px
    at_once = min(n_pixels, block_megapixels * 1e6)
    further = BYTES_PER_FURTHER_PLANE * (declared.planes - 1) * n_pixels
    return PROGRAM_MB + (BYTES_PER_PIXEL * at_once + BYTES_BEYOND_BLOCK * (n_pixels - at_once) + further) / MB


def refuse_beyond(path: Path, limit_mb: float, block_megapixels: float) -> None:
    """Stop before a picture is decoded that will not fit.

    Raises
    ------
    MemoryLimitError
        Naming what is predicted, and the limit.
    """
    wanted_mb = predicted_mb(path, block_megapixels)
    if wanted_mb is not None and wanted_mb > limit_mb:
        msg = (
            f"{shown(path)}: measuring it will take about {wanted_mb:.0f} MB, more than memory_limit_mb = "
            f"{limit_mb:g}. Raise it in [run], with fewer workers if need be, or take a machine with more memory."
        )
        raise MemoryLimitError(msg)


@contextmanager
def memory_limited(limit_mb: float | None) -> Iterator[None]:
    """Let allocations in this block fail, as MemoryError, that would take this process beyond a limit.

    The kernel counts what the program may write to, files apart, and not memory in use, so that what it has mapped and
    not touched is added.

    Parameters
    ----------
    limit_mb
        Of resident memory; None sets no limit.
    """
    if limit_mb is None:
        yield
        return
    before = resource.getrlimit(resource.RLIMIT_DATA)
    limit = int(limit_mb * MB) + _untouched_bytes()
    if before[0] != resource.RLIM_INFINITY:
        limit = min(limit, before[0])
    resource.setrlimit(resource.RLIMIT_DATA, (limit, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_DATA, before)


def _untouched_bytes() -> int:
    """Bytes that are mapped for writing and not resident so far, from proc(5), status."""
    try:
        lines = Path("/proc/self/status").read_text(encoding="ascii", errors="replace").splitlines()
    except OSError:  # a system that does not tell: the limit is then on what is mapped
        return 0
    kilobytes = {line.split(":")[0]: int(line.split()[1]) for line in lines if line.startswith(("VmData:", "RssAnon:"))}
    return max(kilobytes.get("VmData", 0) - kilobytes.get("RssAnon", 0), 0) * 1024
