"""Weights that tell crossings from branchings, made by benchmarks/train_crossings.py and not by hand.

Trained on 1269 places where four arms meet, 575 of them crossings, in phantoms.
"""

from collections.abc import Mapping

WITH_CORE: Mapping[str, float] = {
    "intercept": 1.2478,
    "turn_max": -1.0602,
    "turn_min": 0.9796,
    "miss_max": -1.8011,
    "unlike_max": -0.7408,
    "depth_unlike_max": -2.8014,
    "bridge": 0.3336,
    "bridge_excess": 0.5721,
    "two_nodes": -0.0274,
    "crossing_sine": -0.4898,
    "sideways_turn": -0.1468,
    "radius_ratio": 1.0562,
    "arm_shortest": -0.4081,
    "core_excess": 9.5245,
    "core_excess_weighted": 6.0170,
}

WITHOUT_CORE: Mapping[str, float] = {
    "intercept": 6.7977,
    "turn_max": -2.3692,
    "turn_min": 1.9755,
    "miss_max": -2.7153,
    "unlike_max": -0.9692,
    "depth_unlike_max": -2.9997,
    "bridge": 0.0731,
    "bridge_excess": 0.2302,
    "two_nodes": 0.2150,
    "crossing_sine": 2.0025,
    "sideways_turn": -0.2469,
    "radius_ratio": 1.1341,
    "arm_shortest": -1.6287,
    "core_excess": 0.0000,
    "core_excess_weighted": 0.0000,
}
