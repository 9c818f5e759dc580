"""Slips are located to the bit, and bursts, inversions and outages are told from them by the stated rules."""

import numpy as np
import pytest


def _join(parse, name, parts):
    """Stretches of a pattern: (place, bits, turned)."""
    return np.concatenate(
        [parse(name).bits(place, count) ^ np.uint8(turned) for place, count, turned in parts]
    )


def _slips(counting, segments):
    return [(e.bit, e.data["bits"]) for e in counting.events(segments) if e.kind == "slip"]


def _kinds(counting, segments):
    return [(e.kind, e.bit) for e in counting.events(segments)]


@pytest.mark.parametrize("unit", [1, 8])
@pytest.mark.parametrize("name", ["PRBS9", "PRBS15", "PRBS23", "PRBS31-reversed", "QRSS", "bernoulli:0.5"])
@pytest.mark.parametrize("bits", [-8, 8, -800, 4096, -4096])
def test_a_slip_is_found_at_its_bit(counting, parse, name, bits, unit):
    pattern, at = parse(name), 40_000
    received = _join(parse, name, [(700, at, 0), (700 + at - bits, 40_000, 0)])
    segments = counting.run(name, received, slip_unit=unit)
    tally = counting.total(segments)
    assert (tally.errors, tally.unaligned) == (0, 0)
    ((bit, size),) = _slips(counting, segments)
    # The cut is the earliest that leaves no mismatch: both places agree on the bits before by chance.
    agree = pattern.bits(700, at)[::-1] == pattern.bits(700 - bits, at)[::-1]
    assert bit == at - int(np.argmin(agree))
    period = pattern.period
    assert (size - bits) % (period or 1 << 62) == 0
    assert period is not None or size == bits
    assert size % unit == 0
    if period is None or abs(bits) * 2 * unit < period:
        assert size == bits


def test_a_slip_of_half_the_pattern_is_found_by_its_place(counting, parse):
    far = 1_234_567_890
    received = _join(parse, "PRBS31", [(5, 40_000, 0), (40_005 + far, 40_000, 0)])
    segments = counting.run("PRBS31", received)
    assert [size for _, size in _slips(counting, segments)] == [(1 << 31) - 1 - far]
    assert counting.events(segments)[1].data["modulo"] == (1 << 31) - 1
    assert counting.total(segments).errors == 0


@pytest.mark.parametrize(
    ("unit", "bits", "text"),
    [(8, -8, "1 byte lost"), (8, 16, "2 bytes inserted"), (1, -1, "1 bit lost"), (1, 3, "3 bits inserted")],
)
def test_a_slip_is_said_in_words(counting, parse, unit, bits, text):
    received = _join(parse, "PRBS15", [(0, 8000, 0), (8000 - bits, 8000, 0)])
    segments = counting.run("PRBS15", received, slip_unit=unit)
    assert [e.text for e in counting.events(segments) if e.kind == "slip"] == [text]


def test_a_byte_link_slips_by_whole_bytes_even_where_fewer_bits_would_do(counting, parse):
    # 8 bytes of a 127-bit pattern: 64 bits lost are the same as 63 inserted, but not on a byte link.
    received = _join(parse, "PRBS7", [(0, 8000, 0), (8000 + 64, 8000, 0)])
    assert [s for _, s in _slips(counting, counting.run("PRBS7", received, slip_unit=8))] == [-64]
    assert [s for _, s in _slips(counting, counting.run("PRBS7", received, slip_unit=1))] == [63]


def test_many_slips_in_quick_succession_are_all_found(counting, parse):
    changes = [-3, 5, 100, -1, -1, 2000, -700]
    parts, place = [(0, 5000, 0)], 5000
    for change in changes:
        place -= change
        parts.append((place, 100, 0))
        place += 100
    parts[-1] = (*parts[-1][:1], 5000, 0)
    segments = counting.run("PRBS23", _join(parse, "PRBS23", parts))
    assert [size for _, size in _slips(counting, segments)] == changes
    assert counting.total(segments).errors == 0


def test_a_slip_that_is_taken_back_is_found(counting, parse):
    received = _join(parse, "PRBS31", [(0, 8000, 0), (8008, 80, 0), (8080, 8000, 0)])
    segments = counting.run("PRBS31", received, slip_unit=8)
    assert [size for _, size in _slips(counting, segments)] == [-8, 8]
    assert counting.total(segments).errors == 0


@pytest.mark.parametrize("name", ["PRBS7", "PRBS15", "PRBS31"])
def test_an_inversion_is_neither_a_slip_nor_a_burst(counting, parse, name):
    received = _join(parse, name, [(0, 8000, 0), (8000, 8000, 1), (16_000, 8000, 0)])
    segments = counting.run(name, received)
    assert _kinds(counting, segments) == [("aligned", 0), ("inversion", 8000), ("inversion", 16_000)]
    assert counting.total(segments).errors == 0
    assert [s.inverted for s in segments if s.events] == [False, True, False]


@pytest.mark.parametrize("length", [30, 300, 3000, 8192 - 200])
@pytest.mark.parametrize("kind", ["noise", "zeros", "ones"])
def test_a_burst_is_counted(counting, parse, kind, length):
    rng = np.random.default_rng(length)
    received = parse("PRBS31").bits(50, 60_000)
    burst = {"noise": rng.integers(0, 2, length), "zeros": np.zeros(length), "ones": np.ones(length)}[kind]
    received[20_000 : 20_000 + length] = burst
    wrong = int((received != parse("PRBS31").bits(50, 60_000)).sum())
    segments = counting.run("PRBS31", received)
    assert _kinds(counting, segments) == [("aligned", 0)]
    tally = counting.total(segments)
    assert (tally.errors, tally.unaligned) == (wrong, 0)


def test_no_place_is_found_in_a_burst_of_noise(counting, parse):
    # One false place in 1e6 such bursts is what the rules allow.
    for seed in range(25):
        rng = np.random.default_rng(seed)
        received = parse("PRBS23").bits(seed, 16_000)
        received[6000:8500] = rng.integers(0, 2, 2500)
        assert _kinds(counting, counting.run("PRBS23", received)) == [("aligned", 0)]


@pytest.mark.parametrize(
    ("kind", "length", "shift"),
    [
        ("noise", 8192 + 200, 777),
        ("zeros", 8192 + 200, 0),
        ("noise", 50_000, 0),
        ("ones", 50_000, 777),
        ("zeros", 3_000_000, 777),
        ("ones", 3_000_000, 0),
    ],
)
def test_an_outage_is_wholly_unaligned(counting, parse, kind, length, shift):
    rng = np.random.default_rng(length)
    gap = {"noise": rng.integers(0, 2, length), "zeros": np.zeros(length), "ones": np.ones(length)}[kind]
    begin, end = 20_000, 20_000 + length
    before, after = parse("PRBS31").bits(50, begin), parse("PRBS31").bits(50 + end + shift, 60_000)
    received = np.concatenate([before, gap.astype(np.uint8), after])[: (end + 60_000) // 8 * 8]
    segments = counting.run("PRBS31", received)
    tally = counting.total(segments)
    # Chance may lend a place some bits of noise, with as many errors as its walk bears.
    assert tally.errors <= 80
    assert abs(tally.unaligned - length) <= 200
    lost, aligned = [e for e in counting.events(segments) if e.kind in ("alignment_lost", "aligned")][1:]
    assert abs(lost.bit - begin) <= 150
    assert abs(aligned.bit - end) <= 150
    assert _slips(counting, segments) == ([(aligned.bit, -shift)] if shift else [])
    # Its edges are where the walks say: -2 where a bit agrees, +3 where it does not.
    place = parse("PRBS31").bits(50, end) != received[:end]
    walk = np.concatenate([[0], np.cumsum(np.where(place, 3, -2))])
    assert walk[lost.bit] == walk[: lost.bit + 1].min()
    assert walk[lost.bit] < walk[lost.bit + 1 : begin + 8000].min() + 1


def test_an_outage_at_the_start_is_unaligned_and_a_short_one_is_counted(counting, parse):
    rng = np.random.default_rng(4)
    for length in (800, 7600, 9600, 40_000):
        noise = rng.integers(0, 2, length).astype(np.uint8)
        received = np.concatenate([noise, parse("PRBS15").bits(0, 40_000)])
        tally = counting.total(counting.run("PRBS15", received))
        if length < 8192:
            assert tally.unaligned == 0
            assert abs(tally.errors - length / 2) < 5 * np.sqrt(length) / 2
        else:
            assert abs(tally.unaligned - length) <= 150
            assert tally.errors <= 60


def test_an_outage_at_the_end_is_unaligned_and_a_short_one_is_counted(counting, parse):
    rng = np.random.default_rng(5)
    for length in (800, 7600, 9600, 100_000):
        noise = rng.integers(0, 2, length).astype(np.uint8)
        received = np.concatenate([parse("PRBS15").bits(0, 40_000), noise])
        segments = counting.run("PRBS15", received)
        tally = counting.total(segments)
        if length < 8192:
            assert tally.unaligned == 0
        else:
            assert abs(tally.unaligned - length) <= 150
            assert [e.kind for e in counting.events(segments)] == ["aligned", "alignment_lost"]


def test_words_that_nearly_agree_when_shifted_still_slip(counting, parse):
    name = "word:1111000011001010"
    received = _join(parse, name, [(0, 8000, 0), (8003, 8000, 0)])
    segments = counting.run(name, received)
    assert [size for _, size in _slips(counting, segments)] == [-3]
    assert counting.total(segments).errors == 0


def test_a_slip_by_a_multiple_of_the_period_is_invisible(counting, parse):
    received = _join(parse, "word:0xA5", [(0, 8000, 0), (8016, 8000, 0)])
    assert _slips(counting, counting.run("word:0xA5", received)) == []
