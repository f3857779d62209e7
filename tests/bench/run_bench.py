"""How long does a night on one large tile take beside decoding its inputs and encoding its outputs alone?

Run: .venv/bin/python tests/bench/run_bench.py [--size 10980] [--rounds 3]
Prints, from one run and in turn: (a) the floor: decode all inputs, encode all outputs, same codec and threads;
(b) `firnlight night` as a whole process with kernels compiled, the relief of the tile in it; peak memory of b;
(c) a flat night and (d) one with terrain, both after the first: what is worked out once per tile is kept.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import platform
import re
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import rasterio
from rasterio.windows import Window

from firnlight.core.grid import Grid
from firnlight.core.layers import layer, layer_names
from firnlight.io.cog import CogWriter
from firnlight.io.rasters import grid_of

BLOCK = (512, 2048)


def night(folder: Path, workflow: str = "workflow.toml", after_the_first: bool = False) -> tuple[float, float]:
    """Seconds and peak resident MiB of a night on an empty store, or on one that holds the static ground alone.

    The high-water mark is read from the process itself: what wait4 tells also holds the memory of this one.
    """
    store = folder / ("store" if workflow == "workflow.toml" else f"store_{Path(workflow).stem}")
    for part in (store / "maps", store / "budget") if after_the_first else (store,):
        shutil.rmtree(part, ignore_errors=True)
    (store / "ledger.db").unlink(missing_ok=True)
    begun = time.perf_counter()
    command = [sys.executable, "-m", "firnlight", "night", str(folder / workflow), "--quiet"]
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL)
    peak_kib = 0
    while process.poll() is None:
        with contextlib.suppress(OSError):
            text = Path(f"/proc/{process.pid}/status").read_text(encoding="utf-8")
            peak_kib = max(peak_kib, *(int(line.split()[1]) for line in text.splitlines() if line.startswith("VmHWM")), 0)
        time.sleep(0.1)
    if process.returncode:
        raise SystemExit(f"the night ended with exit code {process.returncode}")
    return time.perf_counter() - begun, peak_kib / 1024


def floor(folder: Path, workers: int) -> float:
    """Seconds to decode every input once and to encode the night's own outputs once."""
    inputs = sorted((folder / "scenes").rglob("*.tif")) + sorted((folder / "static").rglob("*.tif"))
    maps = next((folder / "store/maps").glob("*/*"))
    grid: Grid = grid_of(inputs[0])
    windows = list(grid.windows(*BLOCK))
    cells = {}
    names = [name for name in layer_names() if (maps / f"{name}.tif").exists()]
    for name in names:
        with rasterio.open(maps / f"{name}.tif") as dataset:
            cells[name] = dataset.read()
    begun = time.perf_counter()

    def decode(path: Path) -> None:
        with rasterio.open(path, sharing=False) as dataset:
            for w in windows:
                dataset.read(1, window=Window(w.col, w.row, w.cols, w.rows))

    def encode(name: str) -> None:
        writer = CogWriter(folder / "floor" / f"{name}.tif", layer(name), grid, {})
        for w in windows:
            writer.write(w, cells[name][(slice(None), *w.slices)])
        writer.finish()
        writer.discard()

    with ThreadPoolExecutor(workers) as pool:
        list(pool.map(decode, inputs))
        list(pool.map(encode, names))
    return time.perf_counter() - begun


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--size", type=int, default=10980)
    parser.add_argument("--rounds", type=int, default=3)
    chosen = parser.parse_args()
    workers = len(os.sched_getaffinity(0))
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch) / "area"
        demo = ["demo", str(folder), "--tiles", "1", "--size", str(chosen.size), "--scenes", "1"]
        subprocess.run([sys.executable, "-m", "firnlight", *demo], check=True, stdout=subprocess.DEVNULL)
        text = (folder / "workflow.toml").read_text(encoding="utf-8")
        for name, terrain in (("flat", "false"), ("terrain", "true")):
            changed = re.sub(r"terrain = \w+", f"terrain = {terrain}", text).replace(
                'path = "store"', f'path = "store_{name}"'
            )
            (folder / f"{name}.toml").write_text(changed, encoding="utf-8")
        night(folder)  # compiles the kernels
        first, first_peak = night(folder, "terrain.toml")
        night(folder, "flat.toml")
        times: dict[str, list[float]] = {"floor": [], "night": [], "flat": [], "terrain": []}
        peaks, terrain_peaks = [], [first_peak]
        for _ in range(chosen.rounds):
            times["floor"].append(floor(folder, workers))
            seconds, peak = night(folder)
            times["night"].append(seconds)
            peaks.append(peak)
            times["flat"].append(night(folder, "flat.toml", after_the_first=True)[0])
            seconds, peak = night(folder, "terrain.toml", after_the_first=True)
            times["terrain"].append(seconds)
            terrain_peaks.append(peak)
    a, b, c, d = (statistics.median(one) for one in times.values())
    said = {name: [round(x, 1) for x in one] for name, one in times.items()}
    print(json.dumps({"size": chosen.size, "workers": workers, "machine": platform.processor() or platform.machine()}))
    print(f"(a) decode inputs + encode outputs alone: {a:.1f} s (of {said['floor']})")
    print(f"(b) firnlight night, whole process:       {b:.1f} s (of {said['night']})")
    print(f"b / a = {b / a:.2f}, d / a = {d / a:.2f};  peak memory of b: {np.max(peaks):.0f} MiB")
    print(f"(c) flat night after the first:           {c:.1f} s (of {said['flat']})")
    print(f"(d) night with terrain after the first:   {d:.1f} s (of {said['terrain']}); the first one {first:.1f} s")
    print(f"d / c = {d / c:.2f};  peak memory of d: {np.max(terrain_peaks):.0f} MiB")


if __name__ == "__main__":
    main()
