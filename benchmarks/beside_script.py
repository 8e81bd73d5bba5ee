"""Time and memory of vasohm beside a plain script on general-purpose libraries, on the same pictures in one run.

    python benchmarks/beside_script.py [--rounds 3] [--mesh-px 3000] [--growth] [--images]

Both run as child processes in turn, one thread each; their processor time and largest resident memory are taken, so
that other work on the machine matters little. Prints both for the demonstration's photograph and a capillary mesh, and
the seconds of each of vasohm's stages a megapixel. --growth goes on with meshes from 0.25 to 64 megapixels, --images
with 1 to 64 copies of a small one.
"""

import argparse
import csv
import os
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path
from statistics import median

import numpy as np
from PIL import Image

HERE = Path(__file__).parent
CONFIGS = HERE.parent / "configs"
PHOTOGRAPH_UM, MESH_UM = 7.0, 1.0  # edge of a pixel
BED_PX = 1000  # larger meshes are this one, mirrored side by side
MESH_PX = 1500
GROWTH_PX = (500, 1000, 2000, 4000, 8000)
IMAGES = (1, 4, 16, 64)
ONE_THREAD = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
STUDY = """
[study]
name  = "{name}"
sheet = "images.csv"
allow_outside = true
[image]
preset         = "{preset}"
max_megapixels = 1000
[segment]
radius_um = [{smallest}, {largest}]
"""


@dataclass(frozen=True)
class Picture:
    """A picture, what both ways must be told of it, and how often the study names it."""

    name: str
    file: Path
    pixel_um: float
    preset: str
    radius_um: tuple[float, float]
    copies: int = 1

    @property
    def megapixels(self) -> float:
        with Image.open(self.file) as picture:
            return self.copies * picture.width * picture.height / 1e6

    @property
    def polarity(self) -> str:
        return "dark" if self.preset == "fundus" else "bright"


@dataclass(frozen=True)
class Cost:
    """What a process and its children took."""

    cpu_s: float
    peak_mb: float


def run(*words: str | Path) -> Cost:
    """Run Python with these words to its end."""
    command = [sys.executable, *map(str, words)]
    process = subprocess.Popen(command, env=os.environ | ONE_THREAD, stdout=subprocess.DEVNULL)
    _, status, used = os.wait4(process.pid, 0)
    if status:
        sys.exit(f"{' '.join(command)}: status {status}")
    return Cost(used.ru_utime + used.ru_stime, used.ru_maxrss / 1024)


def by_script(picture: Picture, out: Path) -> Cost:
    """Measure with the plain script, a process for every copy as a shell's loop would do."""
    words = (HERE / "plain_script.py", picture.file, str(picture.pixel_um), picture.polarity, out)
    each = [run(*words) for _ in range(picture.copies)]
    return Cost(sum(one.cpu_s for one in each), max(one.peak_mb for one in each))


def by_vasohm(picture: Picture, folder: Path) -> tuple[Cost, dict[str, float]]:
    """Measure with the command; also the seconds of each stage, summed over copies."""
    ids = [f"p{number}" for number in range(picture.copies)]
    rows = [f"{one},{picture.file.resolve()},{picture.pixel_um}" for one in ids]
    (folder / "images.csv").write_text("\n".join(["image_id,file,pixel_size_um", *rows]) + "\n", encoding="utf-8")
    smallest, largest = picture.radius_um
    text = STUDY.format(name=picture.name, preset=picture.preset, smallest=smallest, largest=largest)
    (folder / "study.toml").write_text(text, encoding="utf-8")
    out = folder / "results"
    words = ("-m", "vasohm", "measure", folder / "study.toml", "--out", out, "--workers", "1", "--quiet")
    cost = run(*words)
    stages: dict[str, float] = {}
    with (out / "run" / "times.csv").open(encoding="utf-8") as table:
        for row in csv.DictReader(table):
            stages[row["stage"]] = stages.get(row["stage"], 0.0) + float(row["seconds"])
    return cost, stages


def compare(picture: Picture, rounds: int) -> dict[str, float]:
    """Measure a picture in both ways in turn and print a line; return medians of vasohm's stages."""
    plain, ours, stages = [], [], []
    for _ in range(rounds):
        with tempfile.TemporaryDirectory() as name:
            plain.append(by_script(picture, Path(name) / "plain.csv"))
            cost, told = by_vasohm(picture, Path(name))
            ours.append(cost)
            stages.append(told)
    megapixels = picture.megapixels
    cells = [f"{picture.name:14} {megapixels:6.2f}"]
    for costs in (plain, ours):
        cpu = median(cost.cpu_s for cost in costs)
        cells.append(f"{cpu:8.1f} {cpu / megapixels:6.2f} {median(cost.peak_mb for cost in costs):7.0f}")
    ratio = median(own.cpu_s / other.cpu_s for own, other in zip(ours, plain, strict=True))
    print("  ".join(cells), f" {ratio:5.2f}", flush=True)
    return {stage: median(one[stage] for one in stages) / megapixels for stage in stages[0]}


def draw_mesh(folder: Path) -> Path:
    """Render the ready recipe's mesh at BED_PX."""
    recipe = (CONFIGS / "phantom-mesh.toml").read_text(encoding="utf-8")
    recipe = recipe.split("[[image]]")[0].replace("= 512", f"= {BED_PX}") + '[[image]]\nimage_id = "mesh"\n'
    (folder / "recipe.toml").write_text(recipe, encoding="utf-8")
    run("-m", "vasohm", "phantom", folder / "recipe.toml", "--out", folder / "bed")
    return folder / "bed" / "mesh.png"


def mesh(folder: Path, bed: Path, edge: int, copies: int = 1) -> Picture:
    """Cut or unfold the mesh to `edge` x `edge` px; vessels go on over the seams."""
    folded = np.arange(edge) % (2 * BED_PX)
    folded = np.minimum(folded, 2 * BED_PX - 1 - folded)
    file = folder / f"mesh-{edge}.png"
    Image.fromarray(np.asarray(Image.open(bed))[np.ix_(folded, folded)]).save(file)
    name = f"mesh {edge}" if copies == 1 else f"{copies} x mesh {edge}"
    return Picture(name, file, MESH_UM, "fluorescence", (1.0, 10.0), copies)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--mesh-px", type=int, default=MESH_PX)
    parser.add_argument("--growth", action="store_true")
    parser.add_argument("--images", action="store_true")
    asked = parser.parse_args()
    print("                           plain script             vasohm")
    print("picture            MP    CPU s   s/MP peak MB     CPU s   s/MP peak MB   ratio", flush=True)
    Image.MAX_IMAGE_PIXELS = None
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        photograph = Picture("photograph", CONFIGS / "demo" / "retina.jpg", PHOTOGRAPH_UM, "fundus", (3.0, 100.0))
        bed = draw_mesh(folder)
        dense = mesh(folder, bed, asked.mesh_px)
        stages = {picture.name: compare(picture, asked.rounds) for picture in (photograph, dense)}
        for edge in GROWTH_PX if asked.growth else ():
            compare(mesh(folder, bed, edge), 1)
        for copies in IMAGES if asked.images else ():
            compare(mesh(folder, bed, GROWTH_PX[0], copies), 1)
    print("\nSeconds a megapixel of the clock, by stage")
    for picture_name, seconds in stages.items():
        each = "  ".join(f"{stage} {value:.2f}" for stage, value in seconds.items())
        print(f"{picture_name:14} {each}  all {sum(seconds.values()):.2f}")


if __name__ == "__main__":
    main()
