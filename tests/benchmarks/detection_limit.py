"""How weak a fringe is found, against the ideal matched filter that knows the noise.

usage: python tests/benchmarks/detection_limit.py [--pictures N] [--seed N]

White noise, one fringe of random position and phase, of matched-filter power ratio T = A^2 N / (4 S). The ideal filter
searches the untapered transform around the true position and knows S; it uses the same number of false peaks per region
(0.01). Printed: T at which half are found, and the loss in dB. Target: within 0.8 dB.
"""

from __future__ import annotations

import argparse

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import curve_fit

import fringespan as fs
from fringespan.peaks.detection import detection_threshold


def half_found(ratios: NDArray[np.float64], shares: NDArray[np.float64]) -> float:
    """Return the ratio at which a logistic curve through the shares crosses one half."""
    (middle, _), _ = curve_fit(
        lambda r, m, w: 1 / (1 + np.exp(-(np.sqrt(r) - m) / w)), ratios, shares, p0=(np.sqrt(ratios.mean()), 0.4)
    )
    return float(middle**2)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--pictures", type=int, default=300, help="per strength and size")
    parser.add_argument("--seed", type=int, default=0)
    options = parser.parse_args()
    for size in (64, 128, 256):
        rng = np.random.default_rng([options.seed, size])
        pictures = max(40, options.pictures * 128 // size)
        y, x = np.mgrid[:size, :size] - (size - 1) / 2
        threshold = detection_threshold(size * size, 0.01)
        ratios = threshold * np.array([0.6, 0.8, 1.0, 1.2, 1.45, 1.75])
        found, ideal = np.zeros(ratios.size), np.zeros(ratios.size)
        shift = np.linspace(-0.7, 0.7, 29) / size
        for k, ratio in enumerate(ratios):
            amplitude = 2 * np.sqrt(ratio) / size
            for _ in range(pictures):
                radius = np.sqrt(rng.uniform(max(0.06, 8 / size) ** 2, 0.16))
                angle = rng.uniform(-np.pi / 2, np.pi / 2)
                g = radius * np.array([np.sin(angle), np.cos(angle)])
                wave = amplitude * np.cos(2 * np.pi * (g[0] * y + g[1] * x) + rng.uniform(0, 2 * np.pi))
                noise = rng.standard_normal((size, size))
                peaks = fs.measure(fs.Micrograph(wave + noise + 10)).peaks
                found[k] += any((np.abs(p.g_per_px - g) < 0.9 / size).all() for p in peaks)
                rows = np.exp(-2j * np.pi * np.outer(g[0] + shift, y[:, 0]))
                columns = np.exp(-2j * np.pi * np.outer(x[0], g[1] + shift))
                power = np.abs(rows @ (wave + noise) @ columns) ** 2 / size**2
                ideal[k] += power.max() >= threshold
        ours, best = half_found(ratios, found / pictures), half_found(ratios, ideal / pictures)
        print(
            f"{size:4d} px, {pictures} pictures each: half found at T = {ours:.2f}, ideal {best:.2f}, "
            f"loss {10 * np.log10(ours / best):.2f} dB",
            flush=True,
        )


if __name__ == "__main__":
    main()
