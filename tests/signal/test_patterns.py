"""Patterns: every bit of every pattern against shift registers written independently, bit by bit."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.signal.patterns import ROW_BYTES, PatternError, known_patterns, parse_pattern

# Written out again on purpose: (stages added, sent inverted, zeros before which a ONE is forced).
TABLE = {
    "PRBS7": ((6, 7), False, None),
    "PRBS9": ((5, 9), False, None),
    "PRBS11": ((9, 11), False, None),
    "PRBS13": ((1, 2, 12, 13), False, None),
    "PRBS15": ((14, 15), True, None),
    "PRBS20": ((3, 20), False, None),
    "QRSS": ((17, 20), False, 14),
    "PRBS23": ((18, 23), True, None),
    "PRBS29": ((27, 29), True, None),
    "PRBS31": ((28, 31), True, None),
}
SUFFIXES = ["", "-reversed", "-inverted", "-reversed-inverted"]
NAMES = [name + suffix for name in TABLE for suffix in SUFFIXES]
OTHERS = ["word:1010", "word:0xA5", "word:011", "word:0x12345", "taps:1,2,22,24", "taps:2,3-inverted"]


def shift_register(name: str, count: int) -> list[int]:
    """`count` bits of a pattern, one at a time."""
    stem = name.split("-")[0]
    taps, sent_inverted, forced = TABLE[stem]
    n = max(taps)
    if "-reversed" in name:
        taps = (*(n - tap for tap in taps if tap != n), n)
    cells = [1] * n  # cells[k-1] is the register's bit k steps ago
    stream = [1] * n
    while len(stream) < count + 20:
        bit = 0
        for tap in taps:
            bit ^= cells[tap - 1]
        cells = [bit, *cells[:-1]]
        stream.append(bit)
    if forced:
        stream = [
            1 if not any(stream[i + 1 : i + 1 + forced]) else bit for i, bit in enumerate(stream[:count])
        ]
    return [bit ^ (sent_inverted != ("-inverted" in name)) for bit in stream[:count]]


def to_bytes(bits: list[int], order: str) -> bytes:
    places = range(8) if order == "lsb" else range(7, -1, -1)
    return bytes(
        sum(bits[i + k] << place for k, place in enumerate(places)) for i in range(0, len(bits) - 7, 8)
    )


def test_the_table_holds_what_is_written_out_here():
    assert {
        row.name: (row.taps, row.sent_inverted, row.force_after_zeros) for row in known_patterns()
    } == TABLE


@pytest.mark.parametrize("name", NAMES)
def test_packed_bytes_equal_a_shift_register_in_both_bit_orders(name):
    pattern = parse_pattern(name)
    bits = shift_register(name, 8 * 4096)
    for order in ("lsb", "msb"):
        assert pattern.packed(0, 4096, order).tobytes() == to_bytes(bits, order)
        for start in (1, 3, 14, 8003):
            assert pattern.packed(start, 700, order).tobytes() == to_bytes(bits[start : start + 5600], order)
    assert pattern.bits(0, 8 * 4096).tolist() == bits
    assert pattern.bits(777, 300).tolist() == bits[777:1077]


@pytest.mark.parametrize("name", [*NAMES, *OTHERS])
def test_reading_on_equals_reading_from_further_on(name):
    pattern = parse_pattern(name)
    rng = np.random.default_rng(8)
    for order in ("lsb", "msb"):
        start = int(rng.integers(-(2**33), 2**33))
        reader = pattern.reader(start, order)
        at = 0
        for size in [1, 7, 4096, 300_000, 65_537, 1_500_001, 12]:
            assert reader.place == start + 8 * at
            piece = np.empty(size, dtype=np.uint8)
            reader.read_into(piece)
            for where in {0, size // 3, max(size - 40, 0)}:
                expected = pattern.packed(start + 8 * (at + where), min(40, size - where), order)
                assert np.array_equal(piece[where : where + 40], expected), (order, size, where)
            at += size


@pytest.mark.parametrize(
    "name", ["PRBS9", "PRBS15", "QRSS", "PRBS23", "PRBS31", "PRBS31-inverted", "word:0xA5"]
)
def test_comparing_gives_the_difference_and_says_in_which_rows_there_is_one(name):
    pattern = parse_pattern(name)
    rng = np.random.default_rng(9)
    for size in (1, 100, 40_000, 2_200_000):
        clean = pattern.packed(11, size, "lsb")
        some, many = rng.integers(size, size=5), rng.integers(size, size=min(size // 3 + 1, 20_000))
        for wrong in ([], [0], [size - 1], some.tolist(), np.unique(many).tolist()):
            expected = np.zeros(size, dtype=np.uint8)
            expected[wrong] = 0x41
            data = clean ^ expected
            out = np.full(size, 77, dtype=np.uint8)
            reader = pattern.reader(11, "lsb")
            rows = reader.compare(data, out)
            assert rows.tolist() == sorted({byte // ROW_BYTES for byte in wrong})
            assert np.array_equal(out, expected)
            assert reader.place == 11 + 8 * size
            pattern.reader(11, "lsb").xor_into(data, data)
            assert np.array_equal(data, expected)


@pytest.mark.parametrize("name", ["PRBS31", "PRBS31-reversed", "PRBS29"])
def test_far_places_of_long_registers_equal_stepping_through_the_whole_period(name):
    """Reads 256 MiB (a period of bytes is eight periods of bits; the period wraps once in it)."""
    pattern = parse_pattern(name)
    block = np.empty(1 << 23, dtype=np.uint8)
    reader = pattern.reader(0, "lsb")
    for number in range(33):
        reader.read_into(block)
        start = 8 * len(block) * number
        for at in (0, 5_000_001, len(block) - 64):
            assert np.array_equal(block[at : at + 64], pattern.packed(start + 8 * at, 64, "lsb"))
            assert np.array_equal(
                block[at : at + 64], pattern.packed((start + 8 * at) % pattern.period, 64, "lsb")
            )
    assert reader.place > pattern.period


@given(data=st.data())
@settings(max_examples=80, deadline=None)
def test_words_repeat_their_digits_from_any_place(data):
    digits = data.draw(st.text("01", min_size=1, max_size=40))
    place = data.draw(st.integers(-1000, 1000))
    pattern = parse_pattern(f"word:{digits}")
    expected = [int(digits[(place + i) % len(digits)]) for i in range(240)]
    assert pattern.bits(place, 240).tolist() == expected
    for order in ("lsb", "msb"):
        assert pattern.packed(place, 30, order).tobytes() == to_bytes(expected, order)
    assert len(digits) % pattern.period == 0
    assert not any(
        digits == digits[:size] * (len(digits) // size)
        for size in range(1, pattern.period)
        if len(digits) % size == 0
    )


def test_hexadecimal_words_send_the_highest_bit_first():
    assert parse_pattern("word:0xA5F").bits(0, 12).tolist() == [1, 0, 1, 0, 0, 1, 0, 1, 1, 1, 1, 1]
    assert parse_pattern("WORD:0xa5").name == "word:0xA5"


@pytest.mark.parametrize("name", [*NAMES, *OTHERS, "bernoulli:0.4", "bernoulli:0.4:7-inverted"])
def test_the_opposite_is_the_complement_under_its_own_name(name):
    pattern = parse_pattern(name)
    opposite = pattern.opposite()
    assert np.array_equal(opposite.bits(12345, 3000), 1 - pattern.bits(12345, 3000))
    again = parse_pattern(opposite.name)
    assert again.name == opposite.name
    assert again.inverted == opposite.inverted != pattern.inverted
    assert np.array_equal(again.bits(5, 500), opposite.bits(5, 500))
    assert opposite.opposite().name == pattern.name


@pytest.mark.parametrize("name", NAMES)
def test_names_are_read_in_any_case_and_written_one_way(name):
    assert parse_pattern(name.lower()).name == name
    assert parse_pattern(name.upper()).name == name
    assert parse_pattern(name).inverted == ("-inverted" in name)


def test_suffixes_may_come_in_either_order():
    assert parse_pattern("prbs9-inverted-reversed").name == "PRBS9-reversed-inverted"


@pytest.mark.parametrize("name", ["PRBS15", "PRBS23", "PRBS31", "QRSS", "word:0x12345"])
def test_one_period_further_on_is_the_same_place(name):
    pattern = parse_pattern(name)
    for place in (0, 5, 123_456_789):
        expected = pattern.packed(place, 500, "lsb")
        assert np.array_equal(pattern.packed(place + pattern.period, 500, "lsb"), expected)
        assert np.array_equal(pattern.packed(place - pattern.period, 500, "lsb"), expected)


def philox(counter: int, key: int) -> list[int]:
    """Philox4x64 with ten rounds, as its paper writes it down."""
    mask = 2**64 - 1
    x = [(counter >> (64 * i)) & mask for i in range(4)]
    k = [key & mask, key >> 64]
    for _ in range(10):
        high0, low0 = divmod(0xD2E7470EE14C6C93 * x[0], 2**64)
        high1, low1 = divmod(0xCA5A826395121157 * x[2], 2**64)
        x = [high1 ^ x[1] ^ k[0], low1, high0 ^ x[3] ^ k[1], low0]
        k = [(k[0] + 0x9E3779B97F4A7C15) & mask, (k[1] + 0xBB67AE8584CAA73B) & mask]
    return x


@pytest.mark.parametrize(
    ("name", "share", "seed"), [("bernoulli:0.4", 0.4, 0), ("bernoulli:0.9:77", 0.9, 77)]
)
def test_bernoulli_bits_are_thresholds_of_a_counter_based_generator(name, share, seed):
    pattern = parse_pattern(name)
    halves = [
        half for count in range(1, 200) for word in philox(count, seed) for half in (word % 2**32, word >> 32)
    ]
    expected = [int(half < round(share * 2**32)) for half in halves]
    assert pattern.bits(0, len(expected)).tolist() == expected
    assert pattern.bits(77, 333).tolist() == expected[77:410]
    assert pattern.packed(8, 100, "msb").tobytes() == to_bytes(expected[8:808], "msb")
    assert pattern.period is None


@pytest.mark.parametrize("share", [0.05, 0.4, 0.5])
def test_bernoulli_share_of_ones_is_the_one_asked_for(share):
    """4e5 bits: beyond five standard deviations in 1 of 1.7 million seeds."""
    count = 400_000
    ones = int(parse_pattern(f"bernoulli:{share}").bits(10**12, count).sum())
    assert abs(ones - share * count) < 5 * (share * (1 - share) * count) ** 0.5


@pytest.mark.parametrize("order", ["lsb", "msb"])
def test_a_file_is_sent_as_it_is_in_the_order_of_the_link(order):
    content = bytes(np.random.default_rng(1).integers(0, 256, 1000, dtype=np.uint8))
    paths = []

    def read(path: str) -> bytes:
        paths.append(path)
        return content

    pattern = parse_pattern("file:Some/Path-inverted", bit_order=order, read=read)
    assert paths == ["Some/Path-inverted"]
    assert pattern.name == "file:Some/Path-inverted"
    assert not pattern.inverted
    assert pattern.packed(0, 2500, order).tobytes() == (content * 3)[:2500]
    assert pattern.packed(8 * 17, 100, order).tobytes() == content[17:117]
    assert to_bytes(pattern.bits(3, 1600).tolist(), order) == pattern.packed(3, 200, order).tobytes()
    assert pattern.opposite().packed(0, 10, order).tobytes() == bytes(255 - byte for byte in content[:10])


def test_a_file_that_repeats_itself_has_the_period_of_what_it_repeats():
    assert parse_pattern("file:x", read=lambda _: b"abc" * 50).period == 24
    assert parse_pattern("file:x", read=lambda _: b"\xaa" * 50).period == 2
    assert parse_pattern("file:x", read=lambda _: bytes(50)).constant


@pytest.mark.parametrize(
    ("name", "transparent"),
    [
        ("PRBS15", True),
        ("PRBS7", True),
        ("bernoulli:0.4", True),
        ("word:1010", False),
        ("word:0x13", True),
        ("word:0x88", True),  # least significant bit first its bytes are 0x11
        ("word:0xF0", False),
    ],
)
def test_patterns_that_hold_flow_control_bytes_are_called_transparent(name, transparent):
    assert parse_pattern(name).transparent == transparent


@pytest.mark.parametrize(
    ("name", "constant"),
    [
        ("word:1", True),
        ("word:0x00", True),
        ("word:10", False),
        ("bernoulli:0", True),
        ("bernoulli:0.1", False),
    ],
)
def test_constant_patterns_are_known_as_such(name, constant):
    assert parse_pattern(name).constant == constant


@pytest.mark.parametrize(
    ("name", "advice"),
    [
        ("PRBS32", "PRBS31"),
        ("prbs9-revers", "PRBS9-reversed"),
        ("QRS", "QRSS"),
        ("nonsense", "word:1010"),
        ("wrd:10", "word:10"),
        ("word:12", "digits"),
        ("word:", "digits"),
        ("word:0x", "digits"),
        ("word:0xG1", "digits"),
        ("taps:1,2,3", "even number"),
        ("taps:x,y", "even number"),
        ("taps:3,99", "even number"),
        ("bernoulli:1.5", "share"),
        ("bernoulli:nan", "share"),
        ("bernoulli:0.5:x", "share"),
        ("bernoulli:0.5-reversed", "share"),
        ("file:", "PATH"),
    ],
)
def test_a_bad_name_is_refused_with_what_to_write_instead(name, advice):
    with pytest.raises(PatternError) as caught:
        parse_pattern(name)
    assert advice in caught.value.advice
    assert "\n" not in caught.value.what + caught.value.advice


def test_an_empty_file_is_no_pattern():
    with pytest.raises(PatternError, match="empty"):
        parse_pattern("file:x", read=lambda _: b"")


@pytest.mark.parametrize(
    ("given", "meant"), [("PRBS16", "PRBS15"), ("prbs24", "PRBS23"), ("PRBS32", "PRBS31")]
)
def test_a_number_that_is_none_is_answered_with_the_nearest(given, meant):
    with pytest.raises(PatternError) as refused:
        parse_pattern(given)
    assert refused.value.advice == f"did you mean {meant}?"
