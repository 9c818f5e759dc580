"""The least number of bits for a test, to the single bit: the binomial tail in 80-digit decimal arithmetic.

At a ratio of 1e-17 a test takes 3e17 bits, more than a double counts one by one, so the last steps are taken
in decimal numbers. Ratio and confidence are read as they are written: 0.95 is 95/100.
"""

from __future__ import annotations

import math
from decimal import Decimal, localcontext
from fractions import Fraction
from functools import lru_cache

_DIGITS = 80
_TIE = Decimal(10) ** -60  # two logarithms nearer than this are the same number written in two ways
_SERIES_FROM = 60  # Stirling's series with 30 terms leaves under 1e-70 there


def as_written(number: float) -> Decimal:
    """The decimal number that a float shows as: 0.95 is 0.95, not 0.9499999999999999556."""
    return Decimal(repr(float(number)))


def risk_of(confidence: float) -> float:
    """``1 - confidence`` as it is written: 0.05 for 0.95, without the float subtraction's last digits."""
    return float(1 - as_written(confidence))


@lru_cache(maxsize=1)
def _stirling_factors() -> tuple[Fraction, ...]:
    """``B(2j) / (2j (2j - 1))`` for j = 1 to 30, with Bernoulli's numbers."""
    numbers = [Fraction(1)]
    for m in range(1, 61):
        numbers.append(-sum((math.comb(m + 1, j) * numbers[j] for j in range(m)), Fraction(0)) / (m + 1))
    return tuple(numbers[2 * j] / (2 * j * (2 * j - 1)) for j in range(1, 31))


def _log_factorial(n: int) -> Decimal:
    """``ln n!`` in the current decimal context."""
    if n < _SERIES_FROM:
        return Decimal(math.factorial(n)).ln()
    x = Decimal(n)
    two_pi = 2 * _pi()
    result = (x + Decimal("0.5")) * x.ln() - x + two_pi.ln() / 2
    inverse, square = 1 / x, 1 / (x * x)
    for factor in _stirling_factors():
        result += Decimal(factor.numerator) / Decimal(factor.denominator) * inverse
        inverse *= square
    return result


def _pi() -> Decimal:
    """Pi in the current decimal context, by Machin's formula."""

    def arctan_of_inverse(n: int) -> Decimal:
        power = total = 1 / Decimal(n)
        square, j, sign = Decimal(n * n), 1, -1
        while abs(power) > Decimal(10) ** -(_DIGITS + 5):
            power /= square
            j += 2
            total += sign * power / j
            sign = -sign
        return total

    return 4 * (4 * arctan_of_inverse(5) - arctan_of_inverse(239))


def _log_tail(errors: int, bits: int, ber: Decimal) -> tuple[Decimal, Decimal]:
    """``ln P(X <= errors)`` and the share of it that ``X = errors`` has, in the current context."""
    rest = bits - errors
    log_chosen = _log_factorial(bits) - _log_factorial(errors) - _log_factorial(rest)
    top = log_chosen + errors * ber.ln() + rest * (1 - ber).ln()
    odds = (1 - ber) / ber
    term = total = Decimal(1)
    for k in range(errors, 0, -1):
        term = term * k * odds / (bits - k + 1)
        total += term
        if term < total * _TIE * _TIE:
            break
    return top + total.ln(), 1 / total


def least_bits(ber: float, risk: Decimal, errors: int, guess: int) -> int:
    """The least n with ``P(X <= errors | n bits, ber) <= risk``, exactly.

    Parameters
    ----------
    ber
        Over 0 and under 1.
    risk
        Over 0 and under 1.
    errors
        Whole and not negative.
    guess
        Where to begin: the nearer, the fewer steps.
    """
    with localcontext() as context:
        context.prec = _DIGITS
        p, target = as_written(ber), risk.ln()
        n = max(guess, errors + 1)
        for _ in range(200):
            tail, share = _log_tail(errors, n, p)
            # One more bit takes p * P(X = errors) off the tail.
            slope = (1 - p * share).ln()
            step = (target - tail) / slope
            if abs(step) <= 2 or n + step < errors + 1:
                break
            n = max(errors + 1, n + int(step.to_integral_value()))
        while _log_tail(errors, n, p)[0] > target + _TIE:
            n += 1
        while n > errors + 1 and _log_tail(errors, n - 1, p)[0] <= target + _TIE:
            n -= 1
        return n
