"""Make the sample pictures of this folder, each with a JSON file that says what is true of it.

All pictures are SIMULATED (multislice through computed crystals, then lens and camera); none is a measurement of a real
specimen. The scenario, a supported model catalyst in an imagined laboratory, is made up.

Needs, in a virtual environment of its own (the pictures are shipped, nobody needs this to use or test the program)::

    python -m venv .venv-simulation
    .venv-simulation/bin/pip install ase==3.29.0 abtem==1.0.11 tifffile
    OMP_NUM_THREADS=1 .venv-simulation/bin/python sample_images/simulate.py            # all, or the names of some

Each picture has a fixed seed; the same versions make the same picture. Two to ten seconds each on one core.
"""

import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from simulation import specimens
from simulation.crystals import CRYSTALS, Orientation, cubic
from simulation.files import write_ome_tiff, write_truth
from simulation.microscope import (
    OVERSAMPLING,
    Camera,
    Film,
    Lens,
    crystal_wave,
    exit_wave,
    expose,
    expose_crystal,
    exposed,
)
from simulation.truth import Grain, Stack, describe_grain, describe_stack, pixel_size, whole_picture

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


def graphitic_stacks() -> None:
    """Graphitic carbon edge-on: a flat stack of layers and a bent one, both turbostratic."""
    seed = 20103
    rng = np.random.default_rng(seed)
    pixel = (0.034, 0.034)
    camera = Camera(pixel, (480, 480), 1500, dark_level=64, margin_px=30)
    lens = Lens(200, 1.0, 62.0, focal_spread_nm=4.0)
    spacing, normal_deg, depth = 0.3440, 64.0, 3.0
    flat = specimens.flat_stack(11, spacing, 9.0, depth, normal_deg, rng).moved(camera.place(345, 150))
    centre, inner, arc, layers = (250.0, 280.0), 3.6, (-22.0, 78.0), 9
    bent = specimens.bent_stack(layers, spacing, inner, arc, depth, rng).moved(camera.place(*centre))
    atoms = specimens.together(flat, bent).shaken(0.006, rng)
    shot = expose(atoms, Film(2.0), lens, camera, rng)
    middle_deg = sum(arc) / 2
    part = np.radians(np.linspace(middle_deg - 20, middle_deg + 20, 9))
    ring = [r * np.column_stack([np.cos(part), np.sin(part)]) for r in (inner, inner + (layers - 1) * spacing)]
    outline = np.concatenate([ring[0], ring[1][::-1]]) + camera.place(*centre)[:2]
    stacks = (
        Stack("flat stack", "turbostratic carbon", spacing, normal_deg, camera.pixels(specimens.outline(flat, 0.94)),
              {"count": 11, "length_nm": 9.0, "depth_nm": depth, "bent": False}),
        Stack("bent stack", "turbostratic carbon", spacing, middle_deg, camera.pixels(outline),
              {"count": layers, "depth_nm": depth, "bent": True, "centre_of_curvature_px": list(centre),
               "inner_radius_nm": inner, "outer_radius_nm": round(inner + (layers - 1) * spacing, 4),
               "whole_arc_deg": list(arc), "arc_in_region_deg": [middle_deg - 20, middle_deg + 20],
               "remark": "everywhere the spacing is that of the layers and the fringes point to the centre"}),
    )  # fmt: skip
    _save("graphitic_stacks", shot.picture, {
        "description": "Graphitic carbon edge-on, its layers turned at random against each other: a flat stack on the "
                       "left below, a bent one on the right. Simulated.",
        "pixel_size": pixel_size(pixel, pixel),
        "beam": lens.described(),
        "camera": camera.described(),
        "film": {"material": "amorphous carbon", "thickness_nm": 2.0, "contrast_rms": shot.film_contrast_rms},
        "regions": [describe_stack(stack, shot.picture, shot.ideal, pixel, pixel, stacks) for stack in stacks],
    }, pixel, seed)  # fmt: skip


def faint_ceria() -> None:
    """A thin ceria particle under a thick film at a low dose: at the edge of detection."""
    seed = 20104
    rng = np.random.default_rng(seed)
    pixel = (0.036, 0.036)
    camera = Camera(pixel, (320, 320), 300, dark_level=20)
    lens = Lens(200, 1.0, 58.0, focal_spread_nm=4.0)
    ceria = CRYSTALS["ceo2"]
    stands = Orientation((1, 1, 0), (1, -1, 1), 148.0)
    atoms = specimens.particle(ceria, stands, specimens.slab(3.8, 3.4, 0.7, turn_deg=25), 5, rng)
    atoms = atoms.moved(camera.place(168, 150))
    shot = expose(atoms.shaken(0.007, rng), Film(10.0), lens, camera, rng)
    grain = Grain(
        "ceria",
        ceria,
        stands,
        camera.pixels(specimens.outline(atoms, 0.98)),
        cloud=atoms,
        particle={"shape": "slab", "width_nm": 3.8, "length_nm": 3.4, "thickness_nm": 0.7},
    )
    _save("faint_ceria", shot.picture, {
        "description": "Thin ceria particle on a carbon film 10 nm thick, taken with few electrons: its fringes are at "
                       "the edge of detection. Simulated.",
        "pixel_size": pixel_size(pixel, pixel),
        "beam": lens.described(),
        "camera": camera.described(),
        "film": {"material": "amorphous carbon", "thickness_nm": 10.0, "contrast_rms": shot.film_contrast_rms},
        "regions": [describe_grain(grain, shot.picture, shot.ideal, pixel, pixel, 0.1)],
    }, pixel, seed)  # fmt: skip


def heating_gold() -> None:
    """A gold particle heated step by step: its spacings grow, in the last frame it has lost its order."""
    seed = 20105
    rng = np.random.default_rng(seed)
    pixel = (0.03, 0.03)
    camera = Camera(pixel, (208, 208), 800, dark_level=10)
    lens = Lens(300, -0.01, 8.0)
    expansion_per_kelvin, start_c, step_c, frames = 14.2e-6, 25, 100, 8
    cold = CRYSTALS["au"]
    film = Film(3.0, contrast_rms=0.04).phase(camera, lens, rng)
    drift = np.round(2 * np.cumsum(rng.normal(0, 0.7, (frames, 2)), axis=0)) / 2  # whole points of the grid
    drift -= drift[0]
    chance = int(rng.integers(2**31))  # the same atoms in each frame
    stack, told, ends = [], [], []
    for index in range(frames):
        temperature_c = start_c + index * step_c
        strain = expansion_per_kelvin * (temperature_c - start_c)
        gold = replace(cold, cell=cubic(cold.cell[0] * (1 + strain)))
        stands = Orientation((1, 1, 0), (1, -1, 1), 21.0)
        inside = specimens.slab(5.0 * (1 + strain), 4.6 * (1 + strain), 2.6 * (1 + strain), turn_deg=35)
        atoms = specimens.particle(gold, stands, inside, 5, np.random.default_rng(chance))
        atoms = atoms.moved(camera.place(*(np.array([104, 103]) + drift[index])))
        ordered = index < frames - 1
        vibration_nm = 0.0085 * np.sqrt((temperature_c + 273.15) / (start_c + 273.15)) if ordered else 0.08
        wave = exit_wave(atoms.shaken(vibration_nm, rng), camera.field_nm, camera.field_points, lens.voltage_kv)
        phase = np.roll(film, (OVERSAMPLING * drift[index]).astype(int), axis=(0, 1))
        shot = exposed(wave, phase, lens, camera, rng, "uint8")
        stack.append(shot.picture)
        region = camera.pixels(specimens.outline(atoms, 0.92))
        ends.append(region)
        frame: dict[str, Any] = {
            "frame": index,
            "temperature_c": temperature_c,
            "drift_px": drift[index].tolist(),
            "strain": round(strain, 7),
            "rms_displacement_nm": round(float(vibration_nm), 5),
            "ordered": ordered,
        }
        if ordered:
            facts = {"shape": "slab", "width_nm": 5.0, "length_nm": 4.6, "thickness_nm": 2.6}
            grain = Grain("gold", gold, stands, region, cloud=atoms, particle=facts)
            frame["regions"] = [describe_grain(grain, shot.picture, shot.ideal, pixel, pixel, 0.11)]
        else:
            outline = np.round(region, 2).tolist()
            frame["regions"] = [
                {
                    "name": "gold",
                    "kind": "polygon",
                    "vertices_px": outline,
                    "phase": None,
                    "reflections": [],
                    "remark": "order lost: no lattice, no fringes to measure",
                }
            ]
        told.append(frame)
    low, high = np.concatenate(ends).min(axis=0).round(1) - 2, np.concatenate(ends).max(axis=0).round(1) + 2
    box = [[low[0], low[1]], [low[0], high[1]], [high[0], high[1]], [high[0], low[1]]]
    _save("heating_gold", np.stack(stack), {
        "description": "Gold particle [110] on carbon film, heated from 25 to 725 degrees Celsius in steps of 100, one "
                       "frame each, 60 s apart. Its spacings grow by thermal expansion; in the last frame it has lost "
                       "its order. Simulated.",
        "pixel_size": pixel_size(pixel, pixel),
        "beam": lens.described(),
        "camera": camera.described(),
        "film": {"material": "amorphous carbon", "contrast_rms": 0.04},
        "expansion_per_kelvin": expansion_per_kelvin,
        "expansion_remark": "linear, about that of gold at room temperature (from memory); stated, not measured",
        "regions": [{"name": "gold, all frames", "kind": "rectangle", "vertices_px": box}],
        "frames": told,
    }, pixel, seed, time_step_s=60.0)  # fmt: skip


def _save(
    name: str,
    picture: np.ndarray,
    truth: dict[str, Any],
    stated: tuple[float, float],
    seed: int,
    time_step_s: float | None = None,
) -> None:
    file = f"{name}.ome.tif"
    write_ome_tiff(HERE / file, picture, stated, time_step_s)
    facts = {"picture": file, "shape": list(picture.shape), "dtype": str(picture.dtype), **truth}
    write_truth(HERE / f"{name}.json", SCRIPT, seed, facts)


PICTURES: dict[str, Callable[[], None]] = {
    "two_grains": two_grains,
    "gold_reference": gold_reference,
    "graphitic_stacks": graphitic_stacks,
    "faint_ceria": faint_ceria,
    "heating_gold": heating_gold,
}


def main() -> None:
    """Make the pictures named on the command line, or all."""
    for name in sys.argv[1:] or PICTURES:
        start = time.perf_counter()
        PICTURES[name]()
        print(f"{name}: {time.perf_counter() - start:.0f} s", file=sys.stderr)


if __name__ == "__main__":
    main()
