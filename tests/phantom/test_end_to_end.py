"""The whole way, from a rendered picture to the resistance of its segments, against exact truth."""

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from vasohm.study.appraise import appraise
from vasohm_synthetic.make import make_phantoms
from vasohm_synthetic.recipe import read_recipe

RECIPES = Path(__file__).parents[1] / "data"
RESOLVED_PX = 1.5  # thinner vessels are measured too, but not held to these figures
R_TOLERANCE = 0.03  # of the geometric mean of R over truth
LEAST_COVERED = 0.90  # of the stated 95 % intervals
LEAST_FOUND, MOST_INVENTED = 0.95, 0.02


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["dark", "bright"])
def test_segment_resistances_of_clear_trees(kind, tmp_path):
    """Wrong if any stage between light and resistance were off: 1 % of a radius is 4 % of a resistance."""
    make_phantoms(read_recipe(RECIPES / f"clear-trees-{kind}.toml"), tmp_path / "made")
    command = [sys.executable, "-m", "vasohm", "measure", tmp_path / "made" / "study.toml", "--out", tmp_path / "out"]
    subprocess.run([*command, "--quiet"], check=True)
    appraisal = appraise(tmp_path / "out", tmp_path / "made")
    segments = appraisal.segments
    held = segments[(segments.left_out == "") & (segments.radius_true_px >= RESOLVED_PX)]
    assert len(held) > 250
    ln_ratio = np.log(held.resistance_ratio.to_numpy(float))
    assert np.exp(ln_ratio.mean()) == pytest.approx(1.0, abs=R_TOLERANCE)
    assert held.inside_95.to_numpy(float).mean() >= LEAST_COVERED
    length = appraisal.summary["length"]
    assert length["length_found_um"] >= LEAST_FOUND * length["length_true_um"]
    assert length["length_stray_um"] <= MOST_INVENTED * length["length_true_um"]
    assert np.mean(np.abs(held.z.to_numpy(float)) < 1.0) < LEAST_COVERED  # teeth: half the interval would not pass
