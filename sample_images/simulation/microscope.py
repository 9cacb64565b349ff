"""The microscope: wave through the specimen (abtem's multislice), lens, camera."""

from dataclasses import dataclass
from typing import Any

import abtem
import dask
import numpy as np
from abtem.core.energy import energy2sigma, energy2wavelength
from ase import Atoms
from ase.data import atomic_numbers
from scipy import ndimage

from .crystals import Crystal, Orientation
from .specimens import Cloud, carbon_film

dask.config.set(scheduler="synchronous")
# one thread, and plans that do not depend on timing: the same numbers every time
abtem.config.set({"fftw.threads": 1, "fftw.planning_effort": "FFTW_ESTIMATE", "diagnostics.progress_bar": False})

_SLICE_NM = 0.2


def _as_atoms(cloud: Cloud, size: tuple[float, float], depth: float) -> Atoms:
    """Return the atoms in abtem's frame: x right, y down, z with the beam, away from the viewer; angstrom."""
    right, up, towards = cloud.positions.T
    top = towards.max() + 0.1
    positions = np.stack([right % size[0], -up % size[1], top - towards], axis=1)
    return Atoms(list(cloud.symbols), positions=10 * positions, cell=10 * np.array([*size, depth]), pbc=True)


def exit_wave(cloud: Cloud, size: tuple[float, float], points: tuple[int, int], voltage_kv: float) -> np.ndarray:
    """Return the wave behind the specimen, (rows, columns), from independent-atom potentials and a plane wave.

    The field is periodic, `size` = (width, height) in nm, its top left corner is (right, up) = (0, 0);
    `points` = (rows, columns).
    """
    span = np.ptp(cloud.positions[:, 2]) + 0.2
    depth = np.ceil(span / _SLICE_NM) * _SLICE_NM
    potential = abtem.Potential(
        _as_atoms(cloud, size, depth),
        gpts=(points[1], points[0]),
        slice_thickness=10 * _SLICE_NM,
        parametrization="lobato",
        projection="infinite",
    )
    return abtem.PlaneWave(energy=1e3 * voltage_kv).multislice(potential).compute().array.T


def film_phase(cloud: Cloud, size: tuple[float, float], points: tuple[int, int], voltage_kv: float) -> np.ndarray:
    """Return the phase shift of a thin film in one plane, (rows, columns), rad, less its mean."""
    span = np.ptp(cloud.positions[:, 2]) + 0.2
    potential = abtem.Potential(
        _as_atoms(cloud, size, span),
        gpts=(points[1], points[0]),
        slice_thickness=10 * span,
        parametrization="lobato",
        projection="infinite",
    )
    phase = energy2sigma(1e3 * voltage_kv) * potential.build().compute().array.sum(axis=0).T
    return phase - phase.mean()


@dataclass(frozen=True)
class Lens:
    """Objective lens: defocus positive = underfocus. Envelopes of focal spread and convergence act on the wave.

    Transfer exp(-i chi), chi = pi lambda k^2 (Cs lambda^2 k^2 / 2 - defocus), and both envelopes as in
    Reimer & Kohl, Transmission Electron Microscopy, chapter 6 (from memory). The focal spread is a standard deviation,
    the convergence the semi-angle at 1/e. abtem's own functions agree within 1e-6 (its focal spread is sqrt(2) larger).
    """

    voltage_kv: float
    cs_mm: float
    defocus_nm: float
    focal_spread_nm: float = 3.0
    convergence_mrad: float = 0.2

    @property
    def wavelength_nm(self) -> float:
        """Relativistic wavelength."""
        return energy2wavelength(1e3 * self.voltage_kv) / 10

    def described(self, mode: str = "HRTEM") -> dict[str, Any]:
        """Return the settings as plain values."""
        return {
            "mode": mode,
            "voltage_kv": self.voltage_kv,
            "cs_mm": self.cs_mm,
            "defocus_nm": self.defocus_nm,
            "defocus_sign": "positive = underfocus",
            "focal_spread_nm": self.focal_spread_nm,
            "convergence_mrad": self.convergence_mrad,
        }

    def transfer(self, k: np.ndarray) -> np.ndarray:
        """Return the complex transfer at spatial frequencies k in 1/nm."""
        wavelength, cs = self.wavelength_nm, 1e6 * self.cs_mm
        chi = np.pi * wavelength * k**2 * (0.5 * cs * wavelength**2 * k**2 - self.defocus_nm)
        temporal = np.exp(-0.5 * (np.pi * wavelength * self.focal_spread_nm * k**2) ** 2)
        slope = np.pi * self.convergence_mrad * 1e-3 / wavelength
        spatial = np.exp(-((slope * wavelength * k * (cs * wavelength**2 * k**2 - self.defocus_nm)) ** 2))
        return temporal * spatial * np.exp(-1j * chi)

    def through(self, wave: np.ndarray, size: tuple[float, float]) -> np.ndarray:
        """Return a wave behind the lens; the field is periodic, `size` = (width, height) in nm."""
        rows, columns = wave.shape
        k_row = np.fft.fftfreq(rows, size[1] / rows)[:, None]
        k_column = np.fft.fftfreq(columns, size[0] / columns)[None, :]
        transfer = self.transfer(np.hypot(k_row, k_column))
        return np.fft.ifft2(transfer * np.fft.fft2(wave))


OVERSAMPLING = 2
"""Grid points per pixel of the camera, along each axis, at which waves are computed."""


@dataclass(frozen=True)
class Camera:
    """Counting camera: true pixel size (row, column) in nm, dose, blur of the image before counting, digital counts.

    The computed field is wider than the picture by `margin_px` on every side, so that nothing wraps around into it.
    """

    pixel_size_nm: tuple[float, float]
    shape: tuple[int, int]
    dose_per_square_angstrom: float
    counts_per_electron: float = 1.0
    dark_level: float = 0.0
    blur_sigma_px: float = 0.4
    margin_px: int = 24

    @property
    def electrons_per_pixel(self) -> float:
        """Electrons that fall on a pixel where there is no specimen."""
        return self.dose_per_square_angstrom * 100 * self.pixel_size_nm[0] * self.pixel_size_nm[1]

    def described(self) -> dict[str, float]:
        """Return the settings as plain values."""
        return {
            "dose_electrons_per_square_angstrom": self.dose_per_square_angstrom,
            "counts_per_electron": self.counts_per_electron,
            "dark_level": self.dark_level,
            "blur_sigma_px": self.blur_sigma_px,
        }

    @property
    def field_nm(self) -> tuple[float, float]:
        """Width and height of the computed field."""
        rows, columns = (n + 2 * self.margin_px for n in self.shape)
        return columns * self.pixel_size_nm[1], rows * self.pixel_size_nm[0]

    @property
    def field_points(self) -> tuple[int, int]:
        """Grid of the computed field, (rows, columns)."""
        rows, columns = (OVERSAMPLING * (n + 2 * self.margin_px) for n in self.shape)
        return rows, columns

    def pixels(self, right_up_nm: np.ndarray) -> np.ndarray:
        """Return the picture's (row, column) of points (n, 2) of the field, whose top left corner is (0, 0)."""
        right, up = np.asarray(right_up_nm).T
        offset = self.margin_px + (OVERSAMPLING - 1) / (2 * OVERSAMPLING)
        return np.stack([-up / self.pixel_size_nm[0] - offset, right / self.pixel_size_nm[1] - offset], axis=1)

    def place(self, row: float, column: float) -> tuple[float, float, float]:
        """Return the point of the field (right, up, 0), nm, that the picture shows at a row and column."""
        offset = self.margin_px + (OVERSAMPLING - 1) / (2 * OVERSAMPLING)
        return (column + offset) * self.pixel_size_nm[1], -(row + offset) * self.pixel_size_nm[0], 0.0

    def expected(self, fine: np.ndarray) -> np.ndarray:
        """Return the picture without noise, in counts above the dark level: each pixel collects its area."""
        rows, columns = (n + 2 * self.margin_px for n in self.shape)
        binned = fine.reshape(rows, OVERSAMPLING, columns, OVERSAMPLING).mean(axis=(1, 3))
        blurred = ndimage.gaussian_filter(binned, self.blur_sigma_px, mode="wrap")
        m = self.margin_px
        cut = blurred[m : m + self.shape[0], m : m + self.shape[1]]
        return cut * self.electrons_per_pixel * self.counts_per_electron

    def record(self, expected: np.ndarray, dtype: str, rng: np.random.Generator) -> np.ndarray:
        """Return the picture: electrons counted one by one (Poisson), in whole counts with the dark level."""
        electrons = np.round(expected / self.counts_per_electron, 2)  # so that the last digits of a sum decide nothing
        counts = rng.poisson(electrons) * self.counts_per_electron + self.dark_level
        limit = np.iinfo(dtype).max
        if counts.max() > limit:
            raise ValueError(f"counts up to {counts.max():.0f} do not fit {dtype}")
        return np.round(counts).astype(dtype)


@dataclass(frozen=True)
class CrystalWave:
    """Wave behind an endless flat crystal: amplitudes (n,) at frequencies (n, 2) = (row, column), 1/nm."""

    amplitudes: np.ndarray
    frequencies: np.ndarray

    def field(self, camera: Camera, lens: Lens | None) -> np.ndarray:
        """Return the wave on the camera's grid, exact at any pixel size; through the lens if one is given."""
        amplitudes = self.amplitudes
        if lens is not None:
            amplitudes = amplitudes * lens.transfer(np.hypot(*self.frequencies.T))
        rows, columns = camera.field_points
        down = np.arange(rows) * camera.pixel_size_nm[0] / OVERSAMPLING
        right = np.arange(columns) * camera.pixel_size_nm[1] / OVERSAMPLING
        left_factor = np.exp(2j * np.pi * np.outer(down, self.frequencies[:, 0])) * amplitudes
        return left_factor @ np.exp(2j * np.pi * np.outer(self.frequencies[:, 1], right))


Box = tuple[tuple[int, int, int], tuple[int, int, int], tuple[int, int, int]]
"""Right-angled repeat of a crystal: lattice vectors to the right, up and towards the viewer (the zone axis)."""


def crystal_wave(crystal: Crystal, box: Box, orientation: Orientation, repeats: int, voltage_kv: float) -> CrystalWave:
    """Return the wave behind a perfect, unshaken crystal `repeats` boxes thick."""
    edges = np.asarray(box) @ crystal.axes_nm
    lengths = np.linalg.norm(edges, axis=1)
    if not np.allclose(edges @ edges.T, np.diag(lengths**2), atol=1e-9) or np.linalg.det(edges) < 0:
        raise ValueError(f"{box} is no right-handed, right-angled repeat of {crystal.id}")
    grids = np.meshgrid(*[np.arange(-6, 7)] * 3, indexing="ij")
    nodes = np.stack([grid.ravel() for grid in grids], axis=1)
    fractions = crystal.atoms.get_scaled_positions()
    symbols = np.tile(crystal.atoms.get_chemical_symbols(), len(nodes))
    inside = ((nodes[:, None] + fractions[None]).reshape(-1, 3) @ crystal.axes_nm) @ np.linalg.inv(edges) + 1e-6
    chosen = np.all((inside >= 0) & (inside < 1), axis=1)
    positions = inside[chosen] * lengths
    layers = [positions + np.array([0, 0, n * lengths[2]]) for n in range(repeats)]
    cloud = Cloud(np.tile(symbols[chosen], repeats), np.concatenate(layers))
    points = tuple(2 * int(np.ceil(length / 0.012 / 2)) for length in lengths[:2])
    wave = exit_wave(cloud, (lengths[0], lengths[1]), (points[1], points[0]), voltage_kv)
    amplitudes = np.fft.fft2(wave) / wave.size
    f_up = -np.fft.fftfreq(points[1], lengths[1] / points[1])[:, None] + np.zeros((1, points[0]))
    f_right = np.fft.fftfreq(points[0], lengths[0] / points[0])[None, :] + np.zeros((points[1], 1))
    strong = (np.hypot(f_up, f_right) < 22) & (np.abs(amplitudes) > 1e-6)
    # from the box's own axes to those of the screen
    turn = orientation.matrix(crystal) @ (edges / lengths[:, None]).T
    flat = np.stack([f_right[strong], f_up[strong]], axis=1) @ turn[:2, :2].T
    return CrystalWave(amplitudes[strong], np.stack([-flat[:, 1], flat[:, 0]], axis=1))


def crystal_image(wave: CrystalWave, phase: np.ndarray | None, lens: Lens, camera: Camera) -> np.ndarray:
    """Return the intensity of an endless crystal with a film's phase on it.

    The crystal goes through the lens beam by beam, exactly; only what the film adds is transformed on the grid.
    """
    image_wave = wave.field(camera, lens)
    if phase is not None:
        added = wave.field(camera, None) * (np.exp(1j * phase) - 1)
        image_wave = image_wave + lens.through(added, camera.field_nm)
    return np.abs(image_wave) ** 2


def dark_field_image(cloud: Cloud, lens: Lens, semi_angle_mrad: float, blur_nm: float, camera: Camera) -> np.ndarray:
    """Return an annular dark-field scan in the incoherent approximation: atoms Z^1.7 (Pennycook), blurred by the probe.

    `blur_nm` is the Gaussian width of thermal motion and electron source together. The brightest point is 1.
    """
    rows, columns = camera.field_points
    width, height = camera.field_nm
    k_row, k_column = np.fft.fftfreq(rows, height / rows), np.fft.fftfreq(columns, width / columns)
    k = np.hypot(k_row[:, None], k_column[None, :])
    probe = np.abs(np.fft.ifft2(lens.transfer(k) * (k * lens.wavelength_nm <= 1e-3 * semi_angle_mrad))) ** 2
    spread = np.fft.fft2(probe) * np.exp(-2 * (np.pi * k * blur_nm) ** 2)
    z = np.array([atomic_numbers[symbol] for symbol in cloud.symbols], float)
    right, up, _ = cloud.positions.T
    atoms = (np.exp(2j * np.pi * np.outer(k_row, up)) * z**1.7) @ np.exp(-2j * np.pi * np.outer(right, k_column))
    image = np.fft.ifft2(atoms * spread).real.clip(0)
    return image / image.max()


@dataclass(frozen=True)
class Film:
    """Amorphous carbon film; with `contrast_rms` its phase is scaled until the film alone has that contrast."""

    thickness_nm: float
    contrast_rms: float | None = None

    def phase(self, camera: Camera, lens: Lens, rng: np.random.Generator) -> np.ndarray:
        """Return its phase on the camera's grid."""
        atoms = carbon_film(camera.field_nm, self.thickness_nm, rng)
        phase = film_phase(atoms, camera.field_nm, camera.field_points, lens.voltage_kv)
        for _ in range(3 if self.contrast_rms else 0):
            phase = phase * (self.contrast_rms / self.contrast(phase, camera, lens))
        return phase

    @staticmethod
    def contrast(phase: np.ndarray, camera: Camera, lens: Lens) -> float:
        """Return the rms contrast of the film alone, without noise."""
        alone = camera.expected(np.abs(lens.through(np.exp(1j * phase), camera.field_nm)) ** 2)
        return float(alone.std() / alone.mean())


@dataclass(frozen=True)
class Exposure:
    """A picture, the same without film and noise (counts above the dark level), rms contrast of the film alone."""

    picture: np.ndarray
    ideal: np.ndarray
    film_contrast_rms: float


def expose(
    cloud: Cloud, film: Film, lens: Lens, camera: Camera, rng: np.random.Generator, dtype: str = "uint16"
) -> Exposure:
    """Take a picture of atoms on a film."""
    wave = exit_wave(cloud, camera.field_nm, camera.field_points, lens.voltage_kv)
    return exposed(wave, film.phase(camera, lens, rng), lens, camera, rng, dtype)


def exposed(
    wave: np.ndarray, phase: np.ndarray, lens: Lens, camera: Camera, rng: np.random.Generator, dtype: str = "uint16"
) -> Exposure:
    """Take a picture of a wave that has passed a specimen and then a film with the phase given."""
    return _exposure(
        np.abs(lens.through(wave, camera.field_nm)) ** 2,
        np.abs(lens.through(wave * np.exp(1j * phase), camera.field_nm)) ** 2,
        Film.contrast(phase, camera, lens), camera, rng, dtype,
    )  # fmt: skip


def expose_crystal(wave: CrystalWave, film: Film, lens: Lens, camera: Camera, rng: np.random.Generator) -> Exposure:
    """Take a picture of an endless crystal with a film on it."""
    phase = film.phase(camera, lens, rng)
    return _exposure(
        crystal_image(wave, None, lens, camera), crystal_image(wave, phase, lens, camera),
        film.contrast(phase, camera, lens), camera, rng, "uint16",
    )  # fmt: skip


def _exposure(
    ideal: np.ndarray, intensity: np.ndarray, contrast: float, camera: Camera, rng: np.random.Generator, dtype: str
) -> Exposure:
    picture = camera.record(camera.expected(intensity), dtype, rng)
    return Exposure(picture, camera.expected(ideal), round(contrast, 4))
