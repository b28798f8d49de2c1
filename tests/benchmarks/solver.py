"""Time of the damped inversion against its size, beside LAPACK's symmetric eigensolver on as many modes.

Run on demand: ``python tests/benchmarks/solver.py``. One invented island; the map grid gets finer, and so does the
prior. The yardstick is `scipy.linalg.eigh` (driver evd) on a random symmetric matrix with one row per mode of the
prior: a dense solution that needs all directions cannot be cheaper. On a machine that is busy with other work set
OPENBLAS_NUM_THREADS=1: threads of the linear algebra that wait for each other can cost tenfold.
"""

import time
from itertools import pairwise

import numpy as np
from rows import AREA_EXPONENT, ERODIBILITY, island
from scipy import linalg

from fluvinv.inversion import InversionOptions, age_nodes, invert, make_grid, nest_with_prior
from fluvinv.streampower import travel_time

N_CELLS = 220
#: Map spacing (km), age steps, and the prior's ranges as a share of the network's width and longest travel time.
SIZES = ((25.0, 6, 0.7), (20.0, 8, 0.5), (15.0, 8, 0.4), (12.0, 10, 0.3), (10.0, 12, 0.3))


def eigh_seconds(n: int) -> float:
    """Time of LAPACK's eigensolver on a random symmetric matrix."""
    matrix = np.random.default_rng(1).standard_normal((n, n))
    matrix += matrix.T
    start = time.perf_counter()
    linalg.eigh(matrix, overwrite_a=True, driver="evd")
    return time.perf_counter() - start


def timed_inversion(network, tau, grid, options) -> dict[str, float]:
    """Seconds of each step of an inversion."""
    marks = []
    invert(network, tau, grid, options, lambda step: marks.append((step, time.perf_counter())))
    marks.append(("end", time.perf_counter()))
    seconds: dict[str, float] = {}
    for (step, began), (_, ended) in pairwise(marks):
        seconds[step] = seconds.get(step, 0.0) + ended - began
    return seconds


def main() -> None:
    """Print one line per size."""
    network = island(N_CELLS)
    tau = travel_time(network, ERODIBILITY, AREA_EXPONENT)
    rng = np.random.default_rng(2)
    heights = 2e-4 * tau * (1 + 0.2 * np.sin(network.map_x / 4e4)) + rng.normal(0, 10, tau.size)
    network = type(network)(**{key: getattr(network, key) for key in network.__slots__} | {"height": heights})
    print("unknowns  modes  solver     rows  decomposition  damping  errors  eigh  (decomposition + errors) / eigh")
    for spacing, n_steps, share in SIZES:
        grid = make_grid(network, spacing * 1e3, age_nodes(tau.max() / n_steps, tau.max()))
        width = np.sqrt(float(network.area[network.outlet].sum()))
        options = InversionOptions(range_space=share * width, range_time=share * float(tau.max()))
        modes = nest_with_prior(grid, options.range_space, options.range_time)[1].n_modes
        seconds = timed_inversion(network, tau, grid, options)
        yardstick = eigh_seconds(modes)
        work = seconds["decomposition"] + seconds["errors"]
        steps = " ".join(f"{name} {seconds[name]:.2f} s," for name in ("rows", "decomposition", "damping", "errors"))
        print(
            f"{grid.n_unknowns:8,} {modes:6,}  {steps} eigh {yardstick:.2f} s, ratio {work / yardstick:.1f}",
            flush=True,
        )


if __name__ == "__main__":
    main()
