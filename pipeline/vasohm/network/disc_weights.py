"""Weights that tell the optic disc from other places, made by benchmarks/train_disc.py and not by hand.

Trained on 802 places, 128 of them discs, in 124 phantoms of which 75 have a disc.
"""

from collections.abc import Mapping

WEIGHTS: Mapping[str, float] = {
    "intercept": -27.322,
    "excess": 0.939,
    "complete": 11.290,
    "sharp": 8.288,
    "scatter": -21.843,
    "steady": 1.535,
    "pointing": 7.382,
    "trunks": 4.643,
    "width": 0.255,
}
