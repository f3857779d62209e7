"""How long does a day's light on the slopes of a large tile take beside that on flat ground?

Run: .venv/bin/python tests/bench/bench_light.py [--size 3660] [--threads 2] [--rounds 3]
Prints medians, kernels compiled before: light on slopes with the sun's path in half hours, and on flat ground, row block by
row block on as many threads; and the ratio of the two.
"""

from __future__ import annotations

import argparse
import datetime as dt
import statistics
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from firnlight.core.grid import Grid, Window
from firnlight.core.settings import Insolation
from firnlight.io.ground import positions
from firnlight.stages import insolation

CELL_M, BLOCK = 30.0, 512
DAY = dt.date(2024, 6, 21)


def seconds(threads: int, windows: list[Window], work: Callable[[Window], object]) -> float:
    begun = time.perf_counter()
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(work, windows))
    return time.perf_counter() - begun


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    for name, default in (("size", 3660), ("threads", 2), ("rounds", 3)):
        parser.add_argument(f"--{name}", type=int, default=default)
    args = parser.parse_args()
    n, rng = args.size, np.random.default_rng(0)
    grid = Grid("EPSG:32632", 400_000.0, 5_200_000.0, CELL_M, CELL_M, n, n)
    begun = time.perf_counter()
    sky = insolation.sky_lattice(
        DAY, (), *positions(grid, insolation.lattice_step(CELL_M)), Insolation(), heights_m=(500.0, 3500.0)
    )
    assert sky.paths is not None
    print(f"sky of the day {time.perf_counter() - begun:.2f} s, {sky.paths.beam.shape[2]} nodes of sun")
    elevation = rng.uniform(500, 3500, (n, n)).astype(np.float32)
    albedo = rng.integers(0, 10001, (n, n)).astype(np.int16)
    slope, aspect, view = (
        rng.integers(low, high, (n, n)).astype(np.int16) for low, high in ((0, 5000), (0, 18001), (7000, 10001))
    )
    codes = rng.integers(0, 80, (len(sky.directions), n, n)).astype(np.uint8)
    step = insolation.around_step(CELL_M)
    around = rng.uniform(0.1, 0.9, (-(-n // step), -(-n // step)))

    def on_slopes(window: Window) -> object:
        part = window.slices
        # as a run reads it: each block's horizons lie together
        relief = insolation.Relief(slope[part], aspect[part], view[part], np.ascontiguousarray(codes[:, *part]))
        seen = np.ones((window.rows, window.cols), bool)
        return insolation.slope_insolation(seen, elevation[part], relief, around, step, window, sky)

    def on_flat_ground(window: Window) -> object:
        return insolation.flat_insolation(albedo[window.slices], elevation[window.slices], window, sky)

    windows = list(grid.windows(BLOCK, BLOCK))
    works = {"flat": on_flat_ground, "slopes": on_slopes}
    for work in works.values():
        work(windows[0])
    found: dict[str, list[float]] = {name: [] for name in works}
    for _ in range(args.rounds):
        for name, work in works.items():
            found[name].append(seconds(args.threads, windows, work))
    medians = {name: statistics.median(times) for name, times in found.items()}
    print(f"{n} x {n} cells, {args.threads} threads, median of {args.rounds}")
    for name, median in medians.items():
        print(f"{name:7} {median:7.2f} s")
    print(f"slopes / flat {medians['slopes'] / medians['flat']:.1f}")


if __name__ == "__main__":
    main()
