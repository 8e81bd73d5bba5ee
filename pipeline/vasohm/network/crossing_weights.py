"""Weights that tell crossings from branchings, made by benchmarks/train_crossings.py and not by hand.

Trained on 1516 places where four arms meet, 497 of them crossings, in phantoms.
"""

from collections.abc import Mapping

WITH_CORE: Mapping[str, float] = {
    "intercept": 6.6715,
    "turn_max": -1.6138,
    "turn_min": 1.2992,
    "miss_max": -2.5095,
    "unlike_max": -0.1617,
    "depth_unlike_max": -3.0895,
    "bridge": 0.2038,
    "bridge_excess": 0.7602,
    "two_nodes": -0.3057,
    "crossing_sine": -3.4804,
    "sideways_turn": -0.3127,
    "radius_ratio": 2.2730,
    "arm_shortest": -1.1449,
    "core_excess": 9.4294,
    "core_excess_weighted": 4.5469,
}

WITHOUT_CORE: Mapping[str, float] = {
    "intercept": 11.5387,
    "turn_max": -2.4625,
    "turn_min": 1.9452,
    "miss_max": -3.3887,
    "unlike_max": -0.3644,
    "depth_unlike_max": -3.9378,
    "bridge": -0.1002,
    "bridge_excess": 0.5048,
    "two_nodes": 0.4675,
    "crossing_sine": -1.4035,
    "sideways_turn": -0.1762,
    "radius_ratio": 2.6751,
    "arm_shortest": -2.5168,
    "core_excess": 0.0000,
    "core_excess_weighted": 0.0000,
}
