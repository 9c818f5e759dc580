"""Flat fading in closed form: how the mean of exp(-c g) over the received Eb/N0 g falls with c.

Every error ratio in `theory` is an integral over such means (the moment generating function method of
Simon and Alouini, "Digital Communication over Fading Channels", 2nd edition, 2005, chapters 2, 5 and 8).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.polynomial.legendre import leggauss
from numpy.typing import NDArray
from scipy.special import ive, ndtr

Array = NDArray[np.float64]
_POINTS, _WEIGHTS = leggauss(24)  # of one panel, on -1 to 1
_FARTHEST_ENVELOPE = 40.0  # exp(-r^2/2) is no longer a double beyond it


@dataclass(frozen=True, slots=True)
class Fading:
    """A flat channel, constant over a symbol: none, Rayleigh, or Rician with a direct path.

    `k` is the Rician ratio of the direct path's power to the scattered power (linear; Rayleigh: 0).
    """

    kind: Literal["none", "rayleigh", "rician"] = "none"
    k: float = 0.0

    def mean_exp(self, x: Array) -> Array:
        """Mean of exp(-c g), where x = c times the mean of g; any shape, x >= 0."""
        if self.kind == "none":
            return np.exp(-x)
        if self.kind == "rayleigh":
            return 1 / (1 + x)
        weight = (1 + self.k) / (1 + self.k + x)
        return weight * np.exp(-self.k * x / (1 + self.k + x))

    def mean_q(self, x: float) -> float:
        """Mean of Q(sqrt(2 c g)), where x = c times the mean of g."""
        if self.kind == "none":
            return float(ndtr(-math.sqrt(2 * x)))
        if self.kind == "rayleigh":
            # (1 - sqrt(x/(1+x)))/2 without the cancellation at high x.
            return 0.5 / ((1 + x) * (1 + math.sqrt(x / (1 + x))))
        return 2 * phase_tail(self, x, math.pi / 2)


def parse_fading(text: str | None) -> Fading:
    """Read ``None`` or ``none``, ``rayleigh``, or ``rician:K`` with K in dB.

    Raises
    ------
    ValueError
        If it is none of these.
    """
    if text is None or text.strip().lower() in ("none", ""):
        return Fading()
    name, _, ratio = text.strip().lower().partition(":")
    if name == "rayleigh" and not ratio:
        return Fading("rayleigh")
    if name == "rician":
        try:
            k_db = float(ratio)
        except ValueError:
            k_db = math.nan
        if math.isfinite(k_db) and abs(k_db) <= 100:
            return Fading("rician", 10 ** (k_db / 10))
        raise ValueError("rician fading needs its K factor in dB: write rician:6")
    raise ValueError(f"there is no fading {text!r}: none, rayleigh, or rician:K with K in dB")


def phase_tail(fading: Fading, x: float, angle: float) -> float:
    """Probability that a coherent receiver's phase error lies between `angle` and pi (one side only).

    Integral from 0 to pi - angle of mean_exp(x sin^2(angle) / sin^2(t)) dt / 2 pi (Craig, "A new, simple and
    exact result for calculating the probability of error for two-dimensional signal constellations", 1991).

    Parameters
    ----------
    fading
        What the level does.
    x
        Mean Es/N0 of the symbol (ratio).
    angle
        rad, within 0 to pi.
    """
    reach = x * math.sin(angle) ** 2

    def integrand(t: Array) -> Array:
        return fading.mean_exp(reach / np.sin(t) ** 2)

    if angle >= math.pi / 2:
        return _integrate(integrand, 0.0, math.pi - angle) / (2 * math.pi)
    # sin is the same on both sides of pi/2.
    both = _integrate(integrand, 0.0, math.pi / 2) + _integrate(integrand, angle, math.pi / 2)
    return both / (2 * math.pi)


def phase_step_tail(fading: Fading, x: float, angle: float) -> float:
    """Probability that the phase step between two received symbols is off by `angle` to pi (one side only).

    sin(angle)/4 pi times the integral from -pi/2 to pi/2 of mean_exp(x c)/c dt, c = 1 - cos(angle) cos(t)
    (Pawula, Rice and Roberts, "Distribution of the phase angle between two vectors perturbed by Gaussian
    noise", IEEE Transactions on Communications 30, 1982). Fading holds still over both symbols.
    """
    cosine = math.cos(angle)

    def integrand(t: Array) -> Array:
        c = 1 - cosine * np.cos(t)
        return fading.mean_exp(x * c) / c

    return math.sin(angle) / (2 * math.pi) * _integrate(integrand, 0.0, math.pi / 2)


def tone_error(fading: Fading, x: float, tones: int) -> float:
    """Probability that one of the other `tones` - 1 orthogonal tones gives more energy than the one sent.

    Noncoherent detection; the envelope r of the tone sent is Rician, the others' are Rayleigh:
    the mean of 1 - (1 - exp(-r^2/2))^(tones - 1). All terms are positive, so that no digits are lost where
    the textbook's alternating sum loses them.

    Parameters
    ----------
    fading
        What the level does.
    x
        Mean Es/N0 of the symbol (ratio).
    tones
        2 or more.
    """
    if fading.kind == "rayleigh":
        # The same mean in closed form: 1 - product of j/(j + s), s = 1/(1 + x).
        j = np.arange(1, tones, dtype=np.float64)
        return -math.expm1(-float(np.sum(np.log1p(1 / ((1 + x) * j)))))
    scattered = 0.0 if fading.kind == "none" else x / (1 + fading.k)
    direct = x - scattered
    mean, variance = math.sqrt(2 * direct), 1 + scattered
    deviation = math.sqrt(variance)
    edges = np.linspace(0, min(mean + 12 * deviation, _FARTHEST_ENVELOPE), 161)
    r, weights = _nodes(edges)
    density = r / variance * np.exp(-((r - mean) ** 2) / (2 * variance)) * ive(0, mean * r / variance)
    with np.errstate(divide="ignore"):  # log1p(-1) = -inf at r = 0 is right: the others always win there
        lost = -np.expm1((tones - 1) * np.log1p(-np.exp(-r * r / 2)))
    return float(np.sum(weights * density * lost))


def _nodes(edges: Array) -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights on every panel between neighbouring edges."""
    half = np.diff(edges)[:, None] / 2
    nodes = edges[:-1, None] + half * (1 + _POINTS)
    return nodes.ravel(), (half * _WEIGHTS).ravel()


def _integrate(integrand: Callable[[Array], Array], low: float, high: float) -> float:
    """Integrate over angles within 0 to pi/2, where the integrand may change fastest near either end."""
    shrinking = math.pi / 4 * 2.0 ** -np.arange(44)
    upper = np.linspace(math.pi / 4, math.pi / 2, 7)
    edges = np.unique(np.concatenate(([0.0], shrinking, upper)))
    edges = np.concatenate(([low], edges[(edges > low) & (edges < high)], [high]))
    nodes, weights = _nodes(edges)
    return float(np.sum(weights * integrand(nodes)))
