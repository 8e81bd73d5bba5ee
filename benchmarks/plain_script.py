"""What a laboratory would write in an afternoon with general-purpose libraries, as a yardstick of speed and memory.

python benchmarks/plain_script.py IMAGE PIXEL_SIZE_UM POLARITY OUT.csv

Ridge filter, threshold, thinning, distance to the outline, one row a piece of skeleton with its length, mean radius and
resistance at a constant viscosity. No uncertainty, no crossings, no network.
"""

import sys

import numpy as np
import pandas as pd
from scipy import ndimage
from skimage import filters, io, measure, morphology

VISCOSITY_PA_S = 3e-3
SIGMAS_PX = (1.0, 2.0, 3.0, 4.0, 6.0, 8.0)
LEAST_PX = 50
RIDGES_SHARE = 0.10  # of the picture's strongest answers are taken for vessels
NEIGHBOURS = np.ones((3, 3))


def main(image: str, pixel_size_um: str, polarity: str, out: str) -> None:
    """Measure one picture."""
    pixels = io.imread(image)
    grey = pixels[..., 1] if pixels.ndim == 3 else pixels
    grey = grey.astype(float) / max(float(grey.max()), 1.0)
    ridge = filters.sato(grey, sigmas=SIGMAS_PX, black_ridges=polarity == "dark")
    high = np.quantile(ridge, 1 - RIDGES_SHARE / 2)
    low = np.quantile(ridge, 1 - RIDGES_SHARE)
    mask = morphology.remove_small_objects(filters.apply_hysteresis_threshold(ridge, low, high), max_size=LEAST_PX)
    skeleton = morphology.skeletonize(mask)
    radius_px = ndimage.distance_transform_edt(mask)
    count = ndimage.convolve(skeleton.astype(np.uint8), NEIGHBOURS.astype(np.uint8), mode="constant") - 1
    pieces = measure.label(skeleton & (count <= 2), connectivity=2)
    pixel_um = float(pixel_size_um)
    rows = []
    for piece in measure.regionprops(pieces):
        radius_um = radius_px[piece.coords[:, 0], piece.coords[:, 1]] * pixel_um
        length_um = max(measure.perimeter(np.pad(piece.image, 1)) / 2, 1.0) * pixel_um
        resistance = 8 * VISCOSITY_PA_S / np.pi * length_um * np.mean(radius_um**-4.0) * 1e18
        rows.append(
            {
                "segment": piece.label,
                "length_um": length_um,
                "radius_mean_um": radius_um.mean(),
                "radius_sd_um": radius_um.std(),
                "resistance_pa_s_m3": resistance,
            }
        )
    pd.DataFrame(rows).to_csv(out, index=False)


if __name__ == "__main__":
    main(*sys.argv[1:])
