"""Silence, noise and foreign streams: lost within a stated number of bits, never aligned to, cheap and flat."""

import numpy as np
import pytest

from harness.signal.bits import pack
from harness.signal.counter import Counter

LOSS_WITHIN = 32_768  # bits after the last evidence: what is fed until loss is stated and handed out


@pytest.mark.parametrize(
    "name", ["PRBS7", "PRBS9", "PRBS15", "PRBS23", "PRBS31", "QRSS", "word:1000", "word:0x8000"]
)
@pytest.mark.parametrize("kind", ["zeros", "ones", "noise"])
def test_loss_is_stated_within_a_number_of_bits(counting, parse, name, kind):
    rng = np.random.default_rng(1)
    counter = Counter(parse(name))
    segments = counter.feed(pack(parse(name).bits(0, 80_000), "lsb"))
    fill = {"zeros": np.zeros, "ones": np.ones, "noise": lambda n: rng.integers(0, 2, n)}[kind]
    for _ in range(LOSS_WITHIN // 800 + 1):
        segments += counter.feed(pack(fill(800).astype(np.uint8), "lsb"))
    assert [e.kind for e in counting.events(segments)] == ["aligned", "alignment_lost"]
    assert abs(counting.events(segments)[1].bit - 80_000) <= 150
    assert not segments[-1].aligned
    assert counter.received - counter.decided <= LOSS_WITHIN


@pytest.mark.parametrize("name", ["PRBS7", "PRBS11", "PRBS15", "PRBS31", "QRSS"])
@pytest.mark.parametrize("kind", ["zeros", "ones", "noise", "biased", "alternating"])
def test_what_is_not_the_pattern_is_never_aligned_to(counting, parse, name, kind):
    rng = np.random.default_rng(2)
    n = 60_000
    bits = {
        "zeros": np.zeros(n),
        "ones": np.ones(n),
        "noise": rng.integers(0, 2, n),
        "biased": rng.random(n) < 0.1,
        "alternating": np.arange(n) % 2,
    }[kind]
    segments = counting.run(name, bits)
    assert not any(s.aligned for s in segments)
    assert counting.events(segments) == []


def _structured(parse):
    """Streams with a structure of their own that no pattern here has."""
    rng = np.random.default_rng(3)
    n = 16_000
    for period in (2, 3, 7, 8, 16, 100, 127, 511, 2047, 8191):
        yield f"word of {period}", np.resize(rng.random(period) < rng.choice([0.5, 0.2]), n)
    for gap in (50, 100, 999):
        yield f"a ONE in {gap}", np.arange(n) % gap == 0
    text = ("The river stood at 1.37 m at 06:00, falling; no rain. " * 200).encode()
    yield "text", np.resize(np.unpackbits(np.frombuffer(text, np.uint8), bitorder="little"), n)
    yield "counter", np.unpackbits((np.arange(n // 8) % 256).astype(np.uint8))[:n]
    wave = (127 + 120 * np.sin(np.arange(n // 8) / 9.7)).astype(np.uint8)
    yield "a wave", np.unpackbits(wave)[:n]
    image = np.add.outer(np.arange(100), np.arange(75)).astype(np.uint8).ravel()
    yield "an image", np.unpackbits(image)[:n]
    code = b"".join(f.__code__.co_code for f in vars(Counter).values() if hasattr(f, "__code__"))
    yield "code", np.resize(np.unpackbits(np.frombuffer(code, np.uint8)), n)
    yield "another pattern", parse("taps:21,22").bits(0, n)


@pytest.mark.parametrize("name", ["PRBS7", "PRBS9", "PRBS31", "word:0xA5"])
def test_structured_streams_are_never_aligned_to_nor_held(counting, parse, name):
    pattern = parse(name)
    for what, bits in _structured(parse):
        bits = np.asarray(bits, dtype=np.uint8)
        assert not any(s.aligned for s in counting.run(name, bits)), what
        if pattern.period < 64:
            continue  # another word may well agree with most bits of a short one that was held
        # Nor does a place that was held before live on in it.
        received = np.concatenate([pattern.bits(0, 8000), bits])
        tally = counting.total(counting.run(name, received))
        assert abs(tally.unaligned - len(bits)) < 600, what


@pytest.mark.campaign
@pytest.mark.parametrize("name", ["PRBS11", "PRBS13", "PRBS15", "PRBS20", "QRSS", "PRBS23", "PRBS29"])
def test_structured_streams_with_all_patterns(counting, parse, name):
    test_structured_streams_are_never_aligned_to_nor_held(counting, parse, name)


def test_it_is_found_again_after_hours_and_nothing_is_kept_meanwhile(counting, parse):
    rng = np.random.default_rng(6)
    pattern = parse("PRBS31")
    counter = Counter(pattern)
    segments = counter.feed(pack(pattern.bits(0, 80_000), "lsb"))
    pending = 0
    for _ in range(100):  # a quarter of an hour at 48 kbit/s
        segments += counter.feed(rng.integers(0, 256, 50_000, dtype=np.uint8))
        pending = max(pending, counter.received - counter.decided)
    assert pending < 2_200_000  # bits, whatever the length of the outage
    begin = counter.received
    segments += counter.feed(pack(pattern.bits(987_654_321, 4_000_000), "lsb")) + counter.finish()
    total = counting.check(segments, begin + 4_000_000)
    aligned = [e for e in counting.events(segments) if e.kind == "aligned"]
    assert abs(aligned[1].bit - begin) <= 150
    assert abs(total.unaligned - 40_000_000) <= 300
    assert total.errors <= 80
