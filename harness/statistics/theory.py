"""Textbook bit error ratios over Eb/N0, and back, without fading and over flat Rayleigh and Rician fading.

Sources: Proakis and Salehi, "Digital Communications", 5th edition, chapters 4 and 13; Cho and Yoon, "On the
general BER expression of one- and two-dimensional amplitude modulations", IEEE Transactions on
Communications 50 (2002); Simon and Alouini, see `fading`. "Exact" means exact for Gray labels, ideal carrier
and clock, one symbol at a time; the approximations are named as such.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable
from dataclasses import dataclass

from harness.statistics.fading import Fading, parse_fading, phase_step_tail, phase_tail, tone_error
from harness.statistics.notation import ratio

LOWEST_DB, HIGHEST_DB = -100.0, 400.0


@dataclass(frozen=True, slots=True)
class Modulation:
    """A modulation with its error ratio."""

    name: str
    title: str
    bits_a_symbol: int
    exact: bool
    formula: str  # in words and symbols, g = Eb/N0 as a ratio
    of: Callable[[Fading, float], float]  # BER of a mean Eb/N0 (ratio)


def modulations() -> tuple[Modulation, ...]:
    """List the modulations that are usual; `parse_modulation` knows every order of their families."""
    names = (
        "bpsk qpsk 8psk 16psk 32psk dbpsk dqpsk 8dpsk 16qam 32qam 64qam 128qam 256qam 1024qam "
        "2fsk 4fsk 8fsk 16fsk coherent-2fsk msk"
    )
    return tuple(parse_modulation(name) for name in names.split())


def parse_modulation(name: str) -> Modulation:
    """Find a modulation by name, without regard to case: ``bpsk``, ``8psk``, ``64-QAM``, ``4fsk`` ...

    Raises
    ------
    ValueError
        If there is none of that name; the nearest one is named.
    """
    wanted = name.strip().lower().replace("_", "-")
    fixed = _fixed()
    if wanted in fixed:
        return fixed[wanted]
    match = re.fullmatch(r"(\d{1,5})-?(psk|dpsk|qam|fsk)", wanted)
    if match:
        order, family = int(match[1]), match[2]
        bits = order.bit_length() - 1
        if order == 1 << bits and 1 <= bits <= _MOST_BITS[family]:
            return _of_family(family, order, bits)
        raise ValueError(
            f"there is no modulation {name!r}: the order of {family.upper()} is a power of two, "
            f"2 to {1 << _MOST_BITS[family]}"
        )
    known = [m.name for m in modulations()]
    near = difflib.get_close_matches(wanted, known, 1)
    hint = f"did you mean {near[0]}?" if near else f"known are {', '.join(known)}"
    raise ValueError(f"there is no modulation {name!r}: {hint}")


def ber(modulation: str, ebn0_db: float, fading: str | None = None) -> float:
    """Bit error ratio at an Eb/N0.

    Parameters
    ----------
    modulation
        A name that `parse_modulation` knows.
    ebn0_db
        Eb/N0 in dB; with fading its mean.
    fading
        None, ``rayleigh`` or ``rician:K`` with K in dB.

    Examples
    --------
    >>> f"{ber('bpsk', 9.6):.3g}"
    '9.74e-06'
    """
    if math.isnan(ebn0_db):
        raise ValueError("Eb/N0 is no number")
    level = 10 ** (min(max(ebn0_db, -300.0), HIGHEST_DB) / 10)
    return parse_modulation(modulation).of(parse_fading(fading), level)


def ebn0_db(modulation: str, ber: float, fading: str | None = None) -> float:
    """Eb/N0 in dB at which the bit error ratio is reached; see `ber`.

    Raises
    ------
    ValueError
        If no Eb/N0 from -100 to 400 dB gives this bit error ratio.
    """
    from scipy.optimize import brentq

    if not ber > 0:
        raise ValueError("the bit error ratio has to be over 0: no Eb/N0 gives none at all")
    kind, channel = parse_modulation(modulation), parse_fading(fading)
    target = math.log(ber)

    def excess(level_db: float) -> float:
        value = kind.of(channel, 10 ** (level_db / 10))
        # Under the smallest double the ratio is nought; any figure well below the target will do.
        return (math.log(value) if value > 0 else -1e4) - target

    if excess(LOWEST_DB) < 0 or excess(HIGHEST_DB) > 0:
        raise ValueError(
            f"no Eb/N0 gives {kind.name} a bit error ratio of {ratio(ber)}: it lies under one half"
        )
    return float(brentq(excess, LOWEST_DB, HIGHEST_DB, xtol=1e-12, rtol=1e-14, maxiter=300))


_MOST_BITS = {"psk": 8, "dpsk": 6, "qam": 14, "fsk": 12}


def _fixed() -> dict[str, Modulation]:
    bpsk = Modulation("bpsk", "BPSK, coherent", 1, True, "Q(sqrt(2 g))", lambda fading, g: fading.mean_q(g))
    half = Modulation(
        "coherent-2fsk",
        "binary FSK, orthogonal tones, coherent",
        1,
        True,
        "Q(sqrt(g))",
        lambda fading, g: fading.mean_q(g / 2),
    )

    def like_bpsk(name: str, title: str, bits: int) -> Modulation:
        return Modulation(name, title, bits, True, bpsk.formula, bpsk.of)

    qpsk = like_bpsk("qpsk", "QPSK, Gray labels, coherent", 2)
    return {
        "bpsk": bpsk,
        "qpsk": qpsk,
        "oqpsk": like_bpsk("oqpsk", "offset QPSK, coherent", 2),
        "msk": like_bpsk("msk", "MSK, detected coherently over two bits", 1),
        "coherent-2fsk": half,
        "dbpsk": _of_family("dpsk", 2, 1),
        "dqpsk": _of_family("dpsk", 4, 2),
        "2psk": bpsk,
        "4psk": qpsk,
        "4qam": like_bpsk("4qam", "QPSK, Gray labels, coherent", 2),
    }


def _of_family(family: str, order: int, bits: int) -> Modulation:
    if family == "fsk":
        return _fsk(order, bits)
    if family == "qam":
        return _square_qam(order, bits) if bits % 2 == 0 else _cross_qam(order, bits)
    weights = _label_distances(order)
    if family == "psk":
        return Modulation(
            f"{order}psk",
            f"{order}-PSK, Gray labels, coherent",
            bits,
            True,
            "phase beyond each decision line, weighted by the bits that differ there (Lee, 1986)",
            lambda fading, g: _weighted(phase_tail, weights, bits, fading, g),
        )
    if order == 2:
        return Modulation(
            "dbpsk",
            "DBPSK, differentially coherent",
            1,
            True,
            "exp(-g)/2",
            lambda fading, g: _half_mean_exp(fading, g),
        )
    return Modulation(
        "dqpsk" if order == 4 else f"{order}dpsk",
        f"{order}-DPSK, Gray labels, differentially coherent",
        bits,
        True,
        "phase step beyond each decision line, weighted by the bits that differ there",
        lambda fading, g: _weighted(phase_step_tail, weights, bits, fading, g),
    )


def _half_mean_exp(fading: Fading, x: float) -> float:
    import numpy as np

    return 0.5 * float(fading.mean_exp(np.array(x)))


def _label_distances(order: int) -> list[float]:
    """Mean number of bits that differ between Gray labels j steps apart, j = 0 ... order/2.

    Around the circle this mean, over all symbols sent, is what counts (Lassing and others, 2003).
    """
    labels = [i ^ (i >> 1) for i in range(order)]
    return [
        sum((labels[i] ^ labels[(i + j) % order]).bit_count() for i in range(order)) / order
        for j in range(order // 2 + 1)
    ]


def _weighted(
    tail: Callable[[Fading, float, float], float], weights: list[float], bits: int, fading: Fading, g: float
) -> float:
    """Bits in error: each decision line crossed, on both sides, adds what its label differs more."""
    order = 1 << bits
    total = 0.0
    for j in range(1, order // 2 + 1):
        more = weights[j] - weights[j - 1]
        if more:
            total += 2 * more * tail(fading, g * bits, (2 * j - 1) * math.pi / order)
    return total / bits


def _fsk(order: int, bits: int) -> Modulation:
    title = f"{order}-FSK, orthogonal tones, noncoherent"
    if order == 2:
        return Modulation(
            "2fsk", title, 1, True, "exp(-g/2)/2", lambda fading, g: _half_mean_exp(fading, g / 2)
        )
    share = order / 2 / (order - 1)  # of a symbol error, the part of its bits that are wrong
    return Modulation(
        f"{order}fsk",
        title,
        bits,
        True,
        "M/2(M-1) of the symbol errors of M equal tones",
        lambda fading, g: share * tone_error(fading, g * bits, order),
    )


def _square_qam(order: int, bits: int) -> Modulation:
    levels = math.isqrt(order)
    rows = bits // 2
    terms: dict[int, float] = {}  # odd distance -> weight of Q there
    for k in range(1, rows + 1):
        for i in range(levels - (levels >> k)):
            step = i * (1 << (k - 1))
            sign = -1 if (step // levels) % 2 else 1
            weight = (1 << (k - 1)) - math.floor(step / levels + 0.5)
            terms[2 * i + 1] = terms.get(2 * i + 1, 0.0) + 2 * sign * weight / (levels * rows)
    scale = 3 * bits / (2 * (order - 1))

    def of(fading: Fading, g: float) -> float:
        return sum(weight * fading.mean_q(odd * odd * scale * g) for odd, weight in terms.items() if weight)

    return Modulation(
        f"{order}qam",
        f"square {order}-QAM, Gray labels, coherent",
        bits,
        True,
        "Cho and Yoon (2002): a sum of Q at the odd multiples of half the spacing",
        of,
    )


def _cross_qam(order: int, bits: int) -> Modulation:
    """Cross constellations have no Gray labels: nearest neighbours, one bit for each."""
    if bits == 1:
        return Modulation(
            "2qam", "BPSK, coherent", 1, True, "Q(sqrt(2 g))", lambda fading, g: fading.mean_q(g)
        )
    if bits == 3:  # two rows of four
        energy, neighbours = 6.0, 2.5
    else:
        side = 3 << ((bits - 3) // 2)
        corner = side // 6
        pairs = 2 * ((side - 2 * corner) * (side - 1) + 2 * corner * (side - 2 * corner - 1))
        energy, neighbours = 31 * order / 48 - 2 / 3, 2 * pairs / order
    return Modulation(
        f"{order}qam",
        f"{'rectangular' if bits == 3 else 'cross'} {order}-QAM, coherent",
        bits,
        False,
        "approximation: mean number of nearest neighbours, each one bit off",
        lambda fading, g: min(0.5, neighbours / bits * fading.mean_q(bits * g / energy)),
    )
