"""The counter counts every error once, with its kind and place, however the stream is cut into chunks."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from harness.record import Tally
from harness.signal.bits import pack
from harness.signal.counter import Counter
from harness.signal.patterns import PatternError

NAMES = [
    "PRBS7",
    "PRBS9-reversed",
    "PRBS11",
    "PRBS13-inverted",
    "PRBS15",
    "PRBS20-reversed-inverted",
    "QRSS",
    "PRBS23",
    "PRBS29",
    "PRBS31",
    "word:1000",
    "word:0xA5C3",
    "bernoulli:0.4",
    "taps:18,23",
]


@pytest.mark.parametrize("order", ["lsb", "msb"])
@pytest.mark.parametrize("name", NAMES)
def test_known_flipped_bits_are_reported_exactly(counting, parse, name, order):
    rng = np.random.default_rng(5)
    sent = parse(name).bits(1234, 8 * 20_003)
    flipped = np.unique(rng.choice(len(sent) - 40, 300))
    received = sent.copy()
    received[flipped] ^= 1
    segments = counting.run(name, received, order=order)
    tally = counting.total(segments)
    assert tally == Tally(
        len(sent), len(sent), 0, len(flipped), int(sent[flipped].sum()), int((1 - sent[flipped]).sum())
    )
    assert np.array_equal(np.concatenate([s.positions for s in segments]), flipped)
    assert np.array_equal(np.concatenate([s.ones_lost for s in segments]), sent[flipped] == 1)
    assert [e.kind for e in counting.events(segments)] == ["aligned"]


@pytest.mark.parametrize("name", ["PRBS9", "PRBS15", "PRBS31"])
def test_the_opposite_polarity_is_said_and_counted(counting, parse, name):
    segments = counting.run(name, 1 - parse(name).bits(77, 40_000))
    assert counting.total(segments).errors == 0
    assert all(s.inverted for s in segments)
    assert counting.events(segments)[0].data["inverted"] is True


def test_the_place_that_is_said_is_the_one_compared_with(counting, parse):
    pattern = parse("PRBS15")
    received = pattern.bits(30_000, 80_000)
    received[[1000, 50_000]] ^= 1
    for s in counting.run("PRBS15", received, [100] * 100):
        expected = pattern.bits(s.place, s.tally.received)
        assert int((expected != received[s.start : s.end]).sum()) == s.tally.errors


def test_a_constant_pattern_is_refused(parse):
    with pytest.raises(PatternError, match="dead line"):
        Counter(parse("word:1111"))


@settings(max_examples=20, deadline=None, derandomize=True)
@given(data=st.data())
def test_chunks_do_not_matter(counting, made, parse, data):
    seed = data.draw(st.integers(0, 10_000))
    rng = np.random.default_rng(seed)
    stream = made.make(parse, seed, slips=int(rng.integers(0, 5)), spread=0.2, bursts=int(rng.integers(0, 3)))
    bits = stream.received
    if rng.random() < 0.3:  # an outage: noise, silence, or another pattern
        at = int(rng.integers(0, len(bits) // 8)) * 8
        length = int(rng.choice([4000, 9000, 30_000], p=[0.4, 0.4, 0.2])) // 8 * 8
        noise = [rng.integers(0, 2, length), np.zeros(length), parse("PRBS11").bits(0, length)]
        bits = np.concatenate([bits[:at], noise[int(rng.integers(3))].astype(np.uint8), bits[at:]])
    count = len(bits) // 8
    cuts = sorted(data.draw(st.lists(st.integers(0, count), max_size=12)))
    chunks = np.diff([0, *cuts, count]).tolist()
    how = {"slip_unit": stream.unit, "position_limit": int(rng.choice([0, 10, 1 << 16]))}
    period = parse(stream.name).period
    whole = counting.same(counting.run(stream.name, bits, **how), period)
    assert counting.same(counting.run(stream.name, bits, chunks, **how), period) == whole


@pytest.mark.parametrize("seed", range(3))
def test_byte_by_byte_is_the_same_as_all_at_once(counting, made, parse, seed):
    stream = made.make(parse, 100 + seed, slips=3, spread=0.3)
    period = parse(stream.name).period
    whole = counting.run(stream.name, stream.received, slip_unit=stream.unit)
    bytewise = counting.run(
        stream.name, stream.received, [1] * (len(stream.received) // 8), slip_unit=stream.unit
    )
    assert counting.same(bytewise, period) == counting.same(whole, period)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(st.lists(st.tuples(st.integers(1, 3000), st.booleans()), min_size=1, max_size=40), st.integers(0, 99))
def test_no_segment_straddles_a_mark(counting, parse, plan, seed):
    rng = np.random.default_rng(seed)
    total = sum(size for size, _ in plan)
    bits = parse("PRBS15").bits(9, 8 * total) ^ (rng.random(8 * total) < 0.02).astype(np.uint8)
    data = pack(bits, "lsb")
    counter = Counter(parse("PRBS15"), position_limit=25)
    segments, marks, at = [], [0], 0
    for size, mark in plan:
        segments += counter.feed(data[at : at + size])
        at += size
        if mark:
            counter.mark()
            marks.append(8 * at)
    segments += counter.finish()
    counting.check(segments, 8 * total)
    for s in segments:
        assert not any(s.start < mark < s.end for mark in marks)
    for begin, end in zip(marks, [*marks[1:], 8 * total], strict=True):
        inside = [s for s in segments if begin <= s.start < end]
        listed = sum(len(s.positions) for s in inside)
        errors = sum(s.tally.errors for s in inside)
        assert listed == min(errors, 25)  # the limit holds between two marks, wherever chunks end
        assert all(s.positions_complete for s in inside) == (errors <= 25)


@pytest.mark.parametrize("cut", [1, 999, 40_000, 40_001, 79_999])
def test_no_segment_straddles_a_count_of_compared_bits(counting, parse, cut):
    bits = parse("PRBS23").bits(5, 80_000)
    bits[::97] ^= 1
    segments = counting.run("PRBS23", bits, [1000] * 10, cut_compared=cut)
    ends = np.cumsum([s.tally.compared for s in segments])
    assert cut in ends
    head = [s for s, end in zip(segments, ends, strict=True) if end <= cut]
    assert sum(s.tally.errors for s in head) == -(-cut // 97)


def test_positions_beyond_the_limit_are_counted_and_the_cut_is_said(counting, parse):
    rng = np.random.default_rng(3)
    sent = parse("PRBS31").bits(0, 4_000_000)
    wrong = rng.random(len(sent)) < 0.01
    segments = counting.run("PRBS31", sent ^ wrong.astype(np.uint8), position_limit=500)
    tally = counting.total(segments)
    assert tally.errors == wrong.sum()
    assert tally.ones_as_zeros == (wrong & (sent == 1)).sum()
    listed = np.concatenate([s.positions for s in segments])
    assert np.array_equal(listed, np.flatnonzero(wrong)[:500])
    assert not all(s.positions_complete for s in segments)


def test_bits_that_the_host_lost_are_unaligned_and_the_place_runs_on(counting, parse):
    pattern = parse("PRBS15")
    counter = Counter(pattern)
    first, second = pattern.bits(0, 80_000), pattern.bits(80_000 + 5000, 80_000)
    segments = counter.feed(pack(first, "lsb"))
    segments += counter.skip(5000)
    segments += counter.feed(pack(second, "lsb")) + counter.finish()
    total = counting.check(segments, 165_000)
    assert (total.errors, total.unaligned, total.compared) == (0, 5000, 160_000)
    events = counting.events(segments)
    assert [(e.kind, e.bit) for e in events] == [("aligned", 0), ("skipped", 80_000)]


@pytest.mark.parametrize("change", [-3, 40])
def test_a_slip_during_bits_that_the_host_lost_is_found_at_their_end(counting, parse, change):
    pattern = parse("PRBS31")
    counter = Counter(pattern)
    segments = counter.feed(pack(pattern.bits(0, 80_000), "lsb"))
    segments += counter.skip(8000)
    segments += counter.feed(pack(pattern.bits(88_000 - change, 80_000), "lsb")) + counter.finish()
    total = counting.check(segments, 168_000)
    slips = [(e.bit, e.data["bits"]) for e in counting.events(segments) if e.kind == "slip"]
    assert slips == [(88_000, change)]
    assert total.errors == 0


def test_skipping_before_anything_was_aligned_drops_nothing(counting, parse):
    counter = Counter(parse("PRBS15"))
    segments = counter.skip(800) + counter.feed(bytes(100)) + counter.skip(8)
    segments += counter.feed(pack(parse("PRBS15").bits(0, 8000), "lsb")) + counter.finish()
    total = counting.check(segments, 800 + 800 + 8 + 8000)
    assert (total.unaligned, total.errors) == (1608, 0)


def test_empty_chunks_and_an_empty_stream_are_nothing(parse):
    counter = Counter(parse("PRBS15"))
    assert counter.feed(b"") == []
    counter.mark()
    assert counter.finish() == []
    assert (counter.received, counter.decided) == (0, 0)


@pytest.mark.parametrize("kind", [bytes, bytearray, memoryview])
def test_any_buffer_of_bytes_is_taken(parse, kind):
    counter = Counter(parse("PRBS9"))
    data = pack(parse("PRBS9").bits(0, 8000), "lsb").tobytes()
    segments = counter.feed(kind(data)) + counter.finish()
    assert sum(s.tally.compared for s in segments) == 8000


def test_a_clean_stream_leaves_few_bits_undecided(parse):
    counter = Counter(parse("PRBS31"))
    data = pack(parse("PRBS31").bits(0, 80_000), "lsb")
    counter.feed(data[:64])
    for at in range(64, len(data), 7):
        counter.feed(data[at : at + 7])
        assert counter.received - counter.decided < 256


@pytest.mark.parametrize("name", ["PRBS9", "PRBS15", "PRBS23", "PRBS31", "QRSS"])
def test_alignment_is_held_at_three_errors_in_ten(counting, parse, name):
    rng = np.random.default_rng(8)
    wrong = rng.random(400_000) < 0.3
    segments = counting.run(name, parse(name).bits(99, len(wrong)) ^ wrong.astype(np.uint8))
    assert counting.total(segments).errors == wrong.sum()
    assert [e.kind for e in counting.events(segments)] == ["aligned"]
