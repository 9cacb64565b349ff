"""Demodulation: the untapered pixels multiplied by a plane wave and summed, in blocks and as a whole."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from fringespan.region import Footprint
from fringespan.spectrum import RegionPixels, trend_row

__all__ = ["Demodulation", "block_size", "demodulate"]

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


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def _demodulate(values, spans, trend, frequency, size, blocks, moments):  # type: ignore[no-untyped-def]
    ny, nx = values.shape
    count = frequency.shape[0]
    middle_y = (ny - 1) / 2
    middle_x = (nx - 1) / 2
    half = (size - 1) / 2
    scaled = ((np.arange(nx) + 0.5) * 2 / nx - 1).astype(np.float32)
    position = (np.arange(nx) - middle_x).astype(np.float32)
    wave_re = np.empty((count, nx), np.float32)
    wave_im = np.empty((count, nx), np.float32)
    weights = np.empty((count, 4, 8), np.float32)
    for k in range(count):
        for x in range(nx):
            angle = 2 * np.pi * frequency[k, 1] * (x - middle_x)
            wave_re[k, x] = np.cos(angle)
            wave_im[k, x] = -np.sin(angle)
        for r in range(size):
            angle = 2 * np.pi * frequency[k, 0] * (r - half)
            weights[k, 0, r] = np.cos(angle)
            weights[k, 1, r] = -np.sin(angle)
            weights[k, 2, r] = np.cos(angle) * (r - half)
            weights[k, 3, r] = -np.sin(angle) * (r - half)
    z = np.zeros((size, nx), np.float32)
    padded = size * blocks.shape[2]
    re = np.zeros(padded + 8, np.float32)
    im = np.zeros(padded + 8, np.float32)
    block_re = np.zeros(padded + 8, np.float32)
    block_im = np.zeros(padded + 8, np.float32)
    down_re = np.empty(nx, np.float32)
    down_im = np.empty(nx, np.float32)
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
        centre = y0 + half - middle_y
        for k in range(count):
            if size == 8:
                _eight_rows(z, weights[k, 0], weights[k, 1], wave_re[k], wave_im[k], re, im)
                _eight_rows(z, weights[k, 2], weights[k, 3], wave_re[k], wave_im[k], down_re, down_im)
            else:
                _four_rows(z, weights[k, 0], weights[k, 1], wave_re[k], wave_im[k], re, im)
                _four_rows(z, weights[k, 2], weights[k, 3], wave_re[k], wave_im[k], down_re, down_im)
            across_re = np.float32(0)
            across_im = np.float32(0)
            sum_re = np.float32(0)
            sum_im = np.float32(0)
            for x in range(nx):
                across_re += re[x] * position[x]
                across_im += im[x] * position[x]
                sum_re += down_re[x]
                sum_im += down_im[x]
            _sums_of_neighbours(re, size, block_re)
            _sums_of_neighbours(im, size, block_im)
            # what is common to the rows of the block: the phase of their middle
            angle = 2 * np.pi * frequency[k, 0] * centre
            turn = np.cos(angle) - 1j * np.sin(angle)
            total = 0j
            for j in range(blocks.shape[2]):
                value = (block_re[size * j] + 1j * block_im[size * j]) * turn
                blocks[k, block, j] = value
                total += value
            moments[k, 0] += total
            moments[k, 1] += centre * total + (sum_re + 1j * sum_im) * turn
            moments[k, 2] += (across_re + 1j * across_im) * turn
            re[nx:] = np.float32(0)
            im[nx:] = np.float32(0)


# In the two functions below all weights are scalars and all rows lie in one array: with more pointers the compiler would
# not use vectors.


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def _eight_rows(z, c, s, wave_re, wave_im, re, im):  # type: ignore[no-untyped-def]
    c0, c1, c2, c3, c4, c5, c6, c7 = c[0], c[1], c[2], c[3], c[4], c[5], c[6], c[7]
    s0, s1, s2, s3, s4, s5, s6, s7 = s[0], s[1], s[2], s[3], s[4], s[5], s[6], s[7]
    for x in range(z.shape[1]):
        a = z[0, x] * c0 + z[1, x] * c1 + z[2, x] * c2 + z[3, x] * c3
        a += z[4, x] * c4 + z[5, x] * c5 + z[6, x] * c6 + z[7, x] * c7
        b = z[0, x] * s0 + z[1, x] * s1 + z[2, x] * s2 + z[3, x] * s3
        b += z[4, x] * s4 + z[5, x] * s5 + z[6, x] * s6 + z[7, x] * s7
        re[x] = a * wave_re[x] - b * wave_im[x]
        im[x] = a * wave_im[x] + b * wave_re[x]


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def _four_rows(z, c, s, wave_re, wave_im, re, im):  # type: ignore[no-untyped-def]
    c0, c1, c2, c3 = c[0], c[1], c[2], c[3]
    s0, s1, s2, s3 = s[0], s[1], s[2], s[3]
    for x in range(z.shape[1]):
        a = z[0, x] * c0 + z[1, x] * c1 + z[2, x] * c2 + z[3, x] * c3
        b = z[0, x] * s0 + z[1, x] * s1 + z[2, x] * s2 + z[3, x] * s3
        re[x] = a * wave_re[x] - b * wave_im[x]
        im[x] = a * wave_im[x] + b * wave_re[x]


@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz", "arcp"})
def _shifted_sum(line, shift, out):  # type: ignore[no-untyped-def]
    shifted = line[shift:]
    for x in range(out.size - 8):
        out[x] = line[x] + shifted[x]


@numba.njit(cache=True, nogil=True)
def _sums_of_neighbours(line, size, out):  # type: ignore[no-untyped-def]
    """Write into `out`, at every multiple of `size` (4 or 8), the sum of `size` values of `line`, which becomes scratch."""
    # whole passes over distinct arrays run in vectors, short sums do not
    if size == 8:
        _shifted_sum(line, 4, out)
        _shifted_sum(out, 2, line)
        _shifted_sum(line, 1, out)
    else:
        _shifted_sum(line, 2, out)
        _shifted_sum(out, 1, line)
        out[:] = line


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
    _demodulate(pixels.values, pixels.footprint.spans, pixels.trend, frequency, size, blocks, moments)
    return Demodulation(frequency, blocks, size, moments)


def block_size(footprint: Footprint) -> int:
    """Return the side of the blocks, in pixels, that a region of this footprint is summed in."""
    return 8 if min(footprint.shape) > _LARGE else 4
