"""Polynomials over GF(2) as Python ints (bit i is the coefficient of x^i): products, powers of x, orders."""

from __future__ import annotations

import math


def multiply(a: int, b: int) -> int:
    """Product of two polynomials."""
    product = 0
    while b:
        if b & 1:
            product ^= a
        a <<= 1
        b >>= 1
    return product


def remainder(a: int, modulus: int) -> int:
    """What is left of `a` after division by `modulus`."""
    degree = modulus.bit_length()
    while (excess := a.bit_length() - degree) >= 0:
        a ^= modulus << excess
    return a


def quotient(a: int, divisor: int) -> int:
    """How often `divisor` goes into `a`, without the remainder."""
    degree = divisor.bit_length()
    result = 0
    while (excess := a.bit_length() - degree) >= 0:
        a ^= divisor << excess
        result |= 1 << excess
    return result


def common_divisor(a: int, b: int) -> int:
    """Greatest common divisor by Euclid's algorithm."""
    while b:
        a, b = b, remainder(a, b)
    return a


def power(base: int, exponent: int, modulus: int) -> int:
    """``base ** exponent`` modulo `modulus`, for any exponent that is not negative."""
    result = remainder(1, modulus)
    base = remainder(base, modulus)
    while exponent:
        if exponent & 1:
            result = remainder(multiply(result, base), modulus)
        base = remainder(multiply(base, base), modulus)
        exponent >>= 1
    return result


def order_of_x(modulus: int) -> int:
    """The least k > 0 with x^k = 1 modulo `modulus`, whose constant term must be 1.

    The order divides the least common multiple of 2^d - 1 over the degrees d of the irreducible factors,
    times a power of two at least as large as the highest multiplicity; that multiple is then divided by its
    primes for as long as x to the remaining power is still 1.
    """
    if not modulus & 1:
        raise ValueError("x divides the polynomial, so no power of x is 1")
    if modulus == 1:
        return 1
    bound = 1
    for degree in _factor_degrees(modulus):
        bound = math.lcm(bound, 2**degree - 1)
    while power(2, bound, modulus) != remainder(1, modulus):
        bound *= 2
    order = bound
    for prime in prime_factors(bound):
        while order % prime == 0 and power(2, order // prime, modulus) == remainder(1, modulus):
            order //= prime
    return order


def _factor_degrees(polynomial: int) -> set[int]:
    """Degrees of the irreducible factors: x^(2^d) - x is the product of all whose degree divides d."""
    degrees = set()
    rest = polynomial
    degree = 0
    frobenius = 2  # x^(2^degree) modulo the whole polynomial
    while rest.bit_length() > 1:
        degree += 1
        frobenius = remainder(multiply(frobenius, frobenius), polynomial)
        while (shared := common_divisor(rest, remainder(frobenius, rest) ^ remainder(2, rest))) != 1:
            degrees.add(degree)
            rest = quotient(rest, shared)
            if rest.bit_length() <= 1:
                break
    return degrees


def prime_factors(number: int) -> list[int]:
    """Distinct primes, ascending, by trial division: quick where the second largest one is small."""
    primes = []
    divisor = 2
    while divisor * divisor <= number:
        if number % divisor == 0:
            primes.append(divisor)
            while number % divisor == 0:
                number //= divisor
        divisor += 1 if divisor == 2 else 2
    if number > 1:
        primes.append(number)
    return primes
