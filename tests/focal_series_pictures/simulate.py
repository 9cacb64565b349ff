"""Make the focal series of this folder: particles of `tests/pictures`, each at five defocus values, with what is true of them.

All pictures are SIMULATED (multislice through computed crystals, then lens and camera); none is a measurement of a real
specimen. Needs what `tests/pictures/simulate.py` needs (its head says it), whose particles these are, with other noise::

    OMP_NUM_THREADS=1 .venv-simulation/bin/python tests/focal_series_pictures/simulate.py

A few seconds each on one core; each has a fixed seed.
"""

import dataclasses
import json
import math
import sys
from pathlib import Path
from typing import Any

import numpy as np
import tifffile

HERE = Path(__file__).parent
sys.path[:0] = [str(HERE.parent / "pictures"), str(HERE.parents[1] / "sample_images")]

from simulate import PARTICLES, Particle  # noqa: E402
from simulation.crystals import CRYSTALS, zone_reflections  # noqa: E402
from simulation.microscope import Film, Lens, exit_wave, exposed  # noqa: E402

NAMES = ("pt_dome", "ag_dome", "cu2o_dome", "zns_off_centre_dome")
SEED = 5000
D_MIN_NM = 0.1
BORDER_PX = 2


def defocus_values(lens: Lens) -> list[float]:
    """Return five underfocus values: around 0 for a corrected lens, else from 0.5 to 1.8 of Scherzer's."""
    if abs(lens.cs_mm) < 0.1:
        return [-16.0, -8.0, 4.0, 10.0, 18.0]
    scherzer = math.sqrt(4 / 3 * 1e6 * lens.cs_mm * lens.wavelength_nm)
    return [round(share * scherzer, 1) for share in (0.5, 0.8, 1.1, 1.4, 1.8)]


def series(particle: Particle) -> tuple[np.ndarray, dict[str, Any]]:
    """Return the pictures, cut to the particle's region, and what is true of them."""
    rng = np.random.default_rng(particle.seed + SEED)
    camera, stands, atoms = particle.stood(rng)
    wave = exit_wave(atoms.shaken(0.007, rng), camera.field_nm, camera.field_points, particle.lens.voltage_kv)
    film = Film(3.0, particle.film_rms).phase(camera, particle.lens, rng)
    defoci = defocus_values(particle.lens)
    frames = np.array(
        [
            exposed(wave, film, dataclasses.replace(particle.lens, defocus_nm=defocus), camera, rng).picture
            for defocus in defoci
        ]
    )
    corners = np.asarray(particle.grain(camera, stands, atoms).vertices_px)
    low = np.maximum(np.floor(corners.min(axis=0)).astype(int) - BORDER_PX, 0)
    high = np.ceil(corners.max(axis=0)).astype(int) + BORDER_PX
    hkl, g = zone_reflections(CRYSTALS[particle.crystal], stands, D_MIN_NM)
    truth = {
        "statement": "Simulated pictures.",
        "script": "tests/focal_series_pictures/simulate.py",
        "seed": particle.seed + SEED,
        "pixel_nm": particle.pixel_nm,
        "voltage_kv": particle.lens.voltage_kv,
        "cs_mm": particle.lens.cs_mm,
        "defocus_nm": defoci,
        "vertices_px": np.round(corners - low, 2).tolist(),
        "hkl": np.asarray(hkl).tolist(),
        "g_per_nm": np.round(g, 7).tolist(),
    }
    return frames[:, low[0] : high[0], low[1] : high[1]], truth


def main() -> None:
    """Make all series."""
    for name in NAMES:
        frames, truth = series(PARTICLES[name])
        tifffile.imwrite(HERE / f"{name}.tif", frames, photometric="minisblack", compression="deflate", predictor=True)
        (HERE / f"{name}.json").write_text(json.dumps(truth) + "\n", encoding="utf-8")
        print(name, frames.shape)


if __name__ == "__main__":
    main()
