"""How much memory a measurement takes beyond its region.

usage: python tests/benchmarks/memory.py [--seed N] [--trials F]

Each measurement runs in a process of its own, after a small one has loaded and compiled everything. The peak of the
resident memory above what it was just before, and the peak that Python and numpy asked for (tracemalloc, in another
process), are divided by the size of the region in float32; for the first measurement of that shape, and for the next.
Regions: whole pictures of 512 to 4096 px, 16-bit counts, an ellipse. Then a region of 512 px in pictures of 16384 x 16384
pixels of 16 bit (0.5 GB, three file formats), which must not be loaded whole: the figure is in MB, mapped parts of the
file included. Target: at most 6 times the region. Linux only.

--trials multiplies the three runs of which the median is printed.
"""

from __future__ import annotations

import argparse
import gc
import json
import os
import statistics
import subprocess
import sys
import tempfile
import tracemalloc
from collections.abc import Callable
from pathlib import Path

os.environ.update(OPENBLAS_NUM_THREADS="1", OMP_NUM_THREADS="1", MKL_NUM_THREADS="1", NUMBA_NUM_THREADS="1")

import mrcfile
import numpy as np
import tifffile

import fringespan as fs

LARGE, SMALL, TOP_LEFT = 16384, 512, (9000, 7000)
KINDS = ("float32", "uint16", "ellipse")


def counts(rng: np.random.Generator, size: int) -> np.ndarray:
    """Return Poisson-like counts with four waves, in float32 and without large temporary arrays."""
    y = np.arange(size, dtype=np.float32)[:, None]
    x = np.arange(size, dtype=np.float32)[None]
    pixels = rng.standard_normal((size, size), dtype=np.float32)
    for v, u in ((0.032, 0.151), (-0.115, 0.108), (0.147, 0.043), (0.179, 0.194)):
        a, b = np.float32(2 * np.pi * v) * y, np.float32(2 * np.pi * u) * x
        for rows in range(0, size, 256):
            part = slice(rows, rows + 256)
            pixels[part] += 0.4 * (np.cos(a[part]) * np.cos(b) - np.sin(a[part]) * np.sin(b))
    pixels *= 20
    pixels += 400
    return pixels


def resident_kb(field: str) -> int:
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith(field + ":"):
            return int(line.split()[1])
    raise LookupError(field)


def peak_bytes(call: Callable[[], object], way: str) -> int:
    """Return the peak memory above the present while `call` runs, as the system or as tracemalloc sees it."""
    gc.collect()
    if way == "asked for":
        tracemalloc.start()
        call()
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return peak
    # 5 resets the highest resident size to the present one
    Path("/proc/self/clear_refs").write_text("5")
    before = resident_kb("VmRSS")
    call()
    return 1024 * (resident_kb("VmHWM") - before)


def warm_up(seed: int) -> None:
    """Load and compile what a measurement needs, for both types of pixels and both kinds of outline."""
    pixels = counts(np.random.default_rng(seed), 160)
    for values in (pixels, pixels.astype(np.uint16)):
        micrograph = fs.Micrograph(values, pixel_size_nm=0.02)
        fs.measure(micrograph)
        fs.measure(micrograph, fs.Region.ellipse("ellipse", (80, 80), (70, 70)))


def one_region(kind: str, size: int, way: str, seed: int) -> tuple[float, float]:
    """Return the peak over the size of the region, of the first measurement and the second."""
    warm_up(seed)
    pixels = counts(np.random.default_rng(seed), size)
    if kind == "uint16":
        pixels = pixels.astype(np.uint16)
    region = (
        fs.Region.ellipse("ellipse", (size / 2, size / 2), (0.49 * size, 0.49 * size)) if kind == "ellipse" else None
    )
    micrograph = fs.Micrograph(pixels, pixel_size_nm=0.02)
    first = peak_bytes(lambda: fs.measure(micrograph, region), way)
    return first / (4 * size * size), peak_bytes(lambda: fs.measure(micrograph, region), way) / (4 * size * size)


def large_file(path: Path, seed: int) -> None:
    """Write a large picture that is empty but for one square; most of it takes no room on the disk."""
    shape = (LARGE, LARGE)
    if path.suffix == ".npy":
        target = np.lib.format.open_memmap(path, mode="w+", dtype=np.uint16, shape=shape)
    elif path.suffix == ".tif":
        target = tifffile.memmap(path, shape=shape, dtype=np.uint16)
    else:
        opened = mrcfile.new_mmap(path, shape=shape, mrc_mode=6, overwrite=True)
        opened.voxel_size = 0.2
        target = opened.data
    rows, columns = (slice(first, first + SMALL) for first in TOP_LEFT)
    target[rows, columns] = counts(np.random.default_rng(seed), SMALL)
    target.flush()


def one_file(path: Path, way: str, seed: int) -> tuple[float, float]:
    """Return the peak in MB, of opening the file and measuring the first time and the second."""
    warm_up(seed)
    top, left = TOP_LEFT
    region = fs.Region.rectangle("square", top, left, top + SMALL - 1, left + SMALL - 1)

    def call() -> None:
        assert len(fs.measure(fs.read(path, pixel_size_nm=0.02), region).peaks) >= 4

    return peak_bytes(call, way) / 1e6, peak_bytes(call, way) / 1e6


def figures(repeat: int, what: str | Path, size: int, seed: int) -> str:
    """Return the medians over several processes: resident and asked for, each for the first and the second time."""
    line = ""
    for way in ("resident", "asked for"):
        command = [sys.executable, __file__, "--one", json.dumps([str(what), size, way, seed])]
        runs = [
            json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout)
            for _ in range(repeat)
        ]
        line += "".join(f" {statistics.median(run[k] for run in runs):9.2f}" for k in (0, 1))
    return line


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--trials", type=float, default=1.0, help="multiplies the number of processes")
    parser.add_argument("--one", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.one is not None:
        what, size, way, seed = json.loads(options.one)
        peaks = one_region(what, size, way, seed) if what in KINDS else one_file(Path(what), way, seed)
        print(json.dumps(peaks))
        return
    repeat = max(1, round(3 * options.trials))
    columns = f" {'resident':>9s} {'again':>9s} {'asked for':>9s} {'again':>9s}"
    print(f"{'whole picture or ellipse':30s}{columns}   times the region in float32")
    for kind, size in (*(("float32", n) for n in (512, 1024, 2048, 4096)), ("uint16", 2048), ("ellipse", 2048)):
        print(f"{f'{kind}, {size} px':30s}{figures(repeat, kind, size, options.seed)}", flush=True)
    print(f"{f'{SMALL} px of {LARGE} x {LARGE}':30s}{columns}   MB")
    with tempfile.TemporaryDirectory() as folder:
        for suffix in (".npy", ".tif", ".mrc"):
            path = Path(folder) / f"large{suffix}"
            large_file(path, options.seed)
            print(f"{suffix:30s}{figures(repeat, path, 0, options.seed)}", flush=True)
            path.unlink()


if __name__ == "__main__":
    main()
