"""How the time to solve a mesh grows with its number of segments.

Usage: python benchmarks/network_solver.py [--million] [--estimate]

Square meshes with resistances over two decades, an inlet and an outlet at opposite corners. Each size is solved until a
second has passed, or once, and the least CPU time counts, on one thread. The growth is the exponent p of n^p between
neighbouring sizes, of one run on one machine; it tells more than the seconds do.
"""

import argparse
import resource
import sys
import time
from collections.abc import Callable

import numpy as np
import pandas as pd
from threadpoolctl import threadpool_limits

import vasohm
from vasohm.flow.estimated_ends import EndProblem, nearest_pressures
from vasohm.flow.kirchhoff import solve_flows

SIZES = (1_000, 10_000, 100_000)
MOST_ESTIMATED = 30_000  # segments of a mesh whose ends are estimated: its fill-in grows faster
LEAST_SECONDS = 1.0


def mesh(n_segments: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Nodes that each segment leaves and reaches, and radii in um."""
    side = int(np.sqrt(n_segments / 2)) + 1
    index = np.arange(side * side).reshape(side, side)
    a = np.concatenate([index[:, :-1].ravel(), index[:-1].ravel()])
    b = np.concatenate([index[:, 1:].ravel(), index[1:].ravel()])
    rng = np.random.default_rng(side)
    return a, b, np.exp(rng.normal(np.log(5.0), 0.3, a.size))


def least_time(work: Callable[[], object]) -> float:
    """Least CPU time of a call, in seconds."""
    times, begun = [], time.process_time()
    while not times or time.process_time() - begun < LEAST_SECONDS:
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return min(times)


def solver(a: np.ndarray, b: np.ndarray, resistance: np.ndarray) -> Callable[[], object]:
    """Solve by arrays alone."""
    n = int(b.max()) + 1
    fixed = np.full(n, np.nan)
    fixed[[0, n - 1]] = 1.0, 0.0
    return lambda: solve_flows((a, b), resistance, fixed, np.zeros(n))


def whole_call(a: np.ndarray, b: np.ndarray, resistance: np.ndarray) -> Callable[[], object]:
    """Solve as a person would, from a table."""
    edges = pd.DataFrame({"node_a": a, "node_b": b, "resistance_pa_s_m3": resistance})
    return lambda: vasohm.solve_network(edges, 0, int(b.max()))


def estimator(a: np.ndarray, b: np.ndarray, resistance: np.ndarray, radius: np.ndarray) -> Callable[[], object]:
    """Estimate the flows at a hundred unknown ends."""
    n = int(b.max()) + 1
    inflow = np.zeros(n)
    inflow[np.linspace(0, n - 1, 100).astype(int)] = np.nan
    problem = EndProblem(
        ends=(a, b),
        resistance=resistance,
        shear_per_drop=radius / 200.0,
        length=np.full(a.size, 100.0),
        shear_target=np.full(a.size, 2.0),
        shear_sd=1.0,
        pressure_target=np.full(n, 4000.0),
        pressure_sd=2000.0,
        fixed_pressure=np.full(n, np.nan),
        inflow=inflow,
        held=np.zeros(a.size),
        start=np.ones(a.size),
    )
    return lambda: nearest_pressures(problem)


def report(name: str, sizes: list[int], seconds: list[float]) -> None:
    """Print one line a size."""
    for k, (n, took) in enumerate(zip(sizes, seconds, strict=True)):
        growth = ""
        if k:
            exponent = np.log(took / seconds[k - 1]) / np.log(n / sizes[k - 1])
            growth = f"   n^{exponent:.2f}"
        print(f"{name:24s} {n:9d} segments {took:9.3f} s{growth}")


def main() -> None:
    """Time all sizes."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--million", action="store_true", help="a million segments too: about a minute and 4 GB")
    parser.add_argument("--estimate", action="store_true", help="estimated ends too")
    chosen = parser.parse_args()
    sizes = [*SIZES, 1_000_000] if chosen.million else list(SIZES)
    meshes = {n: mesh(n) for n in sizes}
    made = {n: 8 * 3e-3 * 1e-4 / (np.pi * (radius * 1e-6) ** 4) for n, (_, _, radius) in meshes.items()}
    for name, build in (("solve_flows", solver), ("solve_network (table)", whole_call)):
        report(name, sizes, [least_time(build(*meshes[n][:2], made[n])) for n in sizes])
    if chosen.estimate:
        small = [n for n in sizes if n <= MOST_ESTIMATED]
        times = [least_time(estimator(*meshes[n][:2], made[n], meshes[n][2])) for n in small]
        report("estimated ends", small, times)
    unit = 1 if sys.platform == "darwin" else 1024
    print(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit / 1e9:.2f} GB")


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
