"""The fringes of a profile: a slow trend and waves, fitted by least squares in direct space."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["HANN_BANDWIDTH", "Fit", "fitted_fringes"]

_FEWEST_FRINGES = 2.0
"""Fewer periods on the line cannot be told from the slow trend."""

_FALSE_ALARMS = 0.01
"""Lines of pure noise that show a fringe."""

_MORE_THAN_NOISE = 3.0
_UNEVEN = 4.5
"""Residual power at the wave over the noise around it that widens the uncertainty, and that is worth a word: noise
alone exceeds the second in under one profile in a hundred."""

_MOST_HARMONICS = 4
_MOST_OTHER_WAVES = 6
HANN_BANDWIDTH = 1.5
"""Equivalent noise bandwidth of the Hann window in bins (F. J. Harris, Proc. IEEE 66 (1978) 51)."""


@dataclass(frozen=True, eq=False)
class Fit:
    """The strongest wave of a profile.

    Attributes
    ----------
    frequency, frequency_uncertainty : float
        In cycles per pixel along the line.
    degrees_of_freedom : float
        Of the uncertainty.
    amplitude : float
        Of the fundamental.
    power_ratio : float
        Matched-filter power ratio.
    uneven : bool
        Whether more is left of it than noise explains; the uncertainty is widened by that.
    values : ndarray, shape (points,)
        Fitted trend and fringes.
    """

    frequency: float
    frequency_uncertainty: float
    degrees_of_freedom: float
    amplitude: float
    power_ratio: float
    uneven: bool
    values: NDArray[np.float64]


def fitted_fringes(positions: NDArray[np.float64], values: NDArray[np.float64]) -> Fit | None:
    """Fit the strongest wave and its harmonics; None where no wave stands out of the noise."""
    waves = Waves(positions, values)
    frequency = waves.strongest_frequency(waves.residual())
    if frequency is None:
        return None
    waves.add(frequency)
    # others are fitted beside it: through its side lobes a neighbour would pull it away
    for _ in range(_MOST_OTHER_WAVES):
        other = waves.strongest_frequency(waves.residual())
        if other is None:
            break
        waves.add(other)
    waves.keep_strongest_first()
    waves.find_harmonics()
    return waves.fit()


class Waves:
    """A quadratic trend and waves, fitted to a profile by least squares."""

    def __init__(self, positions: NDArray[np.float64], values: NDArray[np.float64]) -> None:
        self.count = len(positions)
        self.step = float(positions[1] - positions[0])
        self.length = float(positions[-1] - positions[0])
        self.bins = self.count * self.step
        # centred, so that trend, phase and frequency hardly depend on each other
        self.x = positions - positions.mean()
        self.values = values
        self.trend = np.stack([np.ones(self.count), self.x / self.length, (self.x / self.length) ** 2], axis=1)
        self.frequencies: list[float] = []
        self.harmonics = 1
        window = np.hanning(self.count + 2)[1:-1]
        self.window = window / math.sqrt(float(window @ window))

    def orders(self, wave: int) -> range:
        return range(1, self.harmonics + 1) if wave == 0 else range(1, 2)

    def columns(self, wave: int, order: int) -> NDArray[np.float64]:
        phase = 2 * np.pi * order * self.frequencies[wave] * self.x
        return np.stack([np.cos(phase), np.sin(phase)], axis=1)

    def design(self) -> NDArray[np.float64]:
        blocks = [self.columns(wave, order) for wave in range(len(self.frequencies)) for order in self.orders(wave)]
        return np.concatenate([self.trend, *blocks], axis=1)

    def coefficients(self) -> NDArray[np.float64]:
        return np.linalg.lstsq(self.design(), self.values, rcond=None)[0].astype(np.float64)

    def residual(self) -> NDArray[np.float64]:
        return self.values - self.design() @ self.coefficients()

    def power(self, residual: NDArray[np.float64], padding: int = 1) -> NDArray[np.float64]:
        """Return the windowed power density at multiples of 1 / (padding * count) cycles per step."""
        spectrum = scipy.fft.rfft(residual * self.window, padding * self.count)
        return np.asarray(np.abs(spectrum) ** 2)

    def strongest_frequency(self, residual: NDArray[np.float64]) -> float | None:
        """Return the frequency that stands out most of the noise around it, if by more than chance."""
        padding = 8
        fine, coarse = self.power(residual, padding), self.power(residual)
        # noise that falls steeply would hide its own low end in the mean around each bin
        slope = _falling_power_law(coarse)
        fine *= np.maximum(np.arange(len(fine)) / padding, 0.5) ** slope
        coarse *= np.maximum(np.arange(len(coarse)), 0.5) ** slope
        lowest = math.ceil(padding * _FEWEST_FRINGES * self.bins / self.length)
        bins = np.arange(lowest, len(fine) - 1)
        if not bins.size:
            return None
        noise = np.array([self.noise(coarse, i / padding)[0] for i in range(0, len(fine), padding)])
        ratio = fine[bins] / np.interp(bins / padding, np.arange(len(noise)), noise)
        best = int(bins[np.argmax(ratio)])
        if ratio.max() < self.threshold(self.noise(coarse, best / padding)[1]):
            return None
        return best / padding / self.bins

    def threshold(self, used: int) -> float:
        """Return the power ratio that noise exceeds in few lines, where the noise is known from `used` bins."""
        independent = used / HANN_BANDWIDTH
        # the noise is itself an average: the ratio follows an F, not an exponential law
        return independent * math.expm1(math.log(self.count / 2 / _FALSE_ALARMS) / independent)

    def noise(self, power: NDArray[np.float64], bin_number: float) -> tuple[float, int]:
        """Return the noise density around a bin, its core left out, and the number of bins that it rests on."""
        half = max(10.0, 0.3 * bin_number)
        number = np.arange(1, len(power) - 1)
        near = (np.abs(number - bin_number) <= half) & (np.abs(number - bin_number) > 2.5)
        values = power[1:-1][near]
        if not values.size:
            return float(power.mean()), 1
        # another wave nearby must not count as noise; 0.9254 is the mean of an exponential law cut at 4 medians
        clipped = np.minimum(values, 4 * np.median(values))
        return max(float(clipped.mean()) / 0.9254, np.finfo(float).tiny), int(values.size)

    def add(self, frequency: float) -> None:
        self.frequencies.append(frequency)
        self.improve()

    def improve(self) -> None:
        """Gauss-Newton steps for all frequencies at once; the other coefficients are linear."""
        largest = 0.5 / self.bins
        for _ in range(12):
            coefficients = self.coefficients()
            residual = self.values - self.design() @ coefficients
            jacobian = np.concatenate([self.design(), self.slopes(coefficients).sum(axis=2)], axis=1)
            change = np.linalg.lstsq(jacobian, residual, rcond=None)[0][-len(self.frequencies) :]
            change = np.clip(change, -largest, largest)
            highest = 0.5 / self.step
            self.frequencies = [
                float(np.clip(f + step, 1 / self.length, highest))
                for f, step in zip(self.frequencies, change, strict=True)
            ]
            if np.abs(change).max() < 1e-6 * largest:
                break

    def slopes(self, coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the derivative of the model by each frequency, split by order, shape (points, waves, orders)."""
        slopes = np.zeros((self.count, len(self.frequencies), _MOST_HARMONICS))
        place = self.trend.shape[1]
        for wave in range(len(self.frequencies)):
            for order in self.orders(wave):
                a, b = coefficients[place : place + 2]
                cosine, sine = self.columns(wave, order).T
                slopes[:, wave, order - 1] = 2 * np.pi * order * self.x * (b * cosine - a * sine)
                place += 2
        return slopes

    def amplitude(self, wave: int) -> float:
        place = self.trend.shape[1] + 2 * wave
        return float(np.hypot(*self.coefficients()[place : place + 2]))

    def keep_strongest_first(self) -> None:
        order = sorted(range(len(self.frequencies)), key=self.amplitude, reverse=True)
        self.frequencies = [self.frequencies[i] for i in order]

    def find_harmonics(self) -> None:
        """Take waves at multiples of the first into it, and look for weaker ones there."""
        first = self.frequencies[0]
        bin_width = 1 / self.bins
        others = []
        for frequency in self.frequencies[1:]:
            order = round(frequency / first)
            if 2 <= order <= _MOST_HARMONICS and abs(frequency - order * first) < 0.5 * bin_width:
                continue
            others.append(frequency)
        self.frequencies = [first, *others]
        power = self.power(self.residual())
        for order in range(2, _MOST_HARMONICS + 1):
            where = order * first / bin_width
            if order * first * self.step > 0.48:
                break
            # two more coefficients pay where the wave there has several times the power of the noise
            if power[round(where)] > 8 * self.noise(power, where)[0]:
                self.harmonics = order
        self.improve()

    def fit(self) -> Fit | None:
        """Return the first wave with its uncertainty; None where the fitted amplitude is not above the noise."""
        coefficients = self.coefficients()
        residual = self.values - self.design() @ coefficients
        power = self.power(residual)
        slopes = self.slopes(coefficients)
        jacobian = np.concatenate([self.design(), slopes.sum(axis=2)], axis=1)
        inverse = np.linalg.pinv(jacobian.T @ jacobian)
        # sandwich: each order with the noise at its own frequency
        middle = np.zeros_like(inverse)
        place, first = self.trend.shape[1], jacobian.shape[1] - len(self.frequencies)
        for wave, frequency in enumerate(self.frequencies):
            for order in self.orders(wave):
                part = np.zeros_like(jacobian)
                part[:, place : place + 2] = self.columns(wave, order)
                part[:, first + wave] = slopes[:, wave, order - 1]
                middle += self.noise(power, order * frequency * self.bins)[0] * (part.T @ part)
                place += 2
        amplitude, noise, used = self.amplitude(0), *self.noise(power, self.frequencies[0] * self.bins)
        power_ratio = amplitude**2 * self.count / (4 * noise)
        if power_ratio < self.threshold(used):
            return None
        variance = float((inverse @ middle @ inverse)[first, first])
        frequency = self.frequencies[0]
        centre = round(frequency * self.bins)
        core = power[max(centre - 2, 1) : centre + 3]
        excess = float(core.mean()) / noise if core.size else 0.0
        if excess > _MORE_THAN_NOISE:
            variance *= excess
        return Fit(
            frequency=frequency,
            frequency_uncertainty=math.sqrt(variance),
            degrees_of_freedom=2 * used / HANN_BANDWIDTH,
            amplitude=amplitude,
            power_ratio=power_ratio,
            uneven=excess > _UNEVEN,
            values=self.main_part(coefficients),
        )

    def main_part(self, coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return trend and fringes without the other waves."""
        used = self.trend.shape[1] + 2 * self.harmonics
        return np.asarray(self.design()[:, :used] @ coefficients[:used])


def _falling_power_law(power: NDArray[np.float64]) -> float:
    """Return the exponent p >= 0 of noise that falls like frequency^-p; 0 where it does not fall."""
    number = np.arange(2, len(power) - 1)
    if number.size < 6:
        return 0.0
    logarithm = np.log(np.maximum(power[number], np.finfo(float).tiny))
    # in equal steps of the logarithm of frequency each decade counts the same
    slope = np.polynomial.Polynomial.fit(np.log(number), logarithm, 1, w=number**-0.5).convert().coef[-1]
    return float(np.clip(-slope, 0.0, 4.0))
