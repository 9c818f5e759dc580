"""Q(x), the tail of the standard normal distribution, and its inverse."""

from __future__ import annotations

import math

from scipy.special import log_ndtr, ndtr, ndtri


def q_function(x: float) -> float:
    """Probability that a standard normal variable exceeds x: Q(x) = erfc(x/sqrt 2)/2.

    Relative error under 1e-12 down to the smallest normal double (x about 37.5).
    """
    return float(ndtr(-x))


def log_q_function(x: float) -> float:
    """Natural logarithm of Q(x), also where Q(x) itself is too small for a double."""
    return float(log_ndtr(-x))


def inverse_q(probability: float) -> float:
    """x with Q(x) = probability.

    Raises
    ------
    ValueError
        If the probability does not lie strictly between 0 and 1.
    """
    if not 0 < probability < 1:
        raise ValueError("a probability strictly between 0 and 1 is needed")
    x = -float(ndtri(probability))
    if x < 1:
        return x
    # One Newton step on the logarithm wins back the digits that the library's start loses in the tail.
    log_q = log_q_function(x)
    log_density = -0.5 * x * x - 0.5 * math.log(2 * math.pi)
    return x + (log_q - math.log(probability)) * math.exp(log_q - log_density)
