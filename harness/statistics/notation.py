"""How small numbers are written in sentences: 1e-6 and never 1e-06, the same on every floor above."""

from __future__ import annotations


def ratio(value: float, digits: int = 3) -> str:
    """Write a ratio such as a BER, its trailing zeros left out.

    Parameters
    ----------
    digits
        Significant ones, at most.

    Examples
    --------
    >>> ratio(1e-6), ratio(1.2345e-6), ratio(0.05), ratio(0.0)
    ('1e-6', '1.23e-6', '0.05', '0')
    """
    if value == 0:
        return "0"
    if value >= 0.01:
        return f"{value:.{digits}g}"
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return f"{mantissa}e{int(exponent)}"


def multiple(value: float) -> str:
    """Write how many times: ``0.52``, ``4``, ``1 080``; three digits that tell, large ones written out."""
    if not 1000 <= value < 1e6:
        return f"{value:.3g}"
    return f"{int(float(f'{value:.3g}')):,}".replace(",", "\u202f")
