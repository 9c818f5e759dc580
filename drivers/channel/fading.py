"""Flat fading: a gain that wanders as the sum of many paths does, with or without one that stands out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from drivers.channel.modulation import Samples, complex_noise

_GRID = 32  # samples of the wandering gain in one period of the Doppler frequency
_PERIODS = 16  # Doppler periods after which the gain has forgotten where it was
_BLOCK = 4096  # gains made at once


def _bessel_j0(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Bessel function of order zero as the mean of cos(x sin t) over a circle: exact to rounding."""
    angles = (np.arange(512) + 0.5) * (np.pi / 512)
    return np.asarray(np.cos(np.multiply.outer(x, np.sin(angles))).mean(axis=-1))


def _shaping() -> NDArray[np.float64]:
    """Make white noise wander with the autocorrelation of Clarke (1968), tapered to a finite length."""
    reach = _GRID * _PERIODS
    lags = np.arange(-reach, reach)
    taper = 0.5 + 0.5 * np.cos(np.pi * lags / reach)
    correlation = _bessel_j0(2 * np.pi * np.abs(lags) / _GRID) * taper
    density = np.fft.fft(np.fft.ifftshift(correlation)).real.clip(min=0)
    response = np.fft.fftshift(np.fft.ifft(np.sqrt(density)).real)
    return np.asarray(response / np.sqrt(np.sum(response**2)))


class _Wandering:
    """A complex Gaussian process of unit power with a Doppler frequency, at evenly spaced instants.

    White noise is shaped on a fine grid, and read between its points by a cubic through four neighbours.

    Parameters
    ----------
    doppler
        Doppler frequency times the spacing of the instants.
    rng
        Its own generator.
    """

    def __init__(self, doppler: float, rng: np.random.Generator) -> None:
        self._step = doppler * _GRID
        self._rng = rng
        response = _shaping()
        self._overlap = len(response) - 1
        self._size = 1 << (_BLOCK + self._overlap - 1).bit_length()
        self._spectrum = np.fft.fft(response, self._size)
        self._noise = complex_noise(self._overlap, 0.5**0.5, rng)
        self._grid: Samples = np.empty(0, dtype=np.complex128)
        self._first = 0  # grid point that `_grid` begins with
        self._instants = 0

    def take(self, count: int) -> Samples:
        """Give the next `count` values."""
        at = np.arange(self._instants, self._instants + count) * self._step
        self._instants += count
        points = at.astype(np.int64)
        past = int(points[0]) - self._first if count else 0
        self._grid, self._first = self._grid[past:], self._first + past
        blocks = [self._grid]
        have = len(self._grid)
        while count and have < int(points[-1]) - self._first + 4:
            blocks.append(self._shaped())
            have += _BLOCK
        self._grid = np.concatenate(blocks)
        index = points - self._first
        part = at - points
        before, here, after, beyond = (self._grid[index + k] for k in range(4))
        # Catmull and Rom's cubic; the grid is so fine that its error is far below the noise of any link.
        slope, next_slope = (after - before) / 2, (beyond - here) / 2
        rise = after - here
        cubic: Samples = here + part * (
            slope + part * (3 * rise - 2 * slope - next_slope + part * (slope + next_slope - 2 * rise))
        )
        return cubic

    def _shaped(self) -> Samples:
        noise = np.concatenate([self._noise, complex_noise(_BLOCK, 0.5**0.5, self._rng)])
        self._noise = noise[-self._overlap :]
        shaped = np.fft.ifft(np.fft.fft(noise, self._size) * self._spectrum)
        return shaped[self._overlap : self._overlap + _BLOCK]


class Gains:
    """The channel's gain at each symbol, of unit mean power.

    Parameters
    ----------
    k_factor
        Power of the path that stands out over the power of all others (Rice); 0: none (Rayleigh).
    doppler
        Doppler frequency over symbol rate; None: every symbol has a gain of its own.
    rng
        Its own generator.
    """

    def __init__(self, k_factor: float, doppler: float | None, rng: np.random.Generator) -> None:
        self._direct = (k_factor / (1 + k_factor)) ** 0.5
        self._scattered = (1 / (1 + k_factor)) ** 0.5
        self._rng = rng
        self._wandering = None if doppler is None else _Wandering(doppler, rng)

    def take(self, count: int) -> Samples:
        """Give the gains of the next `count` symbols."""
        if self._wandering is None:
            scattered = complex_noise(count, 0.5**0.5, self._rng)
        else:
            scattered = self._wandering.take(count)
        gains: Samples = self._direct + self._scattered * scattered
        return gains
