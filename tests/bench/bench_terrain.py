"""How long do the horizons of a large tile take beside plain passes over its memory?

Run: .venv/bin/python tests/bench/bench_terrain.py [--size 3660] [--azimuths 32] [--threads 2] [--rounds 3]
Prints medians, kernels compiled before: horizons, sky view, and as many numpy copies of the grid to uint8, on as many
threads; and the ratio of the first to the last.
"""

from __future__ import annotations

import argparse
import statistics
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from firnlight.physics import horizon_fast, terrain

CELL_M, EARTH_M = 30.0, 6_371_000.0


def relief(size: int) -> np.ndarray:
    """Invented mountains with a spectrum of k^-2: (size, size) float32. [m]"""
    wave = np.fft.rfft2(np.random.default_rng(0).normal(size=(size, size)))
    k = np.hypot(np.fft.fftfreq(size)[:, np.newaxis], np.fft.rfftfreq(size))
    k[0, 0] = 1
    z = np.fft.irfft2(wave * k**-2.0, s=(size, size))
    return (z / z.std() * 600 + 1500).astype(np.float32)


def seconds(threads: int, azimuths: int, work: Callable[[int], None]) -> float:
    begun = time.perf_counter()
    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(work, range(azimuths)))
    return time.perf_counter() - begun


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    for name, default in (("size", 3660), ("azimuths", 32), ("threads", 2), ("rounds", 3)):
        parser.add_argument(f"--{name}", type=int, default=default)
    args = parser.parse_args()
    n = args.azimuths
    z = relief(args.size)
    east, north = terrain.gradient(np.pad(z, 1, mode="edge"), CELL_M)
    codes = np.zeros((n, *z.shape), np.uint8)
    views = np.zeros((args.threads, *z.shape), np.float32)
    small = np.zeros((8, 8), np.float32)
    horizon_fast.horizon_codes(small, 0, CELL_M, EARTH_M, np.empty((8, 8), np.uint8))
    horizon_fast.sky_view_add(np.zeros((8, 8), np.uint8), 0, small, small, 1 / n, small.copy())

    def horizons(k: int) -> None:
        horizon_fast.horizon_codes(z, k * 360 / n, CELL_M, EARTH_M, codes[k])

    def copies(k: int) -> None:
        np.copyto(codes[k], z, casting="unsafe")

    def views_of(thread: int) -> None:
        for k in range(thread, n, args.threads):
            horizon_fast.sky_view_add(codes[k], k * 360 / n, east, north, 1 / n, views[thread])

    found: dict[str, list[float]] = {"copies": [], "horizons": [], "sky view": []}
    for _ in range(args.rounds):
        with np.errstate(invalid="ignore"):
            found["copies"].append(seconds(args.threads, n, copies))
        found["horizons"].append(seconds(args.threads, n, horizons))
        views[:] = 0
        found["sky view"].append(seconds(args.threads, args.threads, views_of))
    medians = {name: statistics.median(times) for name, times in found.items()}
    print(f"{args.size} x {args.size} cells, {n} azimuths, {args.threads} threads, median of {args.rounds}")
    for name, median in medians.items():
        print(f"{name:9} {median:7.2f} s")
    print(f"horizons / copies {medians['horizons'] / medians['copies']:.1f}; mean sky view {views.sum(axis=0).mean():.4f}")


if __name__ == "__main__":
    main()
