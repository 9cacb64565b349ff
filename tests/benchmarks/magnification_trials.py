"""Random trials of the magnification check: are the errors as large as the stated uncertainty says.

    python tests/benchmarks/magnification_trials.py [--trials 500] [--seed 1]

Each trial takes a reference along a random common zone, turned at random, with the magnification off by up to 10 % and
rows, columns and shear each by another 1 %, and draws every term of the budget: noise of each reflection, spread between
regions and between pictures, the reference's spacing, its expansion coefficient, the temperature, the tilt of each region
(one specimen: the same tilt in all). Printed are, for rows, columns and shear, the standard deviation and the root mean
square of error over stated standard uncertainty, and how often k = 2 covers the truth (0.954 expected).

The second table leaves everything but the noise out: 4 and 8 reflections of one region, the scale's error, and how often
all indices are right (up to an equivalent orientation).
"""

from __future__ import annotations

import argparse
import math
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from fringespan.crystal.library import load_phase
from fringespan.crystal.phase import Phase
from fringespan.magnification.check import MagnificationCheck, check_magnification
from fringespan.magnification.reference import reference_at
from simulated_reference import crystal_peaks, geometry, picture, region_measurement

ZONES = {
    "au": [(1, 0, 0), (1, 1, 0), (1, 1, 1), (2, 1, 1)],
    "si": [(1, 1, 0), (1, 1, 1), (1, 0, 0)],
    "graphite": [(1, 0, 0), (0, 0, 1)],
    "mgo": [(1, 0, 0), (1, 1, 0)],
}


@dataclass(frozen=True)
class Case:
    """What a trial is like; deviations are standard deviations, relative."""

    name: str
    pictures: int = 1
    regions: int = 1
    reflections: int = 4
    noise: float = 1e-3
    between_regions: float = 0.0
    between_pictures: float = 0.0
    reference: float = 5e-4
    temperature_c: float = 23.0
    temperature_uncertainty_c: float = 3.0
    tilt_deg: float = 1.0


CASES = (
    Case("one region, noise and reference"),
    Case("one region, tilt rules", noise=2e-4, reference=1e-4, tilt_deg=2.0),
    Case("3 pictures of 3 regions, no spread", pictures=3, regions=3),
    Case(
        "every term: 5 pictures of 4 regions",
        pictures=5,
        regions=4,
        between_regions=5e-4,
        between_pictures=5e-4,
        reference=1e-3,
    ),
    Case(
        "4 pictures of 4 regions, spread 0.1 % and 0.1 %",
        pictures=4,
        regions=4,
        between_regions=1e-3,
        between_pictures=1e-3,
    ),
    Case(
        "6 pictures of 3 regions, pictures rule",
        pictures=6,
        regions=3,
        noise=5e-4,
        between_pictures=1.5e-3,
        reference=3e-4,
    ),
    Case("heated by 300 K", temperature_c=325.0, temperature_uncertainty_c=20.0),
)


def random_geometry(rng: np.random.Generator) -> np.ndarray:
    """Return F: up to 10 % off in whole, rows and columns and shear by another 1 %."""
    common = 1 + rng.uniform(-0.09, 0.09)
    row, column = common * (1 + rng.uniform(-0.01, 0.01, 2))
    return geometry(float(row), float(column), float(rng.uniform(-0.01, 0.01)))


def one_trial(rng: np.random.Generator, case: Case, phase: Phase) -> tuple[np.ndarray, MagnificationCheck]:
    """Return error over stated uncertainty of rows, columns and shear, and the check."""
    true = random_geometry(rng)
    zones = ZONES[phase.id]
    at = reference_at(phase, case.temperature_c)
    # what the specimen really is, against what the check is told of it
    temperature = case.temperature_c + case.temperature_uncertainty_c * rng.standard_normal()
    off = at.expansion.relative_uncertainty * at.expansion_per_k * rng.standard_normal() * at.difference_k
    off += at.expansion_per_k * (temperature - case.temperature_c)
    enlarged = (1 + case.reference * rng.standard_normal()) * (1 + off)
    tilt = np.radians(case.tilt_deg) * rng.standard_normal(2)
    zone = zones[rng.integers(len(zones))]
    rotation = float(rng.uniform(0, 2 * math.pi))
    expanded = at.reference
    measured = []
    for p in range(case.pictures):
        micrograph = picture(f"picture {p}")
        wander = case.between_pictures * rng.standard_normal((2, 2))
        for r in range(case.regions):
            moved = true + wander + case.between_regions * rng.standard_normal((2, 2))
            moved[0, 1] = 0.0
            peaks, _ = crystal_peaks(
                rng,
                expanded,
                zone,
                moved,
                rotation=rotation + 0.01 * rng.standard_normal(),
                reflections=case.reflections,
                noise=case.noise,
                tilt=tilt,
                enlarged=enlarged,
            )
            measured.append(region_measurement(micrograph, peaks, f"region {r}"))
    check = check_magnification(
        measured,
        phase,
        temperature_c=case.temperature_c,
        temperature_uncertainty_c=case.temperature_uncertainty_c,
        reference_relative_uncertainty=case.reference,
        tilt_deg=case.tilt_deg,
    )
    wanted = np.array([true[0, 0], true[1, 1], true[1, 0]])
    if check.shear is None:
        raise AssertionError("several reflections of a crystal give the whole geometry")
    found = np.array([*check.scale, check.shear])
    stated = np.array([*check.scale_uncertainty, check.shear_uncertainty])
    return (found - wanted) / stated, check


def run_case(case: Case, trials: int, seed: int) -> np.ndarray:
    """Return the errors over stated uncertainties, shape (trials, 3)."""
    rng = np.random.default_rng([seed, len(case.name)])
    phases = [load_phase(name) for name in ZONES]
    return np.array([one_trial(rng, case, phases[k % len(phases)])[0] for k in range(trials)])


def index_trials(trials: int, seed: int, reflections: int, noise: float) -> tuple[float, float, float]:
    """Return RMS error of the mean scale, the standard deviation of its pull, and how often all indices are right."""
    rng = np.random.default_rng([seed, reflections, round(noise * 1e6)])
    phases = [load_phase(name) for name in ZONES]
    errors, pulls, right = [], [], 0
    for k in range(trials):
        phase = phases[k % len(phases)]
        zones = ZONES[phase.id]
        zone = zones[rng.integers(len(zones))]
        common = 1 + rng.uniform(-0.1, 0.1)
        true = geometry(common, common)
        peaks, indices = crystal_peaks(
            rng,
            phase,
            zone,
            true,
            rotation=float(rng.uniform(0, 2 * math.pi)),
            reflections=reflections,
            noise=noise,
            random_choice=True,
        )
        try:
            check = check_magnification(
                region_measurement(picture(), peaks),
                phase,
                reference_relative_uncertainty=0.0,
                tilt_deg=0.0,
                temperature_c=reference_at(phase, None).expansion.reference_c,
                temperature_uncertainty_c=0.0,
            )
        except ValueError:
            continue
        found = [r.hkl for r in check.reflections]
        same = len(found) == len(indices) and all(
            h is not None and _family(phase, h) == _family(phase, t) for h, t in zip(found, indices, strict=True)
        )
        right += same
        # one factor for both: the mean of rows and columns, as the trial has no difference
        errors.append((check.scale[0] + check.scale[1]) / 2 / common - 1)
        pulls.append((check.scale[0] - common) / check.scale_uncertainty[0])
    return float(np.sqrt(np.mean(np.square(errors)))), float(np.std(pulls)), right / trials


def _family(phase: Phase, hkl: tuple[int, int, int]) -> tuple[int, ...]:
    orbit = phase.symmetry.orbit(hkl)
    return max(tuple(int(v) for v in member) for member in orbit)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--trials", type=int, default=500)
    parser.add_argument("--seed", type=int, default=1)
    arguments = parser.parse_args()
    print(
        f"error over stated uncertainty, {arguments.trials} trials, seed {arguments.seed}: sd (rms, covered by k = 2)"
    )
    print(f"{'case':50s} {'rows':>19s} {'columns':>19s} {'shear':>19s}")
    for case in CASES:
        z = run_case(case, arguments.trials, arguments.seed)
        cells = [
            f"{z[:, c].std():.3f} ({np.sqrt((z[:, c] ** 2).mean()):.2f}, {np.mean(np.abs(z[:, c]) < 2):.3f})"
            for c in range(3)
        ]
        print(f"{case.name:50s} " + " ".join(f"{cell:>19s}" for cell in cells), flush=True)
    print("magnification unknown by 10 %, noise alone: RMS error of the scale, sd of the pull, all indices right")
    for reflections, noise in ((3, 1e-3), (4, 1e-3), (8, 1e-3), (4, 5e-4), (4, 2e-3)):
        rms, sd, right = index_trials(arguments.trials, arguments.seed, reflections, noise)
        print(f"{reflections} reflections of {100 * noise:g} %: {100 * rms:.4f} %, {sd:.3f}, {right:.4f}", flush=True)


if __name__ == "__main__":
    main()
