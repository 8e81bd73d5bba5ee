"""Memory and time of large pictures, which are measured in blocks.

python benchmarks/mosaic.py FOLDER [MEGAPIXELS ...]

Renders a capillary mesh of 2000 x 2000 px once, lays it mirrored side by side until the picture is as large as asked
(vessels go on over the seams), writes that as a tiled TIFF, measures it by the command, and prints a line a size.
"""

import csv
import os
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import tifffile
from numpy.typing import NDArray
from PIL import Image

EDGE_PX, TILE_PX = 2000, 256
MEGAPIXELS = ("1", "4", "16", "64")
RECIPE = """
[phantom]
name          = "mosaic"
seed          = 7
pixel_size_um = 1.0
preset        = "fluorescence"
radius_um     = [1.5, 10.0]
[optics]
profile             = "cylinder"
polarity            = "bright"
contrast            = 0.35
reference_radius_px = 3.0
blur_px             = 1.0
[[optics.channel]]
background = 0.08
[optics.camera]
photons  = 1500
noise_sd = 0.004
bits     = 16
[scene]
kind      = "mesh"
width_px  = 2000
height_px = 2000
mesh      = { spacing_px = 90.0, radius_px = 3.0, radius_sd = 0.25, feeder_radius_px = 6.0, drop = 0.1 }
[[image]]
image_id = "mesh"
"""
STUDY = """
[study]
name  = "mosaic"
sheet = "images.csv"
[image]
preset         = "fluorescence"
max_megapixels = 1000
[segment]
radius_um = [1.5, 10.0]
"""


def main(folder: str, *megapixels: str) -> None:
    """Measure one mosaic a size."""
    place = Path(folder)
    if not (place / "bed").exists():
        place.mkdir(parents=True, exist_ok=True)
        (place / "recipe.toml").write_text(RECIPE, encoding="utf-8")
        run("phantom", place / "recipe.toml", "--out", place / "bed")
    bed = np.asarray(Image.open(place / "bed" / "mesh.png"))
    with (place / "bed" / "truth" / "mesh" / "segments.csv").open(encoding="utf-8") as table:
        true_um = sum(float(row["length_um"]) for row in csv.DictReader(table))
    print("    MP  px/side  CPU s  s/MP  wall s  peak MB  bytes/px  segments  length/truth")
    for size in megapixels or MEGAPIXELS:
        edge = round(1000 * float(size) ** 0.5)
        study = write_mosaic(place / f"mosaic-{size}", bed, edge)
        out = place / f"mosaic-{size}" / "results"
        seconds, wall, peak_mb = run("measure", study, "--out", out, "--workers", "1", "--quiet", "--force")
        with (out / "images" / "mosaic" / "image.csv").open(encoding="utf-8") as table:
            image = next(csv.DictReader(table))
        expected = true_um * edge**2 / EDGE_PX**2  # holds for whole beds; a part of one may be denser or sparser
        print(
            f"{edge**2 / 1e6:6.0f} {edge:8d} {seconds:6.0f} {seconds / edge**2 * 1e6:5.2f} {wall:7.0f} {peak_mb:8.0f} "
            f"{(peak_mb - 300) * 1e6 / edge**2:9.1f} {int(image['n_segments']):9d} "
            f"{float(image['length_um']) / expected:13.3f}",
            flush=True,
        )


def write_mosaic(place: Path, bed: NDArray[np.uint16], edge: int) -> Path:
    """Write the picture, tile by tile, with its sheet and study."""
    place.mkdir(parents=True, exist_ok=True)
    across = np.arange(edge)
    folded = across % (2 * EDGE_PX)
    folded = np.minimum(folded, 2 * EDGE_PX - 1 - folded)

    def tiles() -> Iterator[NDArray[np.uint16]]:
        for top in range(0, edge, TILE_PX):
            rows = bed[folded[top : top + TILE_PX]]
            for left in range(0, edge, TILE_PX):
                tile = rows[:, folded[left : left + TILE_PX]]
                yield np.pad(tile, [(0, TILE_PX - n) for n in tile.shape])

    tifffile.imwrite(
        place / "mosaic.tif", tiles(), shape=(edge, edge), dtype=bed.dtype, tile=(TILE_PX, TILE_PX),
        photometric="minisblack", compression="zlib", metadata=None,
    )  # fmt: skip
    (place / "images.csv").write_text("image_id,file,pixel_size_um\nmosaic,mosaic.tif,1.0\n", encoding="utf-8")
    (place / "study.toml").write_text(STUDY, encoding="utf-8")
    return place / "study.toml"


def run(*arguments: str | Path) -> tuple[float, float, float]:
    """Run the command; return processor and clock seconds, and the largest resident memory of a process in MB."""
    begun = time.monotonic()
    process = subprocess.Popen([sys.executable, "-m", "vasohm", *map(str, arguments)])
    _, status, used = os.wait4(process.pid, 0)
    if status:
        sys.exit(f"{' '.join(map(str, arguments))}: status {status}")
    return used.ru_utime + used.ru_stime, time.monotonic() - begun, used.ru_maxrss / 1024


if __name__ == "__main__":
    main(*sys.argv[1:])
