"""Identification: every pattern is named through errors, junk and slips, and nothing else gets a name."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from harness.signal.bits import unpack
from harness.signal.identify import identify, stretches
from harness.signal.patterns import PatternError, known_patterns, parse_pattern
from harness.signal.streams import look_at, register_behind, repeated_word

ROWS = [row.name for row in known_patterns()]
SUFFIXES = ["", "-reversed", "-inverted", "-reversed-inverted"]
TWINS = {"QRSS": "PRBS20-reversed", "QRSS-reversed": "PRBS20"}
TWINS |= {plain: forced for forced, plain in TWINS.items()}


def noisy(data: np.ndarray, ber: float, rng) -> np.ndarray:
    return data ^ np.packbits(rng.random(8 * len(data)) < ber)


def full_names(found) -> set[str]:
    end = "-inverted" if found.inverted else ""
    return {name + end for name in (found.pattern, *found.alternatives)}


@pytest.mark.parametrize("name", ROWS)
@pytest.mark.parametrize("ber", [0.0, 0.2])
def test_every_pattern_is_named_in_both_bit_orders_and_polarities(name, ber):
    rng = np.random.default_rng(1)
    for suffix in SUFFIXES:
        for order in ("lsb", "msb"):
            pattern = parse_pattern(name + suffix)
            sent = pattern.packed(int(rng.integers(pattern.period)), 3000, order)
            found = identify(noisy(sent, ber, rng).tobytes())
            assert found.bit_order == order
            assert pattern.name in full_names(found)
            assert len(found.alternatives) == (found.pattern in TWINS)
            assert found.inverted == ("-inverted" in suffix)
            assert found.confidence > 1 - 1e-9
            assert found.look is None
            assert abs(found.ber - ber) < 0.06
            bits = unpack(noisy(sent, 0, rng), order)[found.start : found.start + 500]
            again = parse_pattern(pattern.name).bits(found.place, 500)
            assert np.array_equal(bits, again) or found.pattern in TWINS


def test_few_bytes_are_enough_without_errors():
    for name in ("PRBS9", "PRBS15-reversed", "PRBS23", "PRBS31-inverted"):
        found = identify(parse_pattern(name).packed(999, 64, "msb"))
        assert full_names(found) == {name}


@pytest.mark.parametrize(("forced", "plain"), [("QRSS", "PRBS20-reversed"), ("QRSS-reversed", "PRBS20")])
@pytest.mark.parametrize("inverted", [False, True])
def test_forced_bits_tell_qrss_from_its_register_once_enough_is_seen(forced, plain, inverted):
    rng = np.random.default_rng(2)
    end = "-inverted" * inverted
    for name in (forced, plain):
        pattern = parse_pattern(name + end)
        place = int(rng.integers(pattern.period))
        few = identify(pattern.packed(place, 300, "lsb"))
        assert few.pattern == min((forced, plain), key=lambda each: "reversed" in each)
        assert set(few.alternatives) == {forced, plain} - {few.pattern}
        many = identify(noisy(pattern.packed(place, 80_000, "lsb"), 1e-3, rng))
        assert (many.pattern, many.alternatives, many.inverted) == (name, (), inverted)
        through_errors = identify(noisy(pattern.packed(place, 700_000, "lsb"), 0.2, rng))
        assert (through_errors.pattern, through_errors.alternatives) == (name, ())


def test_forced_bits_are_followed_over_slips():
    rng = np.random.default_rng(3)
    for name in ("QRSS", "PRBS20-reversed"):
        pattern = parse_pattern(name)
        parts = [pattern.packed(int(rng.integers(pattern.period)), 20_011, "lsb") for _ in range(12)]
        found = identify(np.concatenate(parts))
        assert (found.pattern, found.alternatives) == (name, ())


def test_junk_before_and_after_and_slips_do_not_hide_a_pattern():
    rng = np.random.default_rng(4)
    for name in ("PRBS9-reversed", "PRBS15", "PRBS29-inverted"):
        pattern = parse_pattern(name)
        junk = rng.integers(0, 256, 20_000, dtype=np.uint8)
        assert full_names(identify(np.concatenate([junk, pattern.packed(3, 25_000, "msb"), junk]))) == {name}
        idle = np.full(70_000, 0xFF, dtype=np.uint8)
        assert full_names(identify(np.concatenate([idle, pattern.packed(3, 20_000, "msb")]))) == {name}
        for between in (150, 400):
            slips = [pattern.packed(int(rng.integers(10**6)), between, "lsb") for _ in range(100)]
            assert full_names(identify(np.concatenate(slips))) == {name}


def test_a_named_pattern_is_looked_for_alone():
    sent = parse_pattern("PRBS15").packed(7, 2000, "msb")
    found = identify(sent, "prbs15")
    assert (found.pattern, found.bit_order, found.inverted) == ("PRBS15", "msb", False)
    assert identify(sent, "PRBS15", "lsb").pattern is None
    assert identify(sent, "PRBS23").pattern is None
    turned = identify(sent, "PRBS15-inverted")
    assert (turned.pattern, turned.inverted) == ("PRBS15-inverted", False)
    assert identify(255 - sent, "PRBS15").inverted
    assert identify(parse_pattern("QRSS").packed(0, 500, "lsb"), "QRSS").alternatives == ()


def test_words_sources_and_files_are_found_by_name():
    content = bytes(np.random.default_rng(5).integers(0, 256, 5000, dtype=np.uint8))
    for name in ("word:0xA5", "word:1110100", "bernoulli:0.4:3", "file:x"):
        for order in ("lsb", "msb"):
            pattern = parse_pattern(name, bit_order=order, read=lambda _: content)
            found = identify(pattern.packed(64, 3000, order), name, order, read=lambda _: content)
            assert found.pattern == name
            assert (found.start + 64 - found.place) % (pattern.period or 10**9) == 0


def test_names_that_are_none_are_refused():
    with pytest.raises(PatternError):
        identify(bytes(100), "PRBS14")
    with pytest.raises(PatternError, match="dead line"):
        identify(bytes(100), "word:1")


def test_a_stream_in_the_other_bit_order_is_not_the_pattern():
    """It agrees with its own pattern in 9 of 16 bits for ever, by one right bit in every eight."""
    rng = np.random.default_rng(6)
    for name in ("PRBS9", "PRBS11-reversed", "PRBS15", "PRBS23", "PRBS31"):
        pattern = parse_pattern(name)
        for _ in range(5):
            sent = pattern.packed(int(rng.integers(pattern.period)), 8192, "msb")
            assert identify(sent, name, "lsb").pattern is None


def test_noise_and_what_else_a_port_may_give_get_no_name():
    rng = np.random.default_rng(7)
    library = Path(sys.modules["os"].__file__).parent
    text = (library / "typing.py").read_bytes()
    program = Path(sys.executable).resolve().read_bytes()[:200_000]
    for stream in (rng.bytes(60_000), text, program, text[:3000], b"", b"x", b"\x00\x01" * 500):
        found = identify(stream)
        assert found.pattern is None
        assert found.bit_order is None
        assert found.confidence == 0
        assert found.look is not None


@pytest.mark.parametrize(
    ("stream", "says"),
    [
        (b"", "no bits"),
        (bytes(900), "constant: only ZEROs"),
        (b"\xff" * 900, "constant: only ONEs"),
        (b"\xff" * 900 + b"\xfe" + b"\xff" * 900, "nearly all ONEs"),
        (b"\x00\x01" + bytes(3000), "nearly all ZEROs"),
        (bytes(np.random.default_rng(8).bytes(9000)), "% ONEs"),
    ],
)
def test_streams_that_fit_nothing_are_described(stream, says):
    assert says in identify(stream).look.text


@pytest.mark.parametrize("digits", ["10", "100", "1110100", "11010010", "111110010010110001"])
@pytest.mark.parametrize("ber", [0.0, 0.05, 0.2])
def test_a_repeated_word_is_named_through_errors(digits, ber):
    rng = np.random.default_rng(9)
    sent = noisy(parse_pattern(f"word:{digits}").packed(1, 3000, "lsb"), ber, rng)
    word = repeated_word(unpack(sent, "lsb"))
    assert word is not None
    assert word.period == len(digits)
    assert any(
        np.array_equal(
            word.bits(shift, 500), unpack(parse_pattern(f"word:{digits}").packed(0, 500, "lsb"), "lsb")[:500]
        )
        for shift in range(len(digits))
    )
    look = identify(sent, order="lsb").look
    assert look.period == len(digits)
    assert look.word == word.name
    assert parse_pattern(look.word).name == look.word


def test_text_and_noise_repeat_no_word():
    rng = np.random.default_rng(10)
    assert repeated_word(rng.integers(0, 2, 50_000).astype(np.uint8)) is None
    text = (Path(sys.modules["os"].__file__).parent / "typing.py").read_bytes()
    for order in ("lsb", "msb"):
        assert repeated_word(unpack(text[:20_000], order)) is None


@pytest.mark.parametrize("taps", ["3,17", "5,28", "1,2,22,24", "2,5,9,12", "3,20"])
@pytest.mark.parametrize("inverted", [False, True])
@pytest.mark.parametrize("order", ["lsb", "msb"])
def test_an_unknown_register_is_found_with_its_taps(taps, inverted, order):
    rng = np.random.default_rng(11)
    name = f"taps:{taps}" + "-inverted" * inverted
    sent = noisy(parse_pattern(name).packed(12345, 30_000, order), 2e-4, rng)
    recurrence = register_behind(unpack(sent, order))
    assert recurrence.taps == tuple(int(tap) for tap in taps.split(","))
    assert recurrence.inverted == inverted
    assert recurrence.pattern == name
    assert recurrence.stages == recurrence.taps[-1]
    if taps != "3,20":
        look = identify(sent).look
        assert name in look.text
        assert look.recurrence.taps == recurrence.taps


def test_a_register_is_found_behind_a_dirty_beginning():
    rng = np.random.default_rng(12)
    clean = parse_pattern("taps:5,28").packed(0, 5000, "lsb")
    sent = np.concatenate([rng.integers(0, 256, 5000, dtype=np.uint8), clean])
    recurrence = register_behind(unpack(sent, "lsb"))
    assert recurrence.pattern == "taps:5,28"
    assert recurrence.start >= 40_000


def test_registers_longer_than_patterns_may_have_are_told_by_their_taps_alone():
    bits = [1] * 58
    for i in range(58, 4000):
        bits.append(bits[i - 39] ^ bits[i - 58])
    recurrence = register_behind(np.array(bits, np.uint8))
    assert recurrence.taps == (39, 58)
    assert recurrence.pattern is None
    assert look_at(np.array(bits, np.uint8)).text.startswith("a register of 58 stages")


def test_noise_has_no_register_behind_it():
    assert register_behind(np.random.default_rng(13).integers(0, 2, 20_000).astype(np.uint8)) is None


@pytest.mark.parametrize("count", [0, 7, 8, 100, 1024, 1032, 8192, 8200, 10**6, 10**9])
def test_stretches_are_whole_bytes_inside_the_stream_and_begin_at_its_start(count):
    given = list(stretches(count))
    assert len(given) == len(set(given)) <= 32
    assert all(start % 8 == 0 and length % 8 == 0 and length > 0 for start, length in given)
    assert all(start + length <= count for start, length in given)
    if count >= 8:
        assert given[0] == (0, min(8192, count) // 8 * 8)
