"""Bit error ratios of the channel models, made from samples, against theory worked out here.

Formulas are those of the textbooks on digital communications; where a model has no closed form, the
probability is integrated here. Each ratio must lie within 99.99 % bounds around theory: chance alone
breaks one in 10 000, and seeds are fixed. Where errors are not independent (several bits in a symbol,
fading) the bounds come from the scatter over 200 blocks of the stream.
"""

from __future__ import annotations

import tracemalloc
from collections.abc import Callable
from math import cos, exp, log10, pi, sin, sqrt

import numpy as np
import pytest
from pydantic import TypeAdapter
from scipy import integrate, special, stats

from drivers.channel.fading import Gains
from drivers.channel.models import AnyChannel, Chain
from drivers.channel.stage import Line

ADAPTER: TypeAdapter[AnyChannel] = TypeAdapter(AnyChannel)
BLOCKS = 200
Theory = Callable[[float], float]  # BER of a mean Eb/N0, as a ratio


def wrong_bits(section: dict[str, object], bits: int, rate_bps: float | None = None) -> np.ndarray:
    """0/1 for each bit: whether the channel turned it over."""
    data = np.random.default_rng(99).integers(0, 256, bits // 8, dtype=np.uint8)
    chain = Chain([ADAPTER.validate_python({**section, "seed": 20})], Line("lsb", rate_bps))
    pieces = [chain.apply(data[at : at + 30_000].copy()) for at in range(0, len(data), 30_000)]
    out = np.concatenate([*pieces, chain.flush()])
    return np.unpackbits(out ^ data, bitorder="little")


def assert_independent(errors: np.ndarray, ber: float) -> None:
    count, bits = int(errors.sum()), len(errors)
    low, high = stats.beta.ppf([0.00005, 0.99995], [count, count + 1], [bits - count + 1, bits - count])
    assert count >= 100, "too few errors to say anything"
    assert low <= ber <= high, (count / bits, ber)


def assert_in_blocks(errors: np.ndarray, ber: float) -> None:
    each = len(errors) // BLOCKS
    ratios = errors[: each * BLOCKS].reshape(BLOCKS, each).mean(axis=1)
    reach = stats.t.ppf(0.99995, BLOCKS - 1) * ratios.std(ddof=1) / sqrt(BLOCKS)
    assert errors.sum() >= 100, "too few errors to say anything"
    assert abs(ratios.mean() - ber) <= reach, (ratios.mean(), ber, reach)


def q(x: float) -> float:
    return float(special.ndtr(-x))


def gray(n: int) -> int:
    return n ^ (n >> 1)


def wrong_in_gray(step: int, count: int) -> float:
    """Mean number of bits that differ between phases `step` apart, over all phases."""
    return sum((gray(n) ^ gray((n + step) % count)).bit_count() for n in range(count)) / count


def psk(count: int) -> Theory:
    k = count.bit_length() - 1

    def density(angle: float, es: float) -> float:
        across = sqrt(2 * es) * cos(angle)
        held = special.ndtr(across) * exp(-es * sin(angle) ** 2)
        return float(exp(-es) / (2 * pi) + across / sqrt(2 * pi) * held)

    def ber(ebn0: float) -> float:
        total = 0.0
        for step in range(1, count):
            middle = 2 * pi * step / count
            share = integrate.quad(
                density, middle - pi / count, middle + pi / count, args=(k * ebn0,), epsabs=1e-12
            )
            total += wrong_in_gray(step, count) * share[0]
        return total / k

    return ber


def dpsk(count: int) -> Theory:
    """From the distribution of the phase between two noisy vectors (Pawula, Rice and Roberts, 1982)."""
    k = count.bit_length() - 1

    def f(psi: float, es: float) -> float:
        def inner(t: float) -> float:
            across = 1 - cos(psi) * cos(t)
            return exp(-es * across) / across

        return -sin(psi) / (4 * pi) * integrate.quad(inner, -pi / 2, pi / 2, epsabs=1e-13)[0]

    def ber(ebn0: float) -> float:
        total = 0.0
        for step in range(1, count):
            middle = 2 * pi * step / count
            # Both ends lie in (0, 2 pi), where the distribution has no jump.
            share = f(middle + pi / count, k * ebn0) - f(middle - pi / count, k * ebn0)
            total += wrong_in_gray(step, count) * share
        return total / k

    return ber


def qam(count: int) -> Theory:
    side = int(sqrt(count))
    k = count.bit_length() - 1

    def ber(ebn0: float) -> float:
        half = sqrt(3 * k * ebn0 / (count - 1))  # half the distance of levels, in deviations of the noise
        total = 0.0
        for sent in range(side):
            for decided in range(side):
                low = -np.inf if decided == 0 else (2 * (decided - sent) - 1) * half
                high = np.inf if decided == side - 1 else (2 * (decided - sent) + 1) * half
                share = special.ndtr(high) - special.ndtr(low)
                total += (gray(sent) ^ gray(decided)).bit_count() * share / side
        return total / (k / 2)

    return ber


def fsk(count: int) -> Theory:
    k = count.bit_length() - 1

    def ber(ebn0: float) -> float:
        symbol = sum(
            (-1) ** (n + 1) * special.comb(count - 1, n) / (n + 1) * exp(-n / (n + 1) * k * ebn0)
            for n in range(1, count)
        )
        return float(symbol) * count / 2 / (count - 1)

    return ber


def bpsk(ebn0: float) -> float:
    return q(sqrt(2 * ebn0))


AWGN: dict[str, tuple[Theory, tuple[float, ...]]] = {
    "bpsk": (bpsk, (-2, 0, 3, 5, 7)),
    "qpsk": (bpsk, (-2, 0, 3, 5, 7)),
    "8psk": (psk(8), (-1, 2, 5, 7, 9)),
    "16psk": (psk(16), (1, 4, 7, 10, 13)),
    "16qam": (qam(16), (-1, 2, 5, 7, 10)),
    "64qam": (qam(64), (0, 4, 8, 11, 13)),
    "256qam": (qam(256), (2, 6, 10, 14, 17)),
    "dbpsk": (lambda g: exp(-g) / 2, (-1, 2, 4, 6, 8)),
    "dqpsk": (dpsk(4), (-1, 2, 4, 6, 9)),
    "8dpsk": (dpsk(8), (0, 3, 6, 9, 11)),
    "2fsk": (fsk(2), (0, 3, 6, 8, 11)),
    "4fsk": (fsk(4), (-1, 2, 4, 6, 8)),
    "8fsk": (fsk(8), (-1, 1, 3, 5, 6.5)),
    "16fsk": (fsk(16), (-2, 0, 2, 4, 5)),
}


@pytest.mark.parametrize("modulation", AWGN)
def test_white_noise_gives_the_textbook_ratio(modulation: str) -> None:
    theory, points = AWGN[modulation]
    for ebn0_db in points:
        ber = theory(10 ** (ebn0_db / 10))
        bits = int(min(max(600 / ber, 60_000), 1_200_000)) // 2400 * 2400
        errors = wrong_bits({"model": "awgn", "modulation": modulation, "ebn0_db": ebn0_db}, bits)
        if modulation in ("bpsk", "qpsk", "2fsk"):
            assert_independent(errors, ber)
        else:
            assert_in_blocks(errors, ber)


@pytest.mark.parametrize("ber", [0.3, 0.05, 1e-3, 1e-4, 2e-5])
def test_independent_errors_come_at_their_rate(ber: float) -> None:
    bits = int(max(1e5, 1000 / ber)) // 8 * 8
    assert_independent(wrong_bits({"model": "independent", "ber": ber}, bits), ber)


@pytest.mark.parametrize(
    ("burst_bits", "gap_bits", "inside", "outside"),
    [(5, 5e3, 0.5, 0), (50, 1e4, 0.5, 1e-4), (3, 30, 0.9, 0.01), (1.5, 100, 0.2, 0), (200, 300, 0.3, 0.1)],
)
def test_bursts_give_the_mean_of_their_two_states(
    burst_bits: float, gap_bits: float, inside: float, outside: float
) -> None:
    share = burst_bits / (burst_bits + gap_bits)
    section = {"model": "burst", "burst_bits": burst_bits, "gap_bits": gap_bits}
    errors = wrong_bits({**section, "ber_inside": inside, "ber_outside": outside}, 4_000_000)
    assert_in_blocks(errors, share * inside + (1 - share) * outside)
    # An error is followed by another with the share of the state that it was made in, or has changed to.
    stays = 1 - 1 / burst_bits, 1 - 1 / gap_bits
    after_bad = stays[0] * inside + (1 - stays[0]) * outside
    after_good = stays[1] * outside + (1 - stays[1]) * inside
    pairs = share * inside * after_bad + (1 - share) * outside * after_good
    assert_in_blocks(errors[:-1] & errors[1:], pairs)


def over_rayleigh(theory: Theory) -> Theory:
    return lambda mean: integrate.quad(lambda t: theory(mean * t) * exp(-t), 0, 60, limit=200)[0]


def over_rician(theory: Theory, k_factor: float) -> Theory:
    power = stats.ncx2(2, 2 * k_factor, scale=1 / (2 * (1 + k_factor)))
    return lambda mean: integrate.quad(lambda t: theory(mean * t) * power.pdf(t), 0, 12, limit=400)[0]


RAYLEIGH: dict[str, Theory] = {
    "bpsk": lambda g: (1 - sqrt(g / (1 + g))) / 2,
    "16qam": over_rayleigh(qam(16)),
    "2fsk": lambda g: 1 / (2 + g),
}


@pytest.mark.parametrize("modulation", RAYLEIGH)
def test_rayleigh_fading_gives_the_textbook_ratio(modulation: str) -> None:
    for ebn0_db in (0, 5, 10, 15, 20):
        ber = RAYLEIGH[modulation](10 ** (ebn0_db / 10))
        bits = int(max(1500 / ber, 60_000)) // 2400 * 2400
        errors = wrong_bits({"model": "rayleigh", "modulation": modulation, "ebn0_db": ebn0_db}, bits)
        assert_in_blocks(errors, ber)


@pytest.mark.parametrize("k_factor_db", [-3.0, 6.0])
def test_rician_fading_gives_the_textbook_ratio(k_factor_db: float) -> None:
    theory = over_rician(bpsk, 10 ** (k_factor_db / 10))
    for ebn0_db in (-2, 1, 4, 7, 10):
        ber = theory(10 ** (ebn0_db / 10))
        bits = int(max(1500 / ber, 60_000)) // 2400 * 2400
        section = {"model": "rician", "modulation": "bpsk", "ebn0_db": ebn0_db, "k_factor_db": k_factor_db}
        assert_in_blocks(wrong_bits(section, bits), ber)


def test_fading_with_a_doppler_frequency_keeps_the_mean_ratio() -> None:
    for ebn0_db in (0, 5, 10, 15, 20):
        g = 10 ** (ebn0_db / 10)
        section = {"model": "rayleigh", "modulation": "bpsk", "ebn0_db": ebn0_db, "doppler_hz": 400}
        errors = wrong_bits(section, 800_000, rate_bps=9600)
        assert_in_blocks(errors, RAYLEIGH["bpsk"](g))


def test_differential_detection_pays_for_the_doppler_frequency_what_theory_says() -> None:
    # DBPSK over Rayleigh fading whose gain has moved to a correlation of J0(2 pi f T) by the next symbol:
    # (1 + g (1 - rho)) / 2 (1 + g); the floor at high g shows the Doppler frequency itself.
    for ebn0_db, doppler_hz in ((5, 100), (15, 300), (30, 300), (40, 600), (60, 1200)):
        g, rho = 10 ** (ebn0_db / 10), special.j0(2 * pi * doppler_hz / 9600)
        section = {"model": "rayleigh", "modulation": "dbpsk", "ebn0_db": ebn0_db, "doppler_hz": doppler_hz}
        errors = wrong_bits(section, 800_000, rate_bps=9600)
        assert_in_blocks(errors, (1 + g * (1 - rho)) / (2 * (1 + g)))


def test_a_faded_amplitude_is_rayleigh_and_its_phase_uniform() -> None:
    gains = Gains(0.0, 0.1, np.random.default_rng(8)).take(1_200_000)[::200]  # 20 Doppler periods apart
    amplitude = stats.kstest(np.abs(gains), stats.rayleigh(scale=sqrt(0.5)).cdf)
    phase = stats.kstest(np.angle(gains), stats.uniform(-pi, 2 * pi).cdf)
    assert min(amplitude.pvalue, phase.pvalue) > 1e-4


@pytest.mark.parametrize("doppler", [0.37, 0.05, 0.004])
def test_the_gain_forgets_as_clarke_says(doppler: float) -> None:
    count = 200_000 if doppler > 0.1 else 800_000
    gains = Gains(0.0, doppler, np.random.default_rng(9)).take(count)
    periods = count * doppler
    for lag in sorted({max(1, round(part / doppler)) for part in (0.1, 0.3, 0.6, 1.0, 1.5)}):
        seen = np.mean(gains[:-lag] * gains[lag:].conj())
        # Tapered at 16 periods; the estimate scatters with about one over the root of the periods seen.
        expected = special.j0(2 * pi * doppler * lag) * (0.5 + 0.5 * cos(pi * doppler * lag / 16))
        assert abs(seen - expected) < 6 / sqrt(periods)
    assert abs(np.mean(np.abs(gains) ** 2) - 1) < 6 / sqrt(periods)


def test_a_long_run_through_fading_needs_no_more_memory() -> None:
    gains = Gains(0.0, 0.2, np.random.default_rng(11))
    gains.take(20_000)
    tracemalloc.start()
    try:
        gains.take(20_000)
        before = tracemalloc.get_traced_memory()[0]
        for _ in range(10):
            gains.take(20_000)
        grown = tracemalloc.get_traced_memory()[0] - before
    finally:
        tracemalloc.stop()
    assert grown < 1_000_000  # kept, ten stretches of 128 000 grid points would be 20 MB


def test_a_path_that_stands_out_has_its_share_of_the_power() -> None:
    for k_factor_db in (-10, 0, 10):
        k = 10 ** (k_factor_db / 10)
        gains = Gains(k, None, np.random.default_rng(10)).take(200_000)
        direct = abs(gains.mean()) ** 2
        scattered = np.mean(np.abs(gains - gains.mean()) ** 2)
        assert abs(10 * log10(direct / scattered) - k_factor_db) < 0.2
        assert abs(direct + scattered - 1) < 0.02
