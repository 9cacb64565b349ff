"""Make the sample pictures of this folder, each with a JSON file that says what is true of it.

All pictures are SIMULATED (multislice through computed crystals, then lens and camera); none is a measurement of a real
specimen. The scenario, a supported model catalyst in an imagined laboratory, is made up.

Needs, in a virtual environment of its own (the pictures are shipped, nobody needs this to use or test the program)::

    python -m venv .venv-simulation
    .venv-simulation/bin/pip install ase==3.29.0 abtem==1.0.11 tifffile
    OMP_NUM_THREADS=1 .venv-simulation/bin/python sample_images/simulate.py            # all, or the names of some

Each picture has a fixed seed; the same versions make the same picture. About a minute each on one core.
"""

import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from simulation import specimens
from simulation.crystals import CRYSTALS, Orientation
from simulation.files import write_ome_tiff, write_truth
from simulation.microscope import Camera, Film, Lens, crystal_wave, expose, expose_crystal
from simulation.truth import Grain, describe_grain, pixel_size, whole_picture

HERE = Path(__file__).parent
SCRIPT = "sample_images/simulate.py"


def two_grains() -> None:
    """Gold and ceria side by side on amorphous carbon film: the demo picture."""
    seed = 20101
    rng = np.random.default_rng(seed)
    pixel = (0.03, 0.03)
    camera = Camera(pixel, (576, 576), 3000, dark_level=64)
    lens = Lens(300, 0.005, 9.0, focal_spread_nm=2.5, convergence_mrad=0.15)
    gold, ceria = CRYSTALS["au"], CRYSTALS["ceo2"]
    gold_stands = Orientation((1, 1, 0), (1, -1, 1), 47.0)
    ceria_stands = Orientation((1, 1, 0), (1, -1, 1), 112.0)
    gold_atoms = specimens.particle(gold, gold_stands, specimens.dome(7.4, 6.6, 4.2, turn_deg=20), 6, rng).moved(
        camera.place(200, 160)
    )
    ceria_atoms = specimens.particle(
        ceria,
        ceria_stands,
        specimens.facetted(ceria, ceria_stands, (((1, 1, 1), 3.1), ((1, 0, 0), 3.0))),
        6,
        rng,
    ).moved(camera.place(372, 392))
    shaken = specimens.together(gold_atoms.shaken(0.008, rng), ceria_atoms.shaken(0.006, rng))
    shot = expose(shaken, Film(3.0), lens, camera, rng)
    grains = (
        Grain("gold", gold, gold_stands, camera.pixels(specimens.outline(gold_atoms, 0.94)), cloud=gold_atoms,
              particle={"shape": "dome", "width_nm": 7.4, "length_nm": 6.6, "thickness_nm": 4.2}),
        Grain("ceria", ceria, ceria_stands, camera.pixels(specimens.outline(ceria_atoms, 0.94)), cloud=ceria_atoms,
              particle={"shape": "octahedron with cut corners", "width_nm": 6.0}),
    )  # fmt: skip
    _save("two_grains", shot.picture, {
        "description": "Two particles on an amorphous carbon film 3 nm thick: gold on the left above, ceria on the "
                       "right below. Simulated model catalyst.",
        "pixel_size": pixel_size(pixel, pixel),
        "beam": lens.described(),
        "camera": camera.described(),
        "film": {"material": "amorphous carbon", "thickness_nm": 3.0, "contrast_rms": shot.film_contrast_rms},
        "regions": [describe_grain(grain, shot.picture, shot.ideal, pixel, pixel, 0.1, grains) for grain in grains],
    }, pixel, seed)  # fmt: skip


def gold_reference() -> None:
    """Gold foil of known lattice, for the magnification check: the file's pixel size is wrong on purpose."""
    seed = 20102
    rng = np.random.default_rng(seed)
    stated, true = (0.025, 0.025), (0.02515, 0.025275)
    camera = Camera(true, (512, 512), 2500, dark_level=100)
    lens = Lens(200, 0.5, 45.0, focal_spread_nm=4.0, convergence_mrad=0.15)
    gold = CRYSTALS["au"]
    stands = Orientation((1, 0, 0), (0, 2, 0), 27.3)
    wave = crystal_wave(gold, ((0, 1, 0), (0, 0, 1), (1, 0, 0)), stands, 11, lens.voltage_kv)
    shot = expose_crystal(wave, Film(3.0, contrast_rms=0.06), lens, camera, rng)
    grain = Grain("gold foil", gold, stands, whole_picture(camera.shape), kind="whole picture",
                  particle={"shape": "endless flat foil", "thickness_nm": round(11 * gold.cell[0], 3)})  # fmt: skip
    _save("gold_reference", shot.picture, {
        "description": "Single-crystal gold foil [100] 4.5 nm thick over the whole picture, to check the magnification "
                       "with. The pixel size in the file is wrong on purpose: the true one is 0.6 % larger from row to "
                       "row and 1.1 % larger from column to column. Simulated.",
        "pixel_size": pixel_size(stated, true),
        "beam": lens.described(),
        "camera": camera.described(),
        "film": {"material": "amorphous carbon", "contrast_rms": shot.film_contrast_rms},
        "regions": [describe_grain(grain, shot.picture, shot.ideal, true, stated, 0.1)],
    }, stated, seed)  # fmt: skip


def _save(name: str, picture: np.ndarray, truth: dict[str, Any], stated: tuple[float, float], seed: int) -> None:
    file = f"{name}.ome.tif"
    write_ome_tiff(HERE / file, picture, stated)
    write_truth(HERE / f"{name}.json", SCRIPT, seed, {
        "picture": file, "shape": list(picture.shape), "dtype": str(picture.dtype), **truth,
    })  # fmt: skip


PICTURES: dict[str, Callable[[], None]] = {"two_grains": two_grains, "gold_reference": gold_reference}


def main() -> None:
    """Make the pictures named on the command line, or all."""
    for name in sys.argv[1:] or PICTURES:
        start = time.perf_counter()
        PICTURES[name]()
        print(f"{name}: {time.perf_counter() - start:.0f} s", file=sys.stderr)


if __name__ == "__main__":
    main()
