"""Pictures too large for memory: their arrays lie on disk and are worked on block by block."""

import mmap
import os
import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import DTypeLike

from vasohm.arrays import AnyArray
from vasohm.errors import ImageError

EVEN = 32  # cores begin on multiples of this, so that coarse grids of all blocks lie on each other
FILTER_CORE_PX = 2048  # edge of the blocks in which small filters run
HALO_RADII = 6.0  # of the widest vessels: so far beyond a block's core its filters look
HALO_PX = (128, 400)  # but at least and at most so far
BYTES_PER_MB = 1e6

Window = tuple[slice, slice]


@dataclass(frozen=True, slots=True)
class Block:
    """A piece of a picture: what is looked at, and the core of it that is this block's own.

    The cores of all blocks cover the picture once; `inner` is the core's place within the window.
    """

    window: Window
    core: Window
    inner: Window


def blocks_of(shape: tuple[int, ...], core_px: int, halo_px: int) -> list[Block]:
    """Cut a picture into blocks of at most `core_px` edge, each seen with `halo_px` around it, row by row."""
    cores = [(rows, columns) for rows in _spans(shape[0], core_px) for columns in _spans(shape[1], core_px)]
    return [enlarged(Block(core, core, core), halo_px, shape) for core in cores]


def enlarged(block: Block, halo_px: int, shape: tuple[int, ...]) -> Block:
    """Return the same core, seen with so much around it."""
    window = tuple(
        slice(max(part.start - halo_px, 0), min(part.stop + halo_px, n))
        for part, n in zip(block.core, shape, strict=True)
    )
    inner = tuple(
        slice(part.start - seen.start, part.stop - seen.start) for part, seen in zip(block.core, window, strict=True)
    )
    return Block((window[0], window[1]), block.core, (inner[0], inner[1]))


def _spans(length: int, longest: int) -> list[slice]:
    n = max(1, -(-length // longest))
    edges = sorted({min(length, -(-length * k // (n * EVEN)) * EVEN) for k in range(n)} | {length})
    return [slice(start, stop) for start, stop in pairwise(edges)]


def working_blocks(shape: tuple[int, ...], block_px: int, radius_hi_px: float) -> list[Block]:
    """Blocks in which vessels of up to that radius are found: at most `block_px` wide with all around them."""
    halo = int(np.clip(HALO_RADII * radius_hi_px, *HALO_PX))
    return blocks_of(shape, max(block_px - 2 * halo, 2 * halo), halo)


def on_disk(shape: tuple[int, ...], dtype: DTypeLike) -> AnyArray:
    """Make an array of zeros in a file without a name, which vanishes with the array, however that ends.

    The file lies in the system's folder for temporary files; the variable TMPDIR chooses another.

    Raises
    ------
    ImageError : that disk has not room enough.
    """
    size = max(int(np.prod(shape, dtype=np.int64)) * np.dtype(dtype).itemsize, 1)
    folder = tempfile.gettempdir()
    with tempfile.TemporaryFile(dir=folder) as file:
        try:
            if hasattr(os, "posix_fallocate"):
                os.posix_fallocate(file.fileno(), 0, size)  # a hole that cannot be filled later would kill the process
            else:
                file.truncate(size)
        except OSError as error:
            free = shutil.disk_usage(folder).free / BYTES_PER_MB
            msg = (
                f"a large picture needs room on disk while it is measured: {size / BYTES_PER_MB:.0f} MB more where "
                f"{free:.0f} MB are free ({error.strerror}). Point the variable TMPDIR to a folder on a larger disk."
            )
            raise ImageError(msg) from error
        return np.memmap(file, dtype=dtype, mode="r+", shape=shape)


def is_on_disk(values: AnyArray) -> bool:
    """Whether an array lies in a file, so that it must not be copied as a whole."""
    return isinstance(values, np.memmap)


def release(*arrays: AnyArray) -> None:
    """Take arrays that lie on disk out of memory; what was written to them stays in their files."""
    for values in arrays:
        held = getattr(values, "_mmap", None)
        if isinstance(held, mmap.mmap) and hasattr(mmap, "MADV_DONTNEED"):
            held.madvise(mmap.MADV_DONTNEED)


def kept_on_disk(values: AnyArray) -> AnyArray:
    """Copy an array into a file."""
    kept = on_disk(values.shape, values.dtype)
    kept[...] = values
    release(kept)
    return kept


def filtered(values: AnyArray, function: Callable[[AnyArray], AnyArray], halo_px: int) -> AnyArray:
    """Apply a filter that reaches `halo_px` far: to an array in memory at once, to one on disk block by block.

    The result has the shape and type of `values`, and lies where they lie.
    """
    if not is_on_disk(values):
        return function(values)
    result = on_disk(values.shape, values.dtype)
    for block in blocks_of(values.shape, FILTER_CORE_PX, halo_px):
        result[block.core] = function(np.array(values[block.window]))[block.inner]
        release(values, result)
    return result
