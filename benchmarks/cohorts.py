"""Simulated cohorts: how often nothing is called something, how often intervals hold the truth, and power.

Usage: cohorts.py [REPEATS]. Prints one line a design: share of simulated studies without effect in which p < 0.05, of
tests that take vessels or images for subjects and of ours (with what its permutation test gives); and how often our
95 % interval holds a true ratio of 1.3.
"""

import sys
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats

from vasohm.cohorts.compare import compare_groups

BETWEEN_SD, EYE_SD, IMAGE_SD, VESSEL_SD = 0.25, 0.11, 0.06, 0.3  # of ln; two eyes correlate by 0.84


@dataclass(frozen=True)
class Design:
    """A study to simulate."""

    name: str
    n_level: int
    n_reference: int
    images: tuple[int, int] = (1, 1)  # least and most an eye
    vessels: int = 0  # an image; 0: rows are images
    one_eyed: float = 0.0  # share of subjects with one eye
    sd_ratio: float = 1.0  # between subjects, of the level over the reference
    age: float = 0.0  # effect of a year on ln, ages differ by 3 years between the groups
    own_scales: float = 0.0  # relative standard uncertainty of a calibration that each group has for itself
    noise: tuple[float, float] = (0.0, 0.0)  # least and most stated random uncertainty of an image
    paired: bool = False
    lost: float = 0.0  # share of subjects of a paired study seen at one level only


DESIGNS = (
    Design("10 + 10, two eyes", 10, 10),
    Design("10 + 10, two eyes, 20 vessels each", 10, 10, vessels=20),
    Design("8 + 12, one or two eyes, 1 to 3 images", 8, 12, images=(1, 3), one_eyed=0.4),
    Design("15 + 15, one or two eyes, 1 to 3 images", 15, 15, images=(1, 3), one_eyed=0.4),
    Design("6 + 6, 1 to 4 images", 6, 6, images=(1, 4)),
    Design("3 + 3, two eyes", 3, 3),
    Design("4 + 12, spread twice as wide in the few", 4, 12, sd_ratio=2.0),
    Design("12 + 12, age accounted for", 12, 12, age=0.03),
    Design("10 + 10, noise 2 to 40 %", 10, 10, noise=(0.02, 0.4)),
    Design("10 + 10, a scale of 5 % each", 10, 10, own_scales=0.05),
    Design("8 pairs", 8, 8, paired=True),
    Design("18 pairs, a fifth seen once", 18, 18, paired=True, lost=0.2, images=(1, 2)),
)


def simulate(design: Design, rng: np.random.Generator) -> pd.DataFrame:
    """Return one study, one row a vessel or an image."""
    rows = []
    scale = dict(zip("ab", rng.normal(0, 1, 2) * design.own_scales, strict=True))
    sides = [("a", design.n_level), ("b", design.n_reference)]
    subjects = [(f"{side}{k}", (side,)) for side, n in sides for k in range(n)]
    if design.paired:
        subjects = [
            (f"s{k}", ("a", "b") if rng.random() >= design.lost else ("ab"[k % 2],)) for k in range(design.n_level)
        ]
    for subject, levels in subjects:
        spread = BETWEEN_SD * (design.sd_ratio if levels[0] == "a" and not design.paired else 1.0)
        own, age = rng.normal(0, spread), rng.normal(60 + 3 * (levels[0] == "a"), 8)
        eyes = "L" if rng.random() < design.one_eyed else "LR"
        eye_effects = {eye: rng.normal(0, EYE_SD) for eye in eyes}
        for level in levels:
            state = rng.normal(0, 0.08)
            for eye in eyes:
                for image in range(rng.integers(design.images[0], design.images[1] + 1)):
                    se = rng.uniform(*design.noise) if design.noise[1] else 0.0
                    mean = own + state + eye_effects[eye] + rng.normal(0, IMAGE_SD) + rng.normal(0, 1) * se
                    mean += design.age * (age - 60) + 3 * scale[level]
                    row = (subject, eye, level, f"{level}{eye}{image}", age, se, 3 * design.own_scales)
                    values = (
                        np.exp(mean + rng.normal(0, VESSEL_SD, design.vessels)) if design.vessels else [np.exp(mean)]
                    )
                    rows += [(*row, value) for value in values]
    names = ["subject", "eye", "group", "image", "age", "se", "shared", "value"]
    return pd.DataFrame(rows, columns=names)


def ours(design: Design, table: pd.DataFrame, seed: int) -> "pd.Series":
    """Compare as the package does."""
    noisy, scaled = design.noise[1] > 0, design.own_scales > 0
    found = compare_groups(
        table,
        outcome="value",
        by="group",
        reference="b",
        within=("eye", "image") if design.vessels else ("eye",),
        covariates=("age",) if design.age else (),
        outcome_rel_se="se" if noisy else None,
        outcome_shared_rel_se="shared" if scaled else None,
        calibration="group" if scaled else None,
        seed=seed,
    )
    return found.iloc[0]


def naive_p(table: pd.DataFrame) -> float:
    """Test that takes each row for a subject."""
    value = np.log(table["value"])
    return float(stats.ttest_ind(value[table["group"] == "a"], value[table["group"] == "b"]).pvalue)


def rates(design: Design, ln_ratio: float, repeats: int) -> dict[str, float]:
    """Per cent of simulated studies without an effect that each way calls, and that our interval holds.

    A true ratio moves estimate and interval alike: power is how often the interval leaves out its inverse.
    """
    rng = np.random.default_rng(7)
    found: dict[str, list[bool]] = {}
    for seed in range(repeats):
        table = simulate(design, rng)
        row = ours(design, table, seed)
        told = {
            "rows as subjects": naive_p(table) < 0.05,
            "ours": row["p"] < 0.05,
            "permutation": row["p_permutation"] <= 0.05,
            "coverage": row["ratio_lo"] <= 1 <= row["ratio_hi"],
            "power": not row["ratio_lo"] <= np.exp(-ln_ratio) <= row["ratio_hi"],
            "mixed model": row["method"] == "mixed model",
        }
        for name, value in told.items():
            found.setdefault(name, []).append(bool(value))
    return {name: 100 * float(np.mean(values)) for name, values in found.items()}


def main() -> None:
    """Print the table."""
    repeats = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    print(
        f"{repeats} studies each, per cent: p < 0.05 with nothing to find, coverage of 95 %, power for a ratio of 1.3"
    )
    for design in DESIGNS:
        told = ", ".join(f"{name} {rate:.1f}" for name, rate in rates(design, float(np.log(1.3)), repeats).items())
        print(f"{design.name}: {told}", flush=True)


if __name__ == "__main__":
    main()
