"""Theory against published tables and closed forms."""

import math

import pytest

from harness.statistics.gaussian import inverse_q, q_function
from harness.statistics.theory import ber, ebn0_db


@pytest.mark.parametrize(
    ("x", "tail"),
    [
        (1, 0.15865525),
        (2, 0.02275013),
        (3, 0.00134990),
        (4, 3.1671e-5),
        (5, 2.8665e-7),
        (6, 9.8659e-10),
    ],
)
def test_q_of_abramowitz_and_stegun(x, tail):
    """Abramowitz and Stegun, Handbook of Mathematical Functions (1964), table 26.1."""
    digits = 8 if x <= 3 else None
    if digits:
        assert round(q_function(x), digits) == tail
    else:
        assert float(f"{q_function(x):.4e}") == tail
    assert inverse_q(q_function(x)) == pytest.approx(x, rel=1e-14)


@pytest.mark.parametrize(("probability", "x"), [(0.05, 1.64485), (0.025, 1.95996), (0.005, 2.57583)])
def test_percentage_points(probability, x):
    """Abramowitz and Stegun, table 26.5 (from memory)."""
    assert inverse_q(probability) == pytest.approx(x, abs=5e-6)


@pytest.mark.parametrize("level_db", [-5.0, 0.0, 4.0, 9.6, 12.0])
def test_closed_forms_without_fading(level_db):
    """Proakis and Salehi, Digital Communications, 5th edition, chapter 4."""
    g = 10 ** (level_db / 10)
    assert ber("bpsk", level_db) == pytest.approx(math.erfc(math.sqrt(g)) / 2, rel=1e-12)
    assert ber("qpsk", level_db) == pytest.approx(math.erfc(math.sqrt(g)) / 2, rel=1e-12)
    assert ber("dbpsk", level_db) == pytest.approx(math.exp(-g) / 2, rel=1e-12)
    assert ber("2fsk", level_db) == pytest.approx(math.exp(-g / 2) / 2, rel=1e-12)
    assert ber("coherent-2fsk", level_db) == pytest.approx(math.erfc(math.sqrt(g / 2)) / 2, rel=1e-12)


@pytest.mark.parametrize("level_db", [-5.0, 0.0, 10.0, 25.0, 60.0])
def test_closed_forms_over_rayleigh_fading(level_db):
    """Proakis and Salehi, Digital Communications, 5th edition, section 13.3-1."""
    g = 10 ** (level_db / 10)
    # 1 - sqrt(g/(1+g)) written so that it keeps its digits at 60 dB.
    phase = 0.5 * -math.expm1(0.5 * math.log1p(-1 / (1 + g)))
    assert ber("bpsk", level_db, "rayleigh") == pytest.approx(phase, rel=1e-12)
    assert ber("dbpsk", level_db, "rayleigh") == pytest.approx(1 / (2 * (1 + g)), rel=1e-12)
    assert ber("2fsk", level_db, "rayleigh") == pytest.approx(1 / (2 + g), rel=1e-12)


@pytest.mark.parametrize(
    ("name", "wanted", "level_db"),
    [("bpsk", 1e-5, 9.59), ("bpsk", 1e-6, 10.53), ("dbpsk", 1e-5, 10.34), ("2fsk", 1e-5, 13.35)],
)
def test_levels_that_engineers_know_by_heart(name, wanted, level_db):
    """Common practice: 9.6 dB and 10.5 dB for BPSK, 0.75 dB more for DBPSK, 3 dB more again for FSK."""
    assert ebn0_db(name, wanted) == pytest.approx(level_db, abs=0.006)


def test_qam_16_in_its_textbook_form():
    """Cho and Yoon (2002), equation for 16-QAM: (3Q(u) + 2Q(3u) - Q(5u))/4, u = sqrt(4g/5)."""
    for level_db in (0.0, 10.0, 14.0):
        u = math.sqrt(0.8 * 10 ** (level_db / 10))
        reference = (3 * q_function(u) + 2 * q_function(3 * u) - q_function(5 * u)) / 4
        assert ber("16qam", level_db) == pytest.approx(reference, rel=1e-12)
