"""What a measurement costs, in units of one real FFT of the same region.

usage: python tests/benchmarks/speed.py [--seed N] [--trials F] [--only sizes|start]

CPU time of one thread over that of `scipy.fft.rfft2` of the region in float32, both taken in turn in one run on pixels
that are new each time; medians. The picture holds four waves in 1/f^2 noise.

sizes, per region of 256 to 2048 px:
  whole     measure() of a whole picture, everything that it returns included
  fringes   the part of it that needs no crystal: trend, spectrum, noise, detection, joint fit
  crystal   what finding the crystal's extent, its lattice and the uncertainty it adds takes on top of that
  rest      cautions and the values returned
  ellipse   measure() of an elliptical region whose outline was measured before; "new": the first time an outline of that
            shape is seen (a rectangle of that size was measured before)
  by hand   what one would write in a notebook with numpy and scikit-image: Hann window, numpy's FFT, local maxima,
            parabola through the logarithm of the power; last columns: RMS error of g of both, over the Cramer-Rao bound

start, in fresh processes, CPU seconds: import and first measurement with compiled code in the cache and without, and
`fringespan --help` beside the import of numpy and scipy.fft.

Targets: whole at most 13 at 256 px, 6 at 512, 2.6 at 1024, 2.3 at 2048 (aims 6, 3.5, 2.0, 1.8); ellipse at most 4 at
1024 px, 8 with a new outline; crystal at most 1.0 at 1024 px; always faster than by hand; --help at most 2 times the
import. --trials multiplies the number of repetitions.
"""

from __future__ import annotations

import argparse
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

os.environ.update(OPENBLAS_NUM_THREADS="1", OMP_NUM_THREADS="1", MKL_NUM_THREADS="1", NUMBA_NUM_THREADS="1")
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import numpy as np
import scipy.fft
from skimage.feature import peak_local_max

import fringespan as fs
from fringespan.crystal_fringes import find_crystal_fringes
from fringespan.noise import ring_background
from fringespan.peaks.fringes import find_fringes
from fringespan.region import rectangle_footprint
from fringespan.settings import MeasurementSettings
from fringespan.spectrum import power_spectrum, prepare_pixels
from simulated_fringes import Wave, cramer_rao_bound, falling, fringes, matching_peak, noise

WAVES = (
    Wave((0.032, 0.151), 0.5, 0.3),
    Wave((-0.115, 0.108), 0.25, 2.0),
    Wave((0.147, 0.043), 0.4, 1.1),
    Wave((0.179, 0.194), 0.25, 4.4),
)
PIXEL_SIZE_NM = (0.02, 0.02)
REPETITIONS = {256: 200, 512: 100, 1024: 50, 2048: 24}


def by_hand(pixels: np.ndarray) -> np.ndarray:
    """Return the vectors in cycles per pixel, shape (n, 2), as a notebook would find them."""
    n = pixels.shape[0]
    window = np.hanning(n)
    power = np.abs(np.fft.fftshift(np.fft.fft2((pixels - pixels.mean()) * np.outer(window, window)))) ** 2
    logs = np.log(power)
    found = peak_local_max(logs, min_distance=5, threshold_abs=np.median(logs) + 4.5, exclude_border=5, num_peaks=24)
    middle = n // 2
    found = found[np.hypot(*(found - middle).T) > 8]
    result = []
    for row, column in found:
        place = np.array([row, column], float)
        for axis, line in enumerate((logs[row - 1 : row + 2, column], logs[row, column - 1 : column + 2])):
            place[axis] += 0.5 * (line[0] - line[2]) / (line[0] - 2 * line[1] + line[2])
        result.append((place - middle) / n)
    return np.array(result).reshape(-1, 2)


def error_by_hand(found: np.ndarray, wave: Wave, bound: np.ndarray) -> np.ndarray:
    """Return the error of the nearest vector over the bound, per axis."""
    apart = np.concatenate([found - wave.g, -found - wave.g])
    return apart[np.hypot(*apart.T).argmin()] / bound


def seconds(call: Callable[[np.ndarray], object], pixels: np.ndarray) -> float:
    start = time.process_time()
    call(pixels)
    return time.process_time() - start


def one_size(n: int, repetitions: int, seed: int) -> str:
    """Return the line of the table for square regions of n pixels."""
    rng = np.random.default_rng([seed, n])
    truth = fringes((n, n), WAVES) + 20
    bounds = [np.sqrt(np.diag(cramer_rao_bound((n, n), w.amplitude, float(falling(np.hypot(*w.g)))))) for w in WAVES]
    footprint, settings = rectangle_footprint((n, n)), MeasurementSettings()

    def fresh() -> np.ndarray:
        return (truth + noise(rng, (n, n), falling)).astype(np.float32)

    def ellipse(tilt_deg: float) -> fs.Region:
        return fs.Region.ellipse("ellipse", ((n - 1) / 2, (n - 1) / 2), (0.49 * n, 0.44 * n), tilt_deg)

    def whole(pixels: np.ndarray, region: fs.Region | None = None) -> fs.Measurement:
        return fs.measure(fs.Micrograph(pixels, pixel_size_nm=PIXEL_SIZE_NM), region)

    def fringes_only(pixels: np.ndarray) -> None:
        spectrum, prepared = power_spectrum(prepare_pixels(pixels, footprint))
        find_fringes(
            prepared, spectrum, ring_background(spectrum),
            false_peaks_per_region=settings.false_peaks_per_region,
            smallest_distance_bins=settings.smallest_distance_bins,
        )  # fmt: skip

    def with_crystal(pixels: np.ndarray) -> None:
        spectrum, prepared = power_spectrum(prepare_pixels(pixels, footprint))
        find_crystal_fringes(prepared, spectrum, settings, PIXEL_SIZE_NM, None)

    known = ellipse(0)
    calls: dict[str, Callable[[np.ndarray], object]] = {
        "rfft2": lambda pixels: scipy.fft.rfft2(pixels, workers=1),
        "whole": whole,
        "fringes": fringes_only,
        "with crystal": with_crystal,
        "ellipse": lambda pixels: whole(pixels, known),
    }
    seldom: dict[str, Callable[[np.ndarray], object]] = {
        "new": lambda pixels: whole(pixels, ellipse(rng.uniform(1, 179))),
        "by hand": by_hand,
    }
    for call in (calls | seldom).values():
        call(fresh())
    took: dict[str, list[float]] = {name: [] for name in calls | seldom}
    errors: list[np.ndarray] = []
    errors_by_hand: list[np.ndarray] = []
    for k in range(repetitions):
        pixels = fresh()
        turn = calls if k % 4 else calls | seldom
        # a new order each time, so that none always finds the pixels in the cache
        for name in rng.permutation(list(turn)):
            took[name].append(seconds(turn[name], pixels))
        peaks, found = whole(pixels).peaks, by_hand(pixels)
        for wave, bound in zip(WAVES, bounds, strict=True):
            match = matching_peak(peaks, wave.g, (n, n))
            if match is not None:
                errors.append(match[1] / bound)
            if len(found):
                errors_by_hand.append(error_by_hand(found, wave, bound))
    m = {name: float(np.median(values)) for name, values in took.items()}
    unit = m["rfft2"]
    return (
        f"{n:5d} {repetitions:4d} {1e3 * unit:9.3f} {m['whole'] / unit:6.2f} {m['fringes'] / unit:8.2f} "
        f"{(m['with crystal'] - m['fringes']) / unit:8.2f} {(m['whole'] - m['with crystal']) / unit:6.2f} "
        f"{m['ellipse'] / unit:8.2f} {m['new'] / unit:6.2f} {m['by hand'] / unit:8.2f} "
        f"{np.sqrt(np.mean(np.square(errors))):18.2f} {np.sqrt(np.mean(np.square(errors_by_hand))):8.2f}"
    )


def sizes(repeat: float, seed: int) -> None:
    print(
        f"{'px':>5s} {'n':>4s} {'rfft2, ms':>9s} {'whole':>6s} {'fringes':>8s} {'crystal':>8s} {'rest':>6s} {'ellipse':>8s} "
        f"{'new':>6s} {'by hand':>8s} {'RMS error / bound':>18s} {'by hand':>8s}"
    )
    for n, repetitions in REPETITIONS.items():
        print(one_size(n, max(4, round(repetitions * repeat)), seed), flush=True)


FIRST_MEASUREMENT = """
import numpy as np
import fringespan as fs
y, x = np.mgrid[:512, :512]
wave = np.cos(2 * np.pi * (0.05 * y + 0.11 * x)) + np.random.default_rng(0).standard_normal((512, 512))
print(len(fs.measure(fs.Micrograph(wave.astype(np.float32), pixel_size_nm=0.02)).peaks))
"""


def process_seconds(command: list[str], environment: dict[str, str]) -> float:
    """Return the CPU time of a process and its children."""

    def spent() -> float:
        usage = resource.getrusage(resource.RUSAGE_CHILDREN)
        return usage.ru_utime + usage.ru_stime

    before = spent()
    subprocess.run(command, env=environment, check=True, stdout=subprocess.DEVNULL)
    return spent() - before


def start(repeat: float) -> None:
    environment = dict(os.environ)
    python = [sys.executable, "-c"]
    commands = {
        "import numpy, scipy.fft": [*python, "import numpy, scipy.fft"],
        "import fringespan": [*python, "import fringespan"],
        "fringespan --help": [*python, "from fringespan.command_line import main; main()", "--help"],
        "import, first measurement of 512 px": [*python, FIRST_MEASUREMENT],
    }
    took: dict[str, list[float]] = {name: [] for name in commands}
    for command in commands.values():
        process_seconds(command, environment)  # whatever can be cached is cached now
    for _ in range(max(3, round(9 * repeat))):
        for name, command in commands.items():
            took[name].append(process_seconds(command, environment))
    unit = float(np.median(took["import numpy, scipy.fft"]))
    for name, values in took.items():
        print(f"{name:56s} {np.median(values):7.3f} s {np.median(values) / unit:7.2f} times import numpy, scipy.fft")
    with tempfile.TemporaryDirectory() as folder:
        empty = environment | {"NUMBA_CACHE_DIR": folder}
        first = process_seconds([*python, FIRST_MEASUREMENT], empty)
        print(f"{'the same, once, with no compiled code in the cache':56s} {first:7.3f} s")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--trials", type=float, default=1.0, help="multiplies the number of repetitions")
    parser.add_argument("--only", choices=("sizes", "start"))
    options = parser.parse_args()
    if options.only != "start":
        sizes(options.trials, options.seed)
    if options.only != "sizes":
        start(options.trials)


if __name__ == "__main__":
    main()
