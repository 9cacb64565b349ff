"""How many false peaks a region of pure noise brings, by kind of noise.

usage: python tests/benchmarks/false_peaks.py [--seed N] [--trials F] [--only TEXT]

No picture holds a fringe, so every peak is false. Printed for each class: regions measured, false peaks, their rate per
region with its exact 95 % interval (Poisson; Garwood 1936), and whether the count is one that the wanted rate exceeds in
at least 5 % of all runs. Targets: 0.01 per region in every class and pooled over all classes, 0.02 for transfer rings and
for a sharp edge inside the region.
--trials multiplies the number of regions.

F. Garwood, "Fiducial limits for the Poisson distribution", Biometrika 28 (1936) 437-442.
"""

from __future__ import annotations

import argparse
import os
import sys
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import numpy as np
import scipy.stats

import fringespan as fs
from simulated_fringes import Density, blurred, falling, noise, places, steeply_falling, transfer_rings, white

Addition = Callable[[np.random.Generator, np.ndarray, np.ndarray], np.ndarray]
"""What lies on top of the noise, from the row and column positions counted from the middle."""

REGIONS = {64: 2000, 128: 1500, 256: 600, 512: 150, 1024: 40}
"""How many regions, by the longest side up to which this number holds."""


@dataclass(frozen=True)
class NoiseClass:
    """What the pictures of one line of the table are like."""

    name: str
    shape: tuple[int, int]
    density: Density = white
    electrons: float | None = None
    addition: Addition | None = None
    region: fs.Region | None = None
    wanted: float = 0.01


def ramp_and_bowl(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    return 50 * (y / y.size + (2 * x / x.size) ** 2)


def row_streaks(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Return rows of their own level each, as a scan with an unsteady probe has."""
    return rng.standard_normal(y.shape) + 0 * x


def detector_columns(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    return 0.5 * rng.standard_normal(x.shape) + 0 * y


def oblique_edge(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Return a step of 5 standard deviations along a line of random direction near the middle."""
    angle, offset = rng.uniform(0, np.pi), rng.uniform(-0.1, 0.1) * x.size
    return np.where(np.cos(angle) * x + np.sin(angle) * y > offset, 5.0, 0.0)


def upright_edge(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    return np.where(x > rng.uniform(-0.1, 0.1) * x.size, 5.0, 0.0) + 0 * y


def round_patch(rng: np.random.Generator, y: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Return a bright disc with a sharp rim, as a particle without fringes is."""
    return np.where(np.hypot(y, x) < rng.uniform(0.15, 0.3) * x.size, 3.0, 0.0)


def classes() -> list[NoiseClass]:
    middle = 95.5, 95.5
    corners = [(10.0, 57.0), (42.0, 162.0), (115.0, 181.0), (181.0, 95.0), (134.0, 11.0)]
    return [
        *(NoiseClass(f"white, {n} px", (n, n)) for n in REGIONS),
        NoiseClass("white, 101 x 203 px", (101, 203)),
        NoiseClass("1/f^2, 64 px", (64, 64), falling),
        NoiseClass("1/f^2, 256 px", (256, 256), falling),
        NoiseClass("1/f^3, 256 px", (256, 256), steeply_falling),
        NoiseClass("blurred, 256 px", (256, 256), blurred),
        NoiseClass("Poisson, 0.2 electrons a pixel, 256 px", (256, 256), electrons=0.2),
        NoiseClass("Poisson, 5 electrons a pixel, 128 px", (128, 128), electrons=5),
        NoiseClass("ramp and bowl of 50 sigma, 128 px", (128, 128), addition=ramp_and_bowl),
        NoiseClass("rows of their own level, 256 px", (256, 256), addition=row_streaks),
        NoiseClass("columns of their own level, 256 px", (256, 256), addition=detector_columns),
        NoiseClass("upright edge of 5 sigma, 256 px", (256, 256), addition=upright_edge, wanted=0.02),
        NoiseClass("oblique edge of 5 sigma, 256 px", (256, 256), addition=oblique_edge, wanted=0.02),
        NoiseClass("disc of 3 sigma, 256 px", (256, 256), addition=round_patch, wanted=0.02),
        NoiseClass("transfer rings, 256 px", (256, 256), transfer_rings, wanted=0.02),
        NoiseClass("transfer rings, 512 px", (512, 512), transfer_rings, wanted=0.02),
        NoiseClass("ellipse, white, 192 px", (192, 192), region=fs.Region.ellipse("ellipse", middle, (90, 75), 20)),
        NoiseClass(
            "ellipse, 1/f^2, 192 px", (192, 192), falling, region=fs.Region.ellipse("ellipse", middle, (94, 94))
        ),
        NoiseClass("polygon, 1/f^2, 192 px", (192, 192), falling, region=fs.Region("polygon", tuple(corners))),
    ]


def picture(of: NoiseClass, rng: np.random.Generator) -> np.ndarray:
    if of.electrons is not None:
        return rng.poisson(of.electrons, of.shape).astype(np.uint16)
    pixels = noise(rng, of.shape, of.density) + 20
    if of.addition is not None:
        pixels = pixels + of.addition(rng, *places(of.shape))
    return pixels.astype(np.float32)


def false_peaks(of: NoiseClass, regions: int, seed: int) -> int:
    rng = np.random.default_rng([seed, zlib.crc32(of.name.encode())])
    return sum(
        len(fs.measure(fs.Micrograph(picture(of, rng), pixel_size_nm=0.02), of.region).peaks) for _ in range(regions)
    )


def row(name: str, regions: int, count: int, wanted: float) -> str:
    low = scipy.stats.chi2.ppf(0.025, 2 * count) / 2 if count else 0.0
    high = scipy.stats.chi2.ppf(0.975, 2 * count + 2) / 2
    reached = "yes" if count <= scipy.stats.poisson.ppf(0.95, wanted * regions) else "NO"
    return (
        f"{name:40s} {regions:7d} {count:6d} {count / regions:9.4f}  {low / regions:6.4f} to {high / regions:6.4f} "
        f"{wanted:7.2f} {reached:>8s}"
    )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--trials", type=float, default=1.0, help="multiplies the number of regions")
    parser.add_argument("--only", default="", help="run only the classes whose name holds this text")
    options = parser.parse_args()
    print(
        f"{'':40s} {'regions':>7s} {'false':>6s} {'a region':>9s} {'95 % interval':>17s} {'wanted':>7s} {'reached':>8s}"
    )
    total = count = 0
    for of in classes():
        if options.only not in of.name:
            continue
        regions = max(10, round(next(n for side, n in REGIONS.items() if side >= max(of.shape)) * options.trials))
        found = false_peaks(of, regions, options.seed)
        total, count = total + regions, count + found
        print(row(of.name, regions, found, of.wanted), flush=True)
    if total:
        print(row("pooled", total, count, 0.01))


if __name__ == "__main__":
    main()
