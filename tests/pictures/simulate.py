"""Make the test pictures of this folder, each with a JSON file that says what is true of it.

All pictures are SIMULATED (multislice through computed crystals, then lens and camera); none is a measurement of a real
specimen. The simulation itself, and the meaning of the JSON files, are explained in ``sample_images/README.md``.

Needs, in a virtual environment of its own (the pictures are shipped, the tests need no simulator)::

    python -m venv .venv-simulation
    .venv-simulation/bin/pip install ase==3.29.0 abtem==1.0.11 tifffile
    OMP_NUM_THREADS=1 .venv-simulation/bin/python tests/pictures/simulate.py           # all, or the names of some

Each picture has a fixed seed; the same versions make the same picture. A few seconds each on one core.
"""

import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

HERE = Path(__file__).parent
sys.path.insert(0, str(HERE.parents[1] / "sample_images"))

from simulation import specimens  # noqa: E402
from simulation.crystals import CRYSTALS, Crystal, Orientation  # noqa: E402
from simulation.files import write_tiff, write_truth  # noqa: E402
from simulation.microscope import (  # noqa: E402
    Box,
    Camera,
    Exposure,
    Film,
    Lens,
    crystal_wave,
    dark_field_image,
    expose,
    expose_crystal,
)
from simulation.truth import Grain, describe_grain, pixel_size, whole_picture  # noqa: E402

SCRIPT = "tests/pictures/simulate.py"
D_MIN_NM = 0.1

CUBIC_100: Box = ((0, 1, 0), (0, 0, 1), (1, 0, 0))
CUBIC_110: Box = ((-1, 1, 0), (0, 0, 1), (1, 1, 0))
TETRAGONAL_001: Box = ((1, 0, 0), (0, 1, 0), (0, 0, 1))
HEXAGONAL_100: Box = ((1, 2, 0), (0, 0, 1), (1, 0, 0))


@dataclass(frozen=True)
class Field:
    """A crystal over the whole picture."""

    crystal: str
    box: Box
    repeats: int
    reference_hkl: tuple[int, int, int]
    direction_deg: float
    lens: Lens
    pixel_nm: float
    dose: float
    film_rms: float
    seed: int
    size: int = 256

    def make(self, name: str) -> None:
        """Simulate and write it."""
        rng = np.random.default_rng(self.seed)
        crystal = CRYSTALS[self.crystal]
        stands = Orientation(self.box[2], self.reference_hkl, self.direction_deg)
        pixel = (self.pixel_nm, self.pixel_nm)
        camera = Camera(pixel, (self.size, self.size), self.dose, dark_level=50)
        wave = crystal_wave(crystal, self.box, stands, self.repeats, self.lens.voltage_kv)
        shot = expose_crystal(wave, Film(3.0, self.film_rms), self.lens, camera, rng)
        thickness = self.repeats * float(np.linalg.norm(np.asarray(self.box[2]) @ crystal.axes_nm))
        grain = Grain(crystal.name, crystal, stands, whole_picture(camera.shape), kind="whole picture",
                      particle={"shape": "endless flat foil", "thickness_nm": round(thickness, 3)})  # fmt: skip
        _save(name, shot, (grain,), self.lens.described(), camera, self.seed)


@dataclass(frozen=True)
class Shape:
    """Form and size of a particle, nm: dome, off-centre dome, slab, wedge, cube or octahedron with cut corners."""

    form: str
    width: float
    length: float
    height: float
    turn_deg: float = 0.0

    def inside(self, crystal: Crystal, stands: Orientation) -> specimens.Inside:
        """Return the test of which points belong to it."""
        size = (self.width, self.length, self.height, self.turn_deg)
        match self.form:
            case "dome":
                return specimens.dome(*size)
            case "off-centre dome":
                return specimens.dome(*size, lean=0.35)
            case "slab":
                return specimens.slab(*size)
            case "wedge":
                return specimens.slab(*size, slope=1.3)
            case "cube":
                return specimens.facetted(crystal, stands, (((1, 0, 0), self.width / 2),))
            case "octahedron with cut corners":
                return specimens.facetted(
                    crystal, stands, (((1, 1, 1), 0.45 * self.width), ((1, 0, 0), self.width / 2))
                )
        raise ValueError(f"no such form: {self.form}")

    def described(self) -> dict[str, Any]:
        """Return it as plain values."""
        if self.form in ("cube", "octahedron with cut corners"):
            return {"shape": self.form, "between_100_faces_nm": self.width}
        return {"shape": self.form, "width_nm": self.width, "length_nm": self.length, "thickness_nm": self.height}


@dataclass(frozen=True)
class Particle:
    """One particle near the middle of a picture, in a tight or a loose region."""

    crystal: str
    zone: tuple[int, int, int]
    reference_hkl: tuple[int, int, int]
    direction_deg: float
    shape: Shape
    lens: Lens
    region: str
    seed: int
    pixel_nm: float = 0.03
    size: tuple[int, int] = (280, 280)
    dose: float = 2500
    film_rms: float = 0.04
    tilt: tuple[float, float] = (0.0, 0.0)

    def make(self, name: str) -> None:
        """Simulate and write it."""
        rng = np.random.default_rng(self.seed)
        camera, stands, atoms = self.stood(rng)
        shot = expose(atoms.shaken(0.007, rng), Film(3.0, self.film_rms), self.lens, camera, rng)
        _save(name, shot, (self.grain(camera, stands, atoms),), self.lens.described(), camera, self.seed)

    def stood(self, rng: np.random.Generator) -> tuple[Camera, Orientation, specimens.Cloud]:
        """Return the camera, the crystal's orientation and its atoms in the field."""
        crystal = CRYSTALS[self.crystal]
        stands = Orientation(self.zone, self.reference_hkl, self.direction_deg, *self.tilt)
        camera = Camera((self.pixel_nm, self.pixel_nm), self.size, self.dose, dark_level=20)
        inside = self.shape.inside(crystal, stands)
        row, column = np.asarray(self.size) / 2 + rng.uniform(-6, 6, 2)
        atoms = specimens.particle(crystal, stands, inside, 0.8 * self.shape.width + 1.5, rng)
        middle = (atoms.positions.max(axis=0) + atoms.positions.min(axis=0)) / 2
        return camera, stands, atoms.moved(tuple(-middle)).moved(camera.place(row, column))

    def grain(self, camera: Camera, stands: Orientation, atoms: specimens.Cloud) -> Grain:
        """Return the grain with its region: tight = 0.9 of its outline, loose = its box and 0.5 nm around it."""
        tight = self.region == "tight"
        corners = specimens.outline(atoms, 0.9) if tight else specimens.bounding_box(atoms, 0.5)
        particle = {**self.shape.described(), "region": self.region}
        kind = "polygon" if tight else "rectangle"
        crystal = CRYSTALS[self.crystal]
        return Grain(crystal.name, crystal, stands, camera.pixels(corners), kind, atoms, particle)


def _save(name: str, shot: Exposure, grains: tuple[Grain, ...], beam: dict[str, Any], camera: Camera, seed: int,
          **more: Any) -> None:  # fmt: skip
    pixel = camera.pixel_size_nm
    regions = [describe_grain(grain, shot.picture, shot.ideal, pixel, pixel, D_MIN_NM, grains) for grain in grains]
    write_tiff(HERE / f"{name}.tif", shot.picture, pixel)
    write_truth(HERE / f"{name}.json", SCRIPT, seed, {
        "picture": f"{name}.tif",
        "shape": list(shot.picture.shape),
        "dtype": str(shot.picture.dtype),
        "pixel_size": pixel_size(pixel, pixel),
        "beam": beam,
        "camera": camera.described(),
        "film": {"material": "amorphous carbon, one plane", "contrast_rms": shot.film_contrast_rms},
        **more,
        "regions": regions,
    })  # fmt: skip


FIELDS = {
    "field_cu_100": Field("cu", CUBIC_100, 10, (0, 2, 0), 18.7, Lens(300, -0.01, -6.0), 0.02, 2000, 0.03, 301),
    "field_ge_110": Field("ge", CUBIC_110, 10, (-1, 1, 1), 66.1, Lens(200, 1.0, 60.0, 4.0), 0.025, 800, 0.04, 302),
    "field_rutile_001": Field(
        "tio2_r", TETRAGONAL_001, 14, (1, 1, 0), 41.3, Lens(300, 0.5, 36.0), 0.022, 1500, 0.04, 303
    ),
    "field_zno_100": Field("zno", HEXAGONAL_100, 12, (0, 0, 2), 101.9, Lens(300, 0.0, 7.0), 0.021, 1200, 0.03, 304),
    "field_nio_110": Field("nio", CUBIC_110, 12, (-1, 1, 1), 8.4, Lens(200, 0.5, 45.0, 4.0), 0.024, 1000, 0.05, 305),
    "field_srtio3_100": Field("srtio3", CUBIC_100, 8, (0, 1, 0), 33.0, Lens(300, 1.0, 48.0), 0.024, 2500, 0.03, 306),
}

PARTICLES = {
    "pt_dome": Particle("pt", (1, 1, 0), (1, -1, 1), 23.0, Shape("dome", 6.0, 5.4, 3.5, 30),
                        Lens(300, -0.01, -5.0), "tight", 401, size=(264, 280)),
    "pt_off_centre_dome": Particle("pt", (1, 0, 0), (0, 2, 0), 62.0, Shape("off-centre dome", 7.0, 6.2, 3.8, -20),
                                   Lens(200, 1.0, 65.0, 4.0), "loose", 402, size=(300, 300)),
    "pt_small_slab": Particle("pt", (1, 1, 0), (1, -1, 1), 141.0, Shape("slab", 4.2, 4.0, 2.5),
                              Lens(300, 1.0, 48.0), "loose", 403, size=(192, 200), dose=3000),
    "pd_octahedron": Particle("pd", (1, 1, 0), (1, -1, 1), 77.0, Shape("octahedron with cut corners", 6.4, 6.4, 6.4),
                              Lens(300, 0.0, 6.0), "tight", 404),
    "pd_cube": Particle("pd", (1, 0, 0), (0, 2, 0), 11.0, Shape("cube", 5.0, 5.0, 5.0),
                        Lens(200, 0.5, 45.0, 4.0), "loose", 405, size=(256, 256), film_rms=0.03),
    "ag_dome": Particle("ag", (1, 1, 0), (1, -1, 1), 35.5, Shape("dome", 8.2, 7.4, 4.2, 70),
                        Lens(200, 1.0, 75.0, 4.0), "tight", 406, pixel_nm=0.034, size=(300, 288), film_rms=0.05),
    "ag_tilted_dome": Particle("ag", (1, 0, 0), (0, 2, 0), 50.0, Shape("dome", 7.0, 6.4, 3.6),
                               Lens(300, -0.01, 8.0), "loose", 407, pixel_nm=0.032, tilt=(1.5, 80.0)),
    "cu2o_cube": Particle("cu2o", (1, 0, 0), (0, 1, 1), 29.0, Shape("cube", 6.0, 6.0, 6.0),
                          Lens(300, 0.5, 35.0), "tight", 408, size=(300, 300), film_rms=0.03),
    "cu2o_dome": Particle("cu2o", (1, 1, 0), (1, -1, 1), 95.0, Shape("dome", 7.6, 7.0, 4.2, 15),
                          Lens(300, 0.0, 10.0), "tight", 409, pixel_nm=0.032),
    "nio_octahedron": Particle("nio", (1, 1, 0), (1, -1, 1), 160.0, Shape("octahedron with cut corners", 7.0, 7.0, 7.0),
                               Lens(200, 0.0, -8.0), "loose", 410, pixel_nm=0.033, size=(300, 300), film_rms=0.03),
    "nio_slab": Particle("nio", (1, 0, 0), (0, 2, 0), 72.0, Shape("slab", 6.2, 5.6, 3.0, 40),
                         Lens(300, 1.0, 52.0), "tight", 411, size=(264, 264), dose=2000),
    "cdse_slab": Particle("cdse", (1, 0, 0), (0, 0, 2), 38.0, Shape("slab", 7.4, 5.2, 4.0, 38),
                          Lens(200, 0.5, 40.0, 4.0), "tight", 412, pixel_nm=0.034, film_rms=0.05),
    "cdse_dome": Particle("cdse", (0, 0, 1), (1, 0, 0), 5.0, Shape("dome", 6.0, 6.0, 3.6),
                          Lens(300, -0.01, 6.0), "loose", 413, size=(272, 272)),
    "zns_off_centre_dome": Particle("zns", (1, 1, 0), (1, -1, 1), 118.0, Shape("off-centre dome", 8.0, 7.0, 4.4, 100),
                                    Lens(200, 1.0, 60.0, 4.0), "tight", 414, pixel_nm=0.035, size=(300, 280)),
    "zns_wedge": Particle("zns", (1, 1, 0), (1, -1, 1), 52.0, Shape("wedge", 8.8, 7.6, 4.0, 10),
                          Lens(300, -0.01, -6.0), "tight", 415, pixel_nm=0.036, size=(280, 296)),
    "tin_cube": Particle("tin", (1, 0, 0), (0, 2, 0), 22.0, Shape("cube", 6.0, 6.0, 6.0),
                         Lens(300, 0.0, 7.0), "loose", 416, size=(300, 300), film_rms=0.03),
    "tin_dome": Particle("tin", (1, 1, 0), (1, -1, 1), 84.0, Shape("dome", 5.2, 4.8, 3.0),
                         Lens(300, 0.5, 38.0), "tight", 417, size=(240, 248), dose=3000),
    "sno2_tilted_slab": Particle("sno2", (0, 0, 1), (1, 1, 0), 66.0, Shape("slab", 7.0, 6.6, 3.5),
                                 Lens(200, 0.0, 9.0, 4.0), "tight", 418, pixel_nm=0.032, tilt=(1.0, 20.0)),
    "sno2_dome": Particle("sno2", (1, 0, 0), (0, 1, 1), 14.0, Shape("dome", 8.0, 7.2, 4.0, 60),
                          Lens(300, -0.01, -12.0), "loose", 419, pixel_nm=0.035, size=(296, 296)),
    "cu_tilted_dome": Particle("cu", (1, 1, 0), (1, -1, 1), 128.0, Shape("dome", 6.2, 6.0, 3.4),
                               Lens(200, 0.5, 50.0, 4.0), "tight", 420, size=(256, 264), tilt=(2.0, 150.0)),
}  # fmt: skip


def scanned_pd() -> None:
    """Make a dark-field scan of a palladium particle, in the incoherent approximation."""
    seed, blur, angle = 501, 0.035, 22.0
    rng = np.random.default_rng(seed)
    probe = Lens(200, 0.0, 0.0, 0.0, 0.0)
    scene = Particle("pd", (1, 1, 0), (1, -1, 1), 57.0, Shape("dome", 6.0, 5.4, 3.4, 30), probe, "tight", seed,
                     pixel_nm=0.028, size=(264, 264), dose=1600)  # fmt: skip
    camera, stands, atoms = scene.stood(rng)
    bright = dark_field_image(atoms.shaken(0.003, rng), scene.lens, angle, blur, camera)
    ideal = camera.expected(bright)
    film = rng.normal(1.0, 0.15, camera.shape).clip(0.4) * 0.04 * camera.electrons_per_pixel
    shot = Exposure(camera.record(ideal + film, "uint16", rng), ideal, 0.0)
    beam = {"mode": "STEM, annular dark field, incoherent approximation", "voltage_kv": 200, "cs_mm": 0.0,
            "defocus_nm": 0.0, "semi_angle_mrad": angle, "source_and_thermal_blur_nm": blur}  # fmt: skip
    _save("scanned_pd", shot, (scene.grain(camera, stands, atoms),), beam, camera, seed)


def pt_and_nio() -> None:
    """Make a platinum and a nickel oxide particle, close together, and a region that holds both."""
    seed = 502
    rng = np.random.default_rng(seed)
    pt = Particle("pt", (1, 1, 0), (1, -1, 1), 31.0, Shape("dome", 4.6, 4.2, 2.8),
                  Lens(300, -0.01, 7.0), "tight", seed, size=(232, 376))  # fmt: skip
    nio = Particle(
        "nio", (1, 1, 0), (1, -1, 1), 98.0, Shape("slab", 5.4, 4.8, 3.0, 80), pt.lens, "tight", seed, size=pt.size
    )
    camera, pt_stands, pt_atoms = pt.stood(rng)
    _, nio_stands, nio_atoms = nio.stood(rng)
    pt_atoms, nio_atoms = pt_atoms.moved((-2.5, 0.3, 0)), nio_atoms.moved((2.5, -0.2, 0))
    both = specimens.together(pt_atoms, nio_atoms)
    shot = expose(both.shaken(0.007, rng), Film(3.0, 0.04), pt.lens, camera, rng)
    grains = (pt.grain(camera, pt_stands, pt_atoms), nio.grain(camera, nio_stands, nio_atoms))
    box = camera.pixels(specimens.bounding_box(both, 0.4))
    joint = {"name": "both", "kind": "rectangle", "vertices_px": np.round(box, 2).tolist(),
             "holds": [grain.name for grain in grains]}  # fmt: skip
    _save("pt_and_nio", shot, grains, pt.lens.described(), camera, seed, joint_regions=[joint])


def main() -> None:
    """Make the pictures named on the command line, or all."""
    makers: dict[str, Callable[[], None]] = {"scanned_pd": scanned_pd, "pt_and_nio": pt_and_nio}
    for name in sys.argv[1:] or [*PARTICLES, *makers, *FIELDS]:
        start = time.perf_counter()
        if name in makers:
            makers[name]()
        else:
            (PARTICLES | FIELDS)[name].make(name)
        print(f"{name}: {time.perf_counter() - start:.1f} s", file=sys.stderr)


if __name__ == "__main__":
    main()
