"""Pictures with a known truth: plane waves, envelopes and noise of stated power density, and what a perfect fit reaches.

Power densities are scaled so that white noise of variance s^2 has density s^2 at every frequency. Vectors are (row,
column), frequencies in cycles per pixel, phases in rad at the middle of the picture.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
import scipy.fft

from fringespan.measurement import Measurement, measure
from fringespan.micrograph import Micrograph
from fringespan.noise import RingBackground, ring_background
from fringespan.region import Footprint, Region, rectangle_footprint
from fringespan.spacings import Peak
from fringespan.spectrum import PowerSpectrum, RegionPixels, power_spectrum, prepare_pixels

Density = Callable[[np.ndarray], np.ndarray]
"""Noise power density as a function of |g| in cycles per pixel."""


@dataclass(frozen=True)
class Wave:
    """amplitude * cos(2 pi g . r + phase)."""

    g: tuple[float, float]
    amplitude: float = 1.0
    phase: float = 0.0


def places(shape: tuple[int, int]) -> tuple[np.ndarray, np.ndarray]:
    """Return row and column positions measured from the middle, shapes (rows, 1) and (1, columns)."""
    return (np.arange(shape[0]) - (shape[0] - 1) / 2)[:, None], (np.arange(shape[1]) - (shape[1] - 1) / 2)[None]


def fringes(shape: tuple[int, int], waves: Sequence[Wave]) -> np.ndarray:
    """Return the sum of some plane waves."""
    y, x = places(shape)
    picture = np.zeros(shape)
    for wave in waves:
        picture += wave.amplitude * np.cos(2 * np.pi * (wave.g[0] * y + wave.g[1] * x) + wave.phase)
    return picture


# --- noise -----------------------------------------------------------------------------------------------------------


def white(f: np.ndarray) -> np.ndarray:
    return np.ones_like(f)


def falling(f: np.ndarray) -> np.ndarray:
    """White noise and a film whose power falls with the square of the frequency."""
    return 1 + (0.03 / np.maximum(f, 0.002)) ** 2


def steeply_falling(f: np.ndarray) -> np.ndarray:
    return 1 + (0.04 / np.maximum(f, 0.002)) ** 3


def blurred(f: np.ndarray) -> np.ndarray:
    """Counts smeared by a detector."""
    return 0.05 + np.exp(-((f / 0.2) ** 2))


def transfer_rings(f: np.ndarray) -> np.ndarray:
    """The rings that a lens makes of an amorphous film."""
    return 0.4 + 2.0 * np.sin(np.pi * (1.5 * f + 60 * f * f)) ** 2 * np.exp(-((f / 0.25) ** 2))


def noise(rng: np.random.Generator, shape: tuple[int, int], density: Density = white) -> np.ndarray:
    """Return Gaussian noise of a power density, cut from a larger field so that opposite edges do not match."""
    if density is white:
        return rng.standard_normal(shape)
    large = [scipy.fft.next_fast_len(2 * n, real=True) for n in shape]
    f = np.hypot(scipy.fft.fftfreq(large[0])[:, None], scipy.fft.rfftfreq(large[1])[None])
    field_ = scipy.fft.irfft2(scipy.fft.rfft2(rng.standard_normal(large)) * np.sqrt(density(f)), s=large)
    return field_[: shape[0], : shape[1]]


@dataclass(frozen=True)
class Prepared:
    """A picture on its way: pixels, spectrum, background."""

    pixels: RegionPixels
    spectrum: PowerSpectrum
    background: RingBackground

    @property
    def footprint(self) -> Footprint:
        return self.pixels.footprint


def prepared(values: np.ndarray, mask: np.ndarray | None = None, aspect: float = 1.0) -> Prepared:
    """Take a picture, or the part of it that a mask shows, to its spectrum and background."""
    footprint = rectangle_footprint(values.shape) if mask is None else Footprint.from_mask(mask)
    spectrum, pixels = power_spectrum(prepare_pixels(values, footprint))
    return Prepared(pixels, spectrum, ring_background(spectrum, aspect))


def ellipse_mask(shape: tuple[int, int], share: float = 0.98) -> np.ndarray:
    y, x = places(shape)
    return (2 * y / shape[0]) ** 2 + (2 * x / shape[1]) ** 2 < share**2


# --- what a perfect fit reaches --------------------------------------------------------------------------------------


def cramer_rao_bound(
    shape: tuple[int, int], amplitude: float, density: float, mask: np.ndarray | None = None
) -> np.ndarray:
    """Return the least covariance, shape (2, 2), that any unbiased estimate of g = (row, column) can have.

    For a real wave of amplitude A in noise of density S: 2 S / (A^2 4 pi^2) M^-1, M the second moments of the pixels
    about their mean; for a rectangle var(u) = 6 S / (pi^2 A^2 ny nx (nx^2 - 1)).

    D. C. Rife, R. R. Boorstyn, IEEE Trans. Inf. Theory 20 (1974) 591; S. M. Kay, Fundamentals of Statistical Signal
    Processing I (1993), section on sinusoids: one-dimensional, both from memory.
    """
    y, x = np.nonzero(np.ones(shape, bool) if mask is None else mask)
    centred = np.stack([y - y.mean(), x - x.mean()])
    return 2 * density / (amplitude**2 * 4 * np.pi**2) * np.linalg.inv(centred @ centred.T)


# --- asking for the truth back ---------------------------------------------------------------------------------------


def random_g(rng: np.random.Generator, shape: tuple[int, int], highest: float = 0.4) -> tuple[float, float]:
    """Return a vector of the reported half plane, at least eight bins from the origin, all of that ring alike."""
    lowest = max(0.06, 8 / min(shape))
    length = math.sqrt(rng.uniform(lowest**2, highest**2))
    angle = rng.uniform(-math.pi / 2, math.pi / 2)
    return length * math.sin(angle), length * math.cos(angle)


def matching_peak(peaks: Sequence[Peak], g: Sequence[float], shape: tuple[int, int]) -> tuple[Peak, np.ndarray] | None:
    """Return the peak within 0.9 bins of g or of its opposite, and its error in cycles per pixel; None if there is none."""
    best = None
    for peak in peaks:
        for sign in (1, -1):
            error = sign * peak.g_per_px - np.asarray(g)
            near = (np.abs(error) * shape < 0.9).all()
            if near and (best is None or np.hypot(*error) < np.hypot(*best[1])):
                best = peak, error
    return best


@dataclass
class Trials:
    """The outcome of many pictures."""

    pictures: int = 0
    wanted: int = 0
    extra: int = 0
    errors: list[np.ndarray] = field(default_factory=list)
    over_bound: list[np.ndarray] = field(default_factory=list)
    over_sigma: list[np.ndarray] = field(default_factory=list)

    @property
    def found(self) -> float:
        """Share of the waves that were found."""
        return len(self.errors) / self.wanted

    @property
    def rms_over_bound(self) -> float:
        """RMS error per axis over the Cramer-Rao bound; its own statistical error is 0.5 / sqrt(waves) or less."""
        return float(np.sqrt(np.mean(np.square(self.over_bound))))

    @property
    def coverage(self) -> float:
        """Share of the errors per axis within 1.96 stated standard uncertainties."""
        return float(np.mean(np.abs(self.over_sigma) < 1.96))

    @property
    def extra_per_picture(self) -> float:
        return self.extra / self.pictures

    def add(
        self, measurement: Measurement, waves: Sequence[Wave], density: Sequence[float], mask: np.ndarray | None = None
    ) -> None:
        """Compare one measurement in pixels with its truth."""
        shape = measurement.micrograph.shape
        self.pictures += 1
        self.wanted += len(waves)
        used = set()
        for wave, s in zip(waves, density, strict=True):
            match = matching_peak([p for p in measurement.peaks if id(p) not in used], wave.g, shape)
            if match is None:
                continue
            peak, error = match
            used.add(id(peak))
            bound = np.sqrt(np.diag(cramer_rao_bound(shape, wave.amplitude, s, mask)))
            self.errors.append(error)
            self.over_bound.append(error / bound)
            self.over_sigma.append(error / np.sqrt(np.diag(peak.g_covariance_per_px2)))
        self.extra += len(measurement.peaks) - len(used)


def trials(
    pictures: int,
    shape: tuple[int, int],
    draw: Callable[[np.random.Generator], Sequence[Wave]],
    *,
    density: Density = white,
    region: Region | None = None,
    mask: np.ndarray | None = None,
    seed: int = 0,
    electrons: float | None = None,
) -> Trials:
    """Measure many pictures of waves drawn at random.

    With `electrons`, pixels are counts of that mean and the amplitudes are contrasts; else amplitudes are in units of
    the white noise.
    """
    rng = np.random.default_rng([seed, *shape])
    outcome = Trials()
    for _ in range(pictures):
        waves = draw(rng)
        truth = fringes(shape, waves)
        if electrons is None:
            pixels = truth + noise(rng, shape, density) + 20
            at_wave = [float(density(np.array(math.hypot(*w.g)))) for w in waves]
        else:
            pixels = rng.poisson(electrons * (1 + truth))
            # counts of mean m have variance m; the contrast is relative to m
            at_wave = [1 / electrons] * len(waves)
        outcome.add(measure(Micrograph(pixels), region), waves, at_wave, mask)
    return outcome
