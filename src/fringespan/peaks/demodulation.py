"""Demodulation: the untapered pixels multiplied by a plane wave and summed, in blocks and as a whole."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.region import Footprint
from fringespan.spectrum import RegionPixels, trend_row

__all__ = ["Demodulation", "block_size", "demodulate", "turned"]

_LARGE = 400
"""Regions wider than this are summed in blocks of 8 pixels, smaller ones in blocks of 4."""


@dataclass(frozen=True, eq=False, slots=True)
class Demodulation:
    """Sums of the detrended pixels z times exp(-2 pi i (v y + u x)), coordinates from the middle of the rectangle.

    Attributes
    ----------
    frequency : ndarray, shape (n, 2)
        (v, u), cycles per pixel.
    blocks : ndarray of complex64, shape (n, blocks down, blocks across)
        Sums over blocks of `block` x `block` pixels.
    block : int
    moments : ndarray of complex128, shape (n, 3)
        Sums over the region, weighted by 1, y, x.
    """

    frequency: NDArray[np.float64]
    blocks: NDArray[np.complex64]
    block: int
    moments: NDArray[np.complex128]

    def part(self, which: NDArray[np.bool_] | NDArray[np.intp]) -> Demodulation:
        """Return that of some of the frequencies."""
        return Demodulation(self.frequency[which], self.blocks[which], self.block, self.moments[which])

    def joined(self, other: Demodulation) -> Demodulation:
        """Return that of these frequencies and then the other's."""
        return Demodulation(
            np.concatenate([self.frequency, other.frequency]),
            np.concatenate([self.blocks, other.blocks]),
            self.block,
            np.concatenate([self.moments, other.moments]),
        )

    def replaced(self, which: NDArray[np.bool_], new: Demodulation) -> Demodulation:
        """Return that with some of the frequencies replaced by new ones."""
        frequency, blocks, moments = self.frequency.copy(), self.blocks.copy(), self.moments.copy()
        frequency[which], blocks[which], moments[which] = new.frequency, new.blocks, new.moments
        return Demodulation(frequency, blocks, self.block, moments)


_FAST = {"reassoc", "contract", "nsz", "arcp"}


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _demodulate(values, spans, trend, frequency, size, blocks, moments):  # type: ignore[no-untyped-def]
    ny, nx = values.shape
    count = frequency.shape[0]
    middle_y = (ny - 1) / 2
    middle_x = (nx - 1) / 2
    half = (size - 1) / 2
    # a little more than the blocks need: rows a power of two apart would displace each other from the cache
    width = size * blocks.shape[2] + 16
    scaled = ((np.arange(nx) + 0.5) * 2 / nx - 1).astype(np.float32)
    position = (np.arange(width) - middle_x).astype(np.float32)
    wave = np.zeros((count, 2, width), np.float32)
    # of rows at equal distance from the middle of a block the cosine is the same and the sine opposite
    weights = np.empty((count, 4, size // 2), np.float32)
    for k in range(count):
        _write_wave(frequency[k, 1], middle_x, nx, wave[k])
        for r in range(size // 2):
            angle = 2 * np.pi * frequency[k, 0] * (half - r)
            weights[k, 0, r] = np.cos(angle)
            weights[k, 1, r] = -np.sin(angle)
            weights[k, 2, r] = np.cos(angle) * (half - r)
            weights[k, 3, r] = -np.sin(angle) * (half - r)
    z = np.zeros((size, width), np.float32)
    folded = np.zeros((size, width), np.float32)
    product = np.zeros((2, width), np.float32)
    scratch = np.zeros((2, width // 2), np.float32)
    span = 0
    for block in range(blocks.shape[1]):
        y0 = block * size
        z[:, :] = np.float32(0)
        while span < spans.shape[0] and spans[span, 0] < y0 + size:
            y, x0, x1 = spans[span, 0], spans[span, 1], spans[span, 2]
            a, b, c, d = trend_row(trend, y, ny)
            source, target, t = values[y, x0:x1], z[y - y0, x0:x1], scaled[x0:x1]
            for x in range(source.size):
                target[x] = np.float32(source[x]) - (a + t[x] * (b + t[x] * (c + t[x] * d)))
            span += 1
        for r in range(size // 2):
            _fold(z[r], z[size - 1 - r], folded[r], folded[size // 2 + r])
        centre = y0 + half - middle_y
        for k in range(count):
            if size == 8:
                across, down = _eight_rows(folded, weights[k], wave[k], position, product)
            else:
                across, down = _four_rows(folded, weights[k], wave[k], position, product)
            # what is common to the rows of the block: the phase of their middle
            angle = 2 * np.pi * frequency[k, 0] * centre
            turn = np.cos(angle) - 1j * np.sin(angle)
            re = _block_sums(product[0], size, scratch)
            im = _block_sums(product[1], size, scratch)
            total = 0j
            for j in range(blocks.shape[2]):
                value = (re[j] + 1j * im[j]) * turn
                blocks[k, block, j] = value
                total += value
            moments[k, 0] += total
            moments[k, 1] += centre * total + down * turn
            moments[k, 2] += across * turn


@numba.njit(cache=True, nogil=True)
def _write_wave(frequency, middle, count, wave):  # type: ignore[no-untyped-def]
    """Fill wave with real and imaginary part of exp(-2 pi i f (x - middle)); one exponential serves 32 points."""
    step = np.exp(-2j * np.pi * frequency)
    for first in range(0, count, 32):
        turn = np.exp(-2j * np.pi * frequency * (first - middle))
        for x in range(first, min(first + 32, count)):
            wave[0, x] = turn.real
            wave[1, x] = turn.imag
            turn *= step


@numba.njit(cache=True, nogil=True)
def _fold(upper, lower, even, odd):  # type: ignore[no-untyped-def]
    for x in range(upper.size):
        even[x] = lower[x] + upper[x]
        odd[x] = lower[x] - upper[x]


# In the two functions below all weights are scalars and all rows lie in one array: with more pointers the compiler would
# not use vectors. They write the product of the rows' sum with the wave, and return the sums of that product times the
# position along the row, and of the rows weighted by their distance from the middle of the block.


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _eight_rows(folded, w, wave, position, product):  # type: ignore[no-untyped-def]
    c0, c1, c2, c3 = w[0, 0], w[0, 1], w[0, 2], w[0, 3]
    s0, s1, s2, s3 = w[1, 0], w[1, 1], w[1, 2], w[1, 3]
    p0, p1, p2, p3 = w[2, 0], w[2, 1], w[2, 2], w[2, 3]
    q0, q1, q2, q3 = w[3, 0], w[3, 1], w[3, 2], w[3, 3]
    across_re = across_im = down_re = down_im = np.float32(0)
    for x in range(folded.shape[1]):
        a = folded[0, x] * c0 + folded[1, x] * c1 + folded[2, x] * c2 + folded[3, x] * c3
        b = folded[4, x] * s0 + folded[5, x] * s1 + folded[6, x] * s2 + folded[7, x] * s3
        p = folded[4, x] * p0 + folded[5, x] * p1 + folded[6, x] * p2 + folded[7, x] * p3
        q = folded[0, x] * q0 + folded[1, x] * q1 + folded[2, x] * q2 + folded[3, x] * q3
        re = a * wave[0, x] - b * wave[1, x]
        im = a * wave[1, x] + b * wave[0, x]
        across_re += re * position[x]
        across_im += im * position[x]
        down_re += p * wave[0, x] - q * wave[1, x]
        down_im += p * wave[1, x] + q * wave[0, x]
        product[0, x] = re
        product[1, x] = im
    return across_re + 1j * across_im, down_re + 1j * down_im


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _four_rows(folded, w, wave, position, product):  # type: ignore[no-untyped-def]
    c0, c1, s0, s1 = w[0, 0], w[0, 1], w[1, 0], w[1, 1]
    p0, p1, q0, q1 = w[2, 0], w[2, 1], w[3, 0], w[3, 1]
    across_re = across_im = down_re = down_im = np.float32(0)
    for x in range(folded.shape[1]):
        a = folded[0, x] * c0 + folded[1, x] * c1
        b = folded[2, x] * s0 + folded[3, x] * s1
        p = folded[2, x] * p0 + folded[3, x] * p1
        q = folded[0, x] * q0 + folded[1, x] * q1
        re = a * wave[0, x] - b * wave[1, x]
        im = a * wave[1, x] + b * wave[0, x]
        across_re += re * position[x]
        across_im += im * position[x]
        down_re += p * wave[0, x] - q * wave[1, x]
        down_im += p * wave[1, x] + q * wave[0, x]
        product[0, x] = re
        product[1, x] = im
    return across_re + 1j * across_im, down_re + 1j * down_im


@numba.njit(cache=True, nogil=True)
def _block_sums(line, size, scratch):  # type: ignore[no-untyped-def]
    """Return the sums of each `size` (4 or 8) neighbouring values of a line, which become its own first values."""
    _sums_of_pairs(line, line.size // 2, scratch[0])
    _sums_of_pairs(scratch[0], line.size // 4, line)
    if size == 4:
        return line
    _sums_of_pairs(line, line.size // 8, scratch[1])
    line[: line.size // 8] = scratch[1, : line.size // 8]
    return line


@numba.njit(cache=True, nogil=True)
def _sums_of_pairs(line, count, out):  # type: ignore[no-untyped-def]
    for x in range(count):
        out[x] = line[2 * x] + line[2 * x + 1]


def demodulate(pixels: RegionPixels, frequency: NDArray[np.float64]) -> Demodulation:
    """Demodulate a region at several frequencies in one pass over its pixels.

    Parameters
    ----------
    pixels : RegionPixels
    frequency : ndarray, shape (n, 2)
        (row, column) in cycles per pixel.

    Returns
    -------
    Demodulation
    """
    ny, nx = pixels.footprint.shape
    size = block_size(pixels.footprint)
    blocks = np.empty((len(frequency), -(-ny // size), -(-nx // size)), np.complex64)
    moments = np.zeros((len(frequency), 3), np.complex128)
    if len(frequency):
        _demodulate(pixels.values, pixels.footprint.spans, pixels.trend, frequency, size, blocks, moments)
    return Demodulation(frequency, blocks, size, moments)


def turned(demodulation: Demodulation, footprint: Footprint, step: NDArray[np.float64]) -> Demodulation:
    """Return the demodulation at frequencies a small step away, from the sums over blocks alone.

    Within a block the sums keep the phase that the step would turn by up to pi d size / n, n the pixels across the region
    and d the step in bins, so that a fitted position is off by some d (size / n)^2 bins.

    Parameters
    ----------
    demodulation : Demodulation
    footprint : Footprint
        Of the region that was demodulated.
    step : ndarray, shape (n, 2)
        Change of the frequencies, cycles per pixel.

    Returns
    -------
    Demodulation
    """
    blocks, moments = np.empty_like(demodulation.blocks), np.empty_like(demodulation.moments)
    _turn(demodulation.blocks, demodulation.moments, demodulation.block, *footprint.shape, step, blocks, moments)
    return Demodulation(demodulation.frequency + step, blocks, demodulation.block, moments)


@numba.njit(cache=True, nogil=True, fastmath=_FAST)
def _turn(blocks, moments, size, ny, nx, step, turned_blocks, turned_moments):  # type: ignore[no-untyped-def]
    down, across = blocks.shape[1], blocks.shape[2]
    y = np.arange(down) * size + (size - ny) / 2
    x = np.arange(across) * size + (size - nx) / 2
    for k in range(blocks.shape[0]):
        waves = np.exp(-2j * np.pi * step[k, 1] * x)
        before_y = 0j
        before_x = 0j
        total = 0j
        after_y = 0j
        after_x = 0j
        for i in range(down):
            turn = np.exp(-2j * np.pi * step[k, 0] * y[i])
            row_before = 0j
            row_after = 0j
            for j in range(across):
                value = blocks[k, i, j]
                row_before += value
                before_x += x[j] * value
                value = np.complex128(value) * waves[j] * turn
                turned_blocks[k, i, j] = value
                row_after += value
                after_x += x[j] * value
            before_y += y[i] * row_before
            after_y += y[i] * row_after
            total += row_after
        # what the places within the blocks add to the moments, and its own turn to first order
        within_y = moments[k, 1] - before_y
        within_x = moments[k, 2] - before_x
        turned_moments[k, 0] = total - 2j * np.pi * (step[k, 0] * within_y + step[k, 1] * within_x)
        turned_moments[k, 1] = after_y + within_y
        turned_moments[k, 2] = after_x + within_x


def block_size(footprint: Footprint) -> int:
    """Return the side of the blocks, in pixels, that a region of this footprint is summed in."""
    return 8 if min(footprint.shape) > _LARGE else 4
