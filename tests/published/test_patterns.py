"""The facts that standards state of the register patterns.

Sources: ITU-T O.150 (05/1996) section 5 for PRBS9, 11, 15, 20, 23, 29, 31 and QRSS; IEEE 802.3 for PRBS13's
polynomial x^13 + x^12 + x^2 + x + 1; PRBS7 is common practice.
"""

from __future__ import annotations

import numpy as np
import pytest

from harness.signal.patterns import known_patterns, parse_pattern

# Name: (bits in a period, longest run of ZEROs sent). O.150 section 5 states both; PRBS7 and PRBS13 by the
# same rule (n - 1 ZEROs where the sequence is sent upright), which was checked by counting.
STATED = {
    "PRBS7": (127, 6),
    "PRBS9": (511, 8),
    "PRBS11": (2_047, 10),
    "PRBS13": (8_191, 12),
    "PRBS15": (32_767, 15),
    "PRBS20": (1_048_575, 19),
    "QRSS": (1_048_575, 14),
    "PRBS23": (8_388_607, 23),
    "PRBS29": (536_870_911, 29),
    "PRBS31": (2_147_483_647, 31),
}
COUNTED = [name for name, (bits, _) in STATED.items() if bits < 10_000_000]


def longest_run(bits: np.ndarray, value: int) -> int:
    """Longest run in a cycle."""
    other = np.flatnonzero(bits != value)
    return int(np.diff(np.concatenate([other, [other[0] + len(bits)]])).max()) - 1


@pytest.mark.parametrize("name", STATED)
def test_period_and_longest_run_of_zeros_are_those_stated(name):
    row = next(row for row in known_patterns() if row.name == name)
    assert (row.period, row.longest_zeros) == STATED[name]
    assert parse_pattern(name).period == STATED[name][0]


@pytest.mark.parametrize("name", COUNTED)
def test_a_whole_period_shows_the_run_balance_and_no_shorter_period(name):
    bits_in_period, zeros = STATED[name]
    pattern = parse_pattern(name)
    cycle = pattern.bits(0, bits_in_period)
    assert longest_run(cycle, 0) == zeros
    assert np.array_equal(pattern.bits(bits_in_period, 5000), np.resize(cycle, 5000))
    ones = int(cycle.sum())
    if name == "QRSS":
        assert ones == 2**19 + 31  # 31 ZEROs a period are forced to ONE
    else:
        # A maximal sequence holds one ONE more than ZEROs in the register; inversion turns that over.
        inverted = zeros == row_stages(name)
        assert ones == (bits_in_period - 1 if inverted else bits_in_period + 1) // 2


def row_stages(name: str) -> int:
    return next(row.stages for row in known_patterns() if row.name == name)


@pytest.mark.parametrize("name", ["PRBS29", "PRBS31"])
def test_longest_run_of_zeros_begins_a_long_inverted_pattern(name):
    """O.150 5.7 and 5.8: the register's n ONEs are sent as n ZEROs, with a ONE on either side."""
    pattern = parse_pattern(name)
    stages = row_stages(name)
    around = pattern.bits(-1, stages + 2)
    assert around.tolist() == [1, *[0] * stages, 1]


def test_the_511_bit_sequence_has_five_zeros_after_nine_ones_and_its_reverse_four():
    """O.150 5.1 against radio data sheets' "PN9"; the latter's bytes from memory, they fit the recurrence."""
    assert parse_pattern("PRBS9").bits(0, 15).tolist() == [1] * 9 + [0] * 5 + [1]
    assert parse_pattern("PRBS9-reversed").bits(0, 14).tolist() == [1] * 9 + [0] * 4 + [1]
    assert parse_pattern("PRBS9-reversed").packed(0, 4, "lsb").tobytes() == bytes.fromhex("FFE11D9A")


def test_qrss_is_its_register_with_a_one_forced_before_fourteen_zeros():
    """O.150 5.5: stages 17 and 20, the output is ONE wherever the next 14 bits are all ZERO."""
    period = STATED["QRSS"][0]
    sent = parse_pattern("QRSS").bits(0, period)
    plain = parse_pattern("PRBS20-reversed").bits(0, period)
    changed = np.flatnonzero(sent != plain)
    assert len(changed) == 31
    assert period / len(changed) == pytest.approx(33_825, abs=1)
    for place in changed.tolist():
        assert plain[place] == 0
        assert sent[place] == 1
        assert not np.resize(plain, 2 * period)[place + 1 : place + 15].any()
    gaps = np.diff(np.concatenate([changed, [changed[0] + period]]))
    assert gaps.max() == 209_159
