"""Modulations as samples: bits become points or tones, noise is added, and the receiver decides.

One complex sample a symbol stands for the output of the matched filter, or of each tone's filter.
A symbol has unit energy. Labels are the symbol's bits as a number, the first bit highest; neighbours
in a constellation differ in one bit (Gray mapping).
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Labels = NDArray[np.int64]
Samples = NDArray[np.complex128]


def _gray(count: int) -> Labels:
    index = np.arange(count)
    return index ^ (index >> 1)


def _nearest_phase(samples: Samples, count: int) -> Labels:
    turns = np.angle(samples) * (count / (2 * np.pi))
    nearest: Labels = np.rint(turns).astype(np.int64) % count
    return nearest


def complex_noise(shape: int | tuple[int, ...], sigma: float, rng: np.random.Generator) -> Samples:
    """White noise with deviation `sigma` in each of its two dimensions; drawn in the order of the symbols."""
    sizes = (shape,) if isinstance(shape, int) else shape
    drawn = rng.standard_normal((*sizes, 2))
    drawn *= sigma
    return drawn.view(np.complex128)[..., 0]


class Modulation(ABC):
    """A sender and its receiver.

    Parameters
    ----------
    bits
        In a symbol.
    """

    def __init__(self, bits: int) -> None:
        self.bits = bits

    @abstractmethod
    def over(self, labels: Labels, gains: Samples | None, sigma: float, rng: np.random.Generator) -> Labels:
        """Send symbols, receive them, decide.

        Parameters
        ----------
        labels
            Shape (n,).
        gains
            The channel's complex gain at each symbol, shape (n,), which a coherent receiver knows; None: one.
        sigma
            Deviation of the noise in each dimension of a sample.
        rng
            The noise.
        """


class Coherent(Modulation):
    """Points in a plane; the receiver knows the channel's gain and takes the nearest point."""

    def __init__(self, points: Samples, decide: Callable[[Samples], Labels]) -> None:
        super().__init__(len(points).bit_length() - 1)
        self._points = points
        self._decide = decide

    def over(self, labels: Labels, gains: Samples | None, sigma: float, rng: np.random.Generator) -> Labels:
        """Send, receive, decide."""
        sent = self._points[labels]
        noise = complex_noise(len(labels), sigma, rng)
        return self._decide(sent + noise if gains is None else sent + noise / gains)


class Antipodal(Modulation):
    """One bit as the sign of a sample."""

    def __init__(self) -> None:
        super().__init__(1)

    def over(self, labels: Labels, gains: Samples | None, sigma: float, rng: np.random.Generator) -> Labels:
        """Send, receive, decide."""
        sent = 1.0 - 2.0 * labels
        if gains is None:  # the other dimension carries nothing
            return np.signbit(sent + sigma * rng.standard_normal(len(labels))).astype(np.int64)
        received: Samples = gains * sent + complex_noise(len(labels), sigma, rng)
        return np.signbit((received * gains.conj()).real).astype(np.int64)


class Differential(Modulation):
    """Bits as a change of phase between neighbours; the receiver knows no phase.

    Parameters
    ----------
    count
        Phases, a power of two.
    """

    def __init__(self, count: int) -> None:
        super().__init__(count.bit_length() - 1)
        self._count = count
        self._labels = _gray(count)  # of a change by 0, 1, 2 ... steps
        self._steps = np.argsort(self._labels)
        self._points = np.exp(2j * np.pi * np.arange(count) / count)
        self._phase = 0  # in which the last symbol was sent
        self._last: complex | None = None  # the last sample received

    def over(self, labels: Labels, gains: Samples | None, sigma: float, rng: np.random.Generator) -> Labels:
        """Send, receive, compare with the sample before."""
        if not len(labels):
            return labels
        phases = (self._phase + np.cumsum(self._steps[labels])) % self._count
        gain = np.ones(len(labels), dtype=np.complex128) if gains is None else gains
        if self._last is None:  # a reference symbol begins the transmission
            self._last = complex(gain[0] + complex_noise(1, sigma, rng)[0])
        received = gain * self._points[phases] + complex_noise(len(labels), sigma, rng)
        before = np.concatenate([[self._last], received[:-1]])
        self._phase, self._last = int(phases[-1]), complex(received[-1])
        turned: Samples = received * before.conj()
        return self._labels[_nearest_phase(turned, self._count)]


class Tones(Modulation):
    """Orthogonal tones; the receiver takes the strongest and knows no phase.

    Parameters
    ----------
    count
        Tones, a power of two.
    """

    def __init__(self, count: int) -> None:
        super().__init__(count.bit_length() - 1)
        self._count = count

    def over(self, labels: Labels, gains: Samples | None, sigma: float, rng: np.random.Generator) -> Labels:
        """Send, receive, decide; the carrier's phase is uniform and anew for each symbol."""
        drawn = rng.standard_normal((len(labels), 2 * self._count + 2))
        outputs = sigma * drawn[:, : 2 * self._count].reshape(len(labels), self._count, 2)
        received: Samples = outputs[..., 0] + 1j * outputs[..., 1]
        # The direction of a pair of independent Gaussians is uniform.
        direction = drawn[:, -2] + 1j * drawn[:, -1]
        carrier = direction / np.abs(direction)
        arriving = carrier if gains is None else carrier * gains
        received[np.arange(len(labels)), labels] += arriving
        strongest: Labels = np.argmax(received.real**2 + received.imag**2, axis=1)
        return strongest


def phases(count: int) -> Modulation:
    """Phase-shift keying with `count` phases."""
    labels = _gray(count)
    points = np.empty(count, dtype=np.complex128)
    points[labels] = np.exp(2j * np.pi * np.arange(count) / count)

    def decide(received: Samples) -> Labels:
        return labels[_nearest_phase(received, count)]

    return Coherent(points, decide)


def grid(count: int) -> Modulation:
    """Quadrature amplitude modulation on a square of `count` points, each axis Gray mapped."""
    side = int(count**0.5)
    axis_bits = side.bit_length() - 1
    scale = (2 * (count - 1) / 3) ** 0.5  # makes the mean energy one
    axis_labels = _gray(side)
    levels = np.empty(side)
    levels[axis_labels] = (2 * np.arange(side) - (side - 1)) / scale
    all_labels = np.arange(count)
    points = levels[all_labels >> axis_bits] + 1j * levels[all_labels & (side - 1)]

    def axis(values: NDArray[np.float64]) -> Labels:
        nearest = np.rint((values * scale + (side - 1)) / 2)
        chosen: Labels = axis_labels[np.clip(nearest, 0, side - 1).astype(np.int64)]
        return chosen

    def decide(received: Samples) -> Labels:
        decided: Labels = (axis(received.real) << axis_bits) | axis(received.imag)
        return decided

    return Coherent(points, decide)


def modulations() -> dict[str, Callable[[], Modulation]]:
    """Every modulation there is, by name."""
    return {
        "bpsk": Antipodal,
        "qpsk": lambda: grid(4),
        "8psk": lambda: phases(8),
        "16psk": lambda: phases(16),
        "16qam": lambda: grid(16),
        "64qam": lambda: grid(64),
        "256qam": lambda: grid(256),
        "dbpsk": lambda: Differential(2),
        "dqpsk": lambda: Differential(4),
        "8dpsk": lambda: Differential(8),
        "2fsk": lambda: Tones(2),
        "4fsk": lambda: Tones(4),
        "8fsk": lambda: Tones(8),
        "16fsk": lambda: Tones(16),
    }
