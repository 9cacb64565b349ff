"""How far a line is off the normal of the fringes, from their phase across the strip."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from fringespan.profile.strip import Strip
from fringespan.profile.waves import HANN_BANDWIDTH, Fit

__all__ = ["Tilt", "fringes_in_single_lines", "tilt_of"]

_FEWEST_LINES = 4
_PADDING = 16

_FARTHEST = 0.75
"""Periods across the strip beyond which the average keeps less than a third of the fringes; what the mean shows is then
something else."""

_MOST_OTHER_SETS = 4
_OTHER_SET = 15.0
"""Power over the noise at which another set of fringes with the same period along the line is taken into account."""

_MORE_THAN_NOISE = 4.0


@dataclass(frozen=True)
class Tilt:
    """The angle between a line and the normal of the fringes.

    Attributes
    ----------
    angle_deg, uncertainty_deg : float
        From 0 to 90, with its standard uncertainty.
    kept : float
        How much of the fringes' amplitude the average across the strip has kept, from 0 to 1.
    single : bool
        Whether one set of fringes explains what is seen; if not, the angle is not to be trusted.
    """

    angle_deg: float
    uncertainty_deg: float
    kept: float
    single: bool


def tilt_of(lines: NDArray[np.float64], strip: Strip, fit: Fit) -> Tilt | None:
    """Find how far a line is off the normal of the fringes, from their phase in each line of the strip.

    Other sets of fringes may have the same period along the line, as those of a lattice do; they differ in how they run
    across the strip, and are fitted beside.

    Parameters
    ----------
    lines : ndarray, shape (lines, points)
    strip : Strip
    fit : Fit
        Of their mean.

    Returns
    -------
    Tilt or None
        None where the strip is too narrow to tell.
    """
    count = len(lines)
    if count < _FEWEST_LINES:
        return None
    x = strip.positions - strip.positions.mean()
    window = np.hanning(len(x) + 2)[1:-1]
    wave = np.exp(-2j * np.pi * fit.frequency * x) * window
    amplitudes = 2 * ((lines - lines.mean(axis=1, keepdims=True)) @ wave) / window.sum()
    # mean square of the noise in each: a line has one share in `count` of the strip's power ratio
    noise = HANN_BANDWIDTH * count / fit.power_ratio * fit.amplitude**2
    slopes, parts, rest = _waves_across(amplitudes, strip.offsets, noise)
    slope, part = slopes[0], parts[0]
    sigma = math.sqrt(noise / 2 / float(np.sum(strip.offsets**2))) / (2 * math.pi * max(abs(part), 1e-300))
    kept = float(np.abs(np.mean(np.exp(2j * np.pi * slope * strip.offsets))))
    angle = _angle_to_normal(strip, fit.frequency, slope)
    wider = _angle_to_normal(strip, fit.frequency, slope + math.copysign(sigma, slope))
    freedom = max(count - 1.5 * len(slopes), 1.0)
    single = float(np.sum(np.abs(rest) ** 2)) / freedom < _MORE_THAN_NOISE * noise
    return Tilt(angle, abs(wider - angle), kept, single)


def _waves_across(
    amplitudes: NDArray[np.complex128], offsets: NDArray[np.float64], noise: float
) -> tuple[list[float], NDArray[np.complex128], NDArray[np.complex128]]:
    """Split amplitudes into waves across the strip, that of the mean first.

    Returns their frequencies in cycles per pixel, their amplitudes, and what is left.
    """
    count = len(amplitudes)
    frequencies = np.fft.fftfreq(_PADDING * count)
    near = np.abs(frequencies) * count <= _FARTHEST
    spectrum = np.abs(np.fft.fft(amplitudes, _PADDING * count)) ** 2
    slopes = [float(frequencies[near][np.argmax(spectrum[near])])]
    slopes, parts, rest = _fitted_across(amplitudes, offsets, slopes)
    for _ in range(min(_MOST_OTHER_SETS, count // 3)):
        left = np.where(near, 0.0, np.abs(np.fft.fft(rest, _PADDING * count)) ** 2)
        if left.max() < _OTHER_SET * count * noise:
            break
        slopes, parts, rest = _fitted_across(amplitudes, offsets, [*slopes, float(frequencies[np.argmax(left)])])
    return slopes, parts, rest


def _fitted_across(
    amplitudes: NDArray[np.complex128], offsets: NDArray[np.float64], slopes: list[float]
) -> tuple[list[float], NDArray[np.complex128], NDArray[np.complex128]]:
    """Fit waves across the strip by Gauss-Newton steps from these frequencies."""
    largest = 0.25 / len(offsets)
    current = np.array(slopes)
    for _ in range(8):
        waves = np.exp(2j * np.pi * offsets[:, None] * current)
        parts = np.linalg.lstsq(waves, amplitudes, rcond=None)[0]
        rest = amplitudes - waves @ parts
        # complex amplitudes and real frequencies together, so real and imaginary parts are stacked
        by_slope = 2j * np.pi * offsets[:, None] * waves * parts
        columns = np.concatenate([waves, 1j * waves, by_slope], axis=1)
        jacobian = np.concatenate([columns.real, columns.imag])
        change = np.linalg.lstsq(jacobian, np.concatenate([rest.real, rest.imag]), rcond=None)[0][-len(slopes) :]
        current = current + np.clip(change, -largest, largest)
    waves = np.exp(2j * np.pi * offsets[:, None] * current)
    parts = np.linalg.lstsq(waves, amplitudes, rcond=None)[0]
    rest = amplitudes - waves @ parts
    return current.tolist(), np.asarray(parts, dtype=np.complex128), np.asarray(rest, dtype=np.complex128)


def _angle_to_normal(strip: Strip, along: float, across: float) -> float:
    """Return the angle in degrees between the line and g, both in the specimen; g by its parts along and across."""
    g_px = np.linalg.solve(np.stack([strip.along, strip.across]), [along, across])
    g = np.linalg.solve(strip.geometry.T, g_px)
    line = strip.geometry @ strip.along
    return math.degrees(math.acos(min(1.0, abs(float(g @ line)) / float(np.hypot(*g) * np.hypot(*line)))))


def fringes_in_single_lines(lines: NDArray[np.float64]) -> bool:
    """Say whether the lines have a wave in common, which their mean may have lost; shape (lines, points)."""
    if len(lines) < _FEWEST_LINES:
        return False
    window = np.hanning(lines.shape[1] + 2)[1:-1]
    power = np.abs(scipy.fft.rfft((lines - lines.mean(axis=1, keepdims=True)) * window, axis=1)) ** 2
    mean = power.mean(axis=0)
    # a slow trend reaches up to here through the window
    bins = np.arange(5, len(mean) - 1)
    if bins.size < 8:
        return False
    ratio = mean[bins] / np.median(mean[bins])
    # the mean of as many exponential laws as there are independent lines
    independent = len(lines) / HANN_BANDWIDTH
    return bool(ratio.max() > 1 + 6 / math.sqrt(independent) + 12 / independent)
