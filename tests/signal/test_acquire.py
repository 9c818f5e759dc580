"""Acquisition: patterns are found, also through many errors, and nothing else ever is.

The ordinary tests are a sample; `pytest -m campaign` runs the full counts.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from math import gcd
from pathlib import Path

import numpy as np
import pytest

from harness.signal.acquire import Acquirer
from harness.signal.bits import unpack
from harness.signal.evidence import has_a_rhythm, log_chance, log_limit, most_mismatches
from harness.signal.patterns import Pattern, PatternError, known_patterns, parse_pattern

REGISTERS = [row.name + suffix for row in known_patterns() for suffix in ("", "-reversed")]
WORDS = ["word:1010", "word:0xA5", "word:1110", "word:0x137F", "word:0x123456789ABCDEF", "taps:2,3"]
SOURCES = ["bernoulli:0.4", "bernoulli:0.1"]
EVERY = [*REGISTERS, *WORDS, *SOURCES]


def received(pattern: Pattern, place: int, count: int, ber: float, inverted: bool, rng) -> np.ndarray:
    errors = (rng.random(count) < ber).astype(np.uint8)
    return pattern.bits(place, count) ^ errors ^ np.uint8(inverted)


def is_right(pattern: Pattern, found, place: int, inverted: bool) -> bool:
    """The right place and polarity, or ones that cannot be told from them."""
    here = pattern.bits(found.place, 400) ^ np.uint8(found.inverted)
    return np.array_equal(here, pattern.bits(place, 400) ^ np.uint8(inverted))


def trials(name: str, count: int, bits: int, ber: float, seed: int) -> tuple[int, int, float]:
    """How many were found, how many of them wrongly, and the median time of one in seconds."""
    pattern = parse_pattern(name)
    acquirer = Acquirer(pattern)
    rng = np.random.default_rng(seed)
    hits = wrong = 0
    times = []
    for _ in range(count):
        place = int(rng.integers(pattern.period or 10**6))
        inverted = bool(rng.integers(2))
        stream = received(pattern, place, bits, ber, inverted, rng)
        began = time.perf_counter()
        found = acquirer.search(stream, near=place + int(rng.integers(-(10**5), 10**5)))
        times.append(time.perf_counter() - began)
        if found is not None:
            hits += 1
            wrong += not is_right(pattern, found, place, inverted)
    return hits, wrong, float(np.median(times))


@pytest.mark.parametrize("name", REGISTERS)
def test_registers_are_found_in_8192_bits_at_ber_0_3(name):
    hits, wrong, _ = trials(name, 25, 8192, 0.3, seed=1)
    assert (hits, wrong) == (25, 0)


@pytest.mark.campaign
@pytest.mark.parametrize("name", REGISTERS)
def test_registers_are_found_999_times_of_1000_in_8192_bits_at_ber_0_3(name):
    hits, wrong, _ = trials(name, 1000, 8192, 0.3, seed=2)
    assert hits >= 999
    assert wrong == 0


@pytest.mark.parametrize("name", [*REGISTERS, "word:1010", "word:0xA5", "bernoulli:0.5"])
@pytest.mark.parametrize(("bits", "ber"), [(256, 0.0), (512, 0.02), (1024, 0.1), (2048, 0.2)])
def test_few_errors_need_few_bits(name, bits, ber):
    hits, wrong, _ = trials(name, 12, bits, ber, seed=3)
    assert hits >= 9  # of 12: at 256 bits the shares of ONEs on the fresh ones may weaken the evidence
    assert wrong == 0


@pytest.mark.parametrize("name", ["PRBS7", "PRBS15", "PRBS20", "PRBS31-reversed"])
def test_ber_of_0_42_is_found_in_65536_bits(name):
    assert trials(name, 3, 65_536, 0.42, seed=4)[:2] == (3, 0)


@pytest.mark.parametrize("name", WORDS)
def test_words_are_found_at_ber_0_3(name):
    hits, wrong, _ = trials(name, 20, 8192, 0.3, seed=5)
    assert hits >= 18
    assert wrong == 0


@pytest.mark.parametrize("name", ["PRBS15", "PRBS23", "QRSS", "word:0x137F"])
def test_what_is_found_is_said_as_it_is(name):
    pattern = parse_pattern(name)
    rng = np.random.default_rng(6)
    stream = received(pattern, 12345, 4096, 0.05, True, rng)
    found = Acquirer(pattern).search(stream)
    assert found is not None
    assert found.place == 12345 % pattern.period
    assert found.inverted
    assert found.found_on + found.verified_on == 4096
    fresh = stream[found.found_on :]
    expected = 1 - pattern.bits(12345 + found.found_on, found.verified_on)
    assert found.mismatches == int(np.count_nonzero(fresh != expected)) > 0
    assert found.log_chance < np.log(1e-12)


def test_polarity_is_relative_to_the_pattern_given():
    stream = parse_pattern("PRBS23").bits(999, 4096)
    assert not Acquirer(parse_pattern("PRBS23")).search(stream).inverted
    found = Acquirer(parse_pattern("PRBS23-inverted")).search(stream)
    assert found.inverted
    assert found.place == 999


def test_a_word_that_is_its_own_complement_is_not_called_inverted():
    for start in range(4):
        found = Acquirer(parse_pattern("word:1010")).search(parse_pattern("word:1010").bits(start, 512))
        assert not found.inverted
        assert found.place == start % 2


@pytest.mark.parametrize("cut", [100, 2000, 3500])
def test_the_place_after_a_slip_in_the_stretch_is_found_from_what_follows_it(cut):
    """The fresh bits lie after the slip, so only the later place can be accepted."""
    pattern = parse_pattern("PRBS31")
    stream = np.concatenate([pattern.bits(50_000, cut), pattern.bits(50_000 + cut + 13, 8192 - cut)])
    found = Acquirer(pattern).search(stream)
    assert found is not None
    assert found.place == 50_013


def test_bursts_do_not_hide_a_short_word():
    """Bursts of a dozen bits raise the spectrum of mismatches broadly: that is no other word's rhythm."""
    rng = np.random.default_rng(7)
    pattern = parse_pattern("word:0xA5")
    for _ in range(20):
        wrong = np.zeros(8192, dtype=np.uint8)
        for start in rng.integers(0, 8150, 120):
            wrong[start : start + 24] ^= rng.integers(0, 2, 24).astype(np.uint8)[: len(wrong) - start]
        found = Acquirer(pattern).search(pattern.bits(3, 8192) ^ wrong)
        assert found is not None
        assert found.place == 3


def test_a_rhythm_is_seen_in_periodic_mismatches_and_not_in_independent_ones():
    rng = np.random.default_rng(8)
    for ber in (0.06, 0.2, 0.4):
        assert not any(has_a_rhythm(rng.random(8192) < ber) for _ in range(20))
    for period in (3, 8, 10, 33, 100):
        word = rng.random(period) < 0.3
        word[0], word[1] = True, False
        assert has_a_rhythm(np.resize(word, 8192) ^ (rng.random(8192) < 0.1))


@pytest.mark.parametrize("name", ["word:1", "word:0", "word:0xFF", "bernoulli:0", "bernoulli:1"])
def test_constant_patterns_cannot_be_looked_for(name):
    with pytest.raises(PatternError, match="dead line"):
        Acquirer(parse_pattern(name))


@pytest.mark.parametrize("name", EVERY)
@pytest.mark.parametrize("count", [0, 1, 7, 40, 79, 80, 81, 127])
def test_short_stretches_are_not_enough_or_right(name, count):
    pattern = parse_pattern(name)
    found = Acquirer(pattern).search(pattern.bits(77, count))
    assert found is None or is_right(pattern, found, 77, False)


def test_log_chance_bounds_the_binomial_tail():
    """Exact sums of 40 to 2 048 coin flips; the bound is never under them and within a factor of 60."""
    from math import comb, log

    for n in (40, 200, 2048):
        total = 0
        for k in range(n // 2):
            total += comb(n, k)
            exact = log(total) - n * log(2)
            assert exact <= log_chance(n, k) + 1e-9
            assert log_chance(n, k) <= exact + log(60)
    # The rule for 2 048 fresh bits, as a whole search of 80 candidates in 10 000 searches at 1e-12.
    most = most_mismatches(2048, log_limit(1e-12))
    tail = sum(comb(2048, k) for k in range(most + 1)) / 2**2048
    assert tail * 80 * 10_000 <= 1e-12
    assert most >= 798


def test_most_mismatches_is_the_last_that_suffices():
    for n in (10, 64, 100, 1000):
        for limit in (-1.0, -20.0, -41.0):
            most = most_mismatches(n, limit)
            assert all(log_chance(n, k) <= limit for k in range(most + 1))
            assert log_chance(n, most + 1) > limit


# --- what is no pattern -------------------------------------------------------------------------------------


def python_text() -> bytes:
    """Readable text of this machine: the standard library's sources."""
    library = Path(sys.modules["os"].__file__).parent
    return b"".join(path.read_bytes() for path in sorted(library.glob("*.py"))[:60])


def executable() -> bytes:
    return Path(sys.executable).resolve().read_bytes()[:4_000_000]


def words_of_every_length(rng, count: int) -> Iterator[tuple[str, np.ndarray, np.ndarray | None]]:
    periods = [row.period for row in known_patterns() if row.period <= count]
    lengths = [*range(2, 70), 73, 89, 96, 100, 120, 150, 151, 200, 217, 255, 256, 341, 400, 500, 600, 1000]
    lengths += [4095, 4096, 4681, 6000]
    lengths += [p // k + d for p in periods for k in (1, 2, 3) for d in (-1, 0, 1)]
    lengths += [k * p for p in periods for k in (2, 3, 4, 8)]
    for length in sorted({length for length in lengths if 2 <= length <= count}):
        word = rng.integers(0, 2, length).astype(np.uint8)
        yield f"word of {length}", np.resize(word, count), word
        noisy = np.resize(word, count) ^ (rng.random(count) < 0.05)
        yield f"word of {length} with errors", noisy.astype(np.uint8), word
    for period in periods:
        for _ in range(3):
            word = rng.integers(0, 2, period).astype(np.uint8)
            yield f"random word of the period {period}", np.resize(word, count), word


def structured_streams(rng, count: int) -> Iterator[tuple[str, np.ndarray, np.ndarray | None]]:
    """Name, stream, and the word that it repeats, if it does."""
    size = count // 8
    yield "silence", np.zeros(count, np.uint8), np.zeros(1, np.uint8)
    yield "all ONEs", np.ones(count, np.uint8), np.ones(1, np.uint8)
    for share in (1e-3, 3e-3, 0.01, 0.03, 0.05, 0.1, 0.2, 0.3, 0.4, 0.45, 0.55, 0.7, 0.9, 0.97, 0.99, 0.999):
        yield f"share {share}", (rng.random(count) < share).astype(np.uint8), None
    single = np.zeros(count, np.uint8)
    single[count // 2] = 1
    yield "a single ONE", single, None
    yield from words_of_every_length(rng, count)
    texts, binaries = python_text(), executable()
    for order in ("lsb", "msb"):
        for label, source in (("text", texts), ("executable", binaries)):
            for start in rng.integers(0, len(source) - size, 20).tolist():
                yield f"{label}, {order}", unpack(source[start : start + size], order), None
        for width in (48, 64, 100, 127, 128, 200, 256):
            y, x = np.mgrid[0 : size // width + 1, 0:width]
            noise = rng.integers(0, 4, x.shape)
            picture = (x * 3 + y * 2 + noise).astype(np.uint8).ravel()[:size]
            yield f"picture {width} wide, {order}", unpack(picture, order), None
            disc = np.where((x - width / 2) ** 2 + (y - 20) ** 2 < 300, 255, 0).astype(np.uint8)
            yield f"drawing {width} wide, {order}", unpack(disc.ravel()[:size], order), None
        wave = (127 + 120 * np.sin(np.arange(size) / 7.3)).astype(np.uint8)
        yield f"sine samples, {order}", unpack(wave, order), None
        yield f"counter, {order}", unpack((np.arange(size) % 256).astype(np.uint8), order), None
        two = np.arange(size // 2 + 1, dtype=">u2").view(np.uint8)[:size]
        yield f"two-byte counter, {order}", unpack(two, order), None
    half = rng.integers(0, 2, count // 2 + 1).astype(np.uint8)
    yield "Manchester code", np.stack([half, 1 - half], axis=1).ravel()[:count], None
    for run in (4, 8, 32, 128):
        yield (
            f"runs of {run}",
            np.repeat(rng.integers(0, 2, count // run + 1), run)[:count].astype("u1"),
            None,
        )
    frames = np.ones((count // 10 + 1, 10), np.uint8)
    frames[:, 0] = 0
    frames[:, 1:9] = rng.integers(0, 2, (len(frames), 8))
    yield "start and stop bits", frames.ravel()[:count], None


def repeats(pattern: Pattern, word: np.ndarray | None) -> bool:
    """Whether a repeated word is the pattern, in either polarity, or was so before a few errors."""
    if word is None or pattern.period is None:
        return False
    length = len(word) * pattern.period // gcd(len(word), pattern.period)
    if length > 1 << 20:
        return False
    stream = np.resize(word, length + 64)
    for inverted in (False, True):
        for place in range(min(pattern.period, 70)):
            if np.array_equal(pattern.bits(place, len(stream)) ^ np.uint8(inverted), stream):
                return True
    return False


def false_alignments(names: list[str], counts: tuple[int, ...], seed: int) -> tuple[list[str], int]:
    wrong = []
    streams = 0
    for count in counts:
        made = list(structured_streams(np.random.default_rng(seed), count))
        streams = len(made)
        for name in names:
            pattern = parse_pattern(name)
            acquirer = Acquirer(pattern)
            for label, stream, word in made:
                if acquirer.search(stream) is not None and not repeats(pattern, word):
                    wrong.append(f"{name} in {label}, {count} bits")
    return wrong, streams


@pytest.mark.parametrize("name", ["PRBS7", "PRBS9-reversed", "PRBS13", "PRBS31", "QRSS", *WORDS])
def test_structured_streams_are_never_aligned_to(name):
    wrong, streams = false_alignments([name], (2048,), seed=10)
    assert streams >= 300
    assert wrong == []


@pytest.mark.campaign
@pytest.mark.parametrize("name", EVERY)
def test_structured_streams_are_never_aligned_to_at_any_length(name):
    wrong, streams = false_alignments([name], (256, 512, 1024, 2048, 8192, 16_384), seed=11)
    assert streams >= 300
    assert wrong == []


@pytest.mark.parametrize("name", ["PRBS7", "PRBS15", "PRBS20", "PRBS31", "word:1010", "bernoulli:0.4"])
def test_noise_is_never_aligned_to(name):
    acquirer = Acquirer(parse_pattern(name))
    rng = np.random.default_rng(12)
    for _ in range(60):
        assert acquirer.search(rng.integers(0, 2, int(rng.choice([128, 512, 2048]))).astype("u1")) is None


@pytest.mark.parametrize("name", ["bernoulli:0.02", "bernoulli:0.9", "word:0xFE"])
def test_few_ones_in_pattern_and_stream_are_no_evidence(name):
    """A dead line agrees with 98 of 100 bits of a source with 2 % ONEs; so does noise with as few of them."""
    acquirer = Acquirer(parse_pattern(name))
    rng = np.random.default_rng(15)
    for share in (0, 0.001, 0.02, 0.1, 0.9, 0.98, 1):
        assert acquirer.search((rng.random(4096) < share).astype(np.uint8)) is None


@pytest.mark.campaign
def test_no_pattern_is_found_in_a_hundred_thousand_random_stretches():
    """1e5 stretches in all, shared among the patterns and four lengths."""
    rng = np.random.default_rng(13)
    stretches = 0
    for name in EVERY:
        acquirer = Acquirer(parse_pattern(name))
        for _ in range(100_000 // (4 * len(EVERY)) + 1):
            for count in (512, 1024, 2048, 8192):
                assert acquirer.search(rng.integers(0, 2, count, dtype=np.uint8)) is None
                stretches += 1
    assert stretches >= 100_000


def test_a_text_is_not_taken_for_another_text():
    texts = python_text()
    pattern = parse_pattern("file:a", read=lambda _: texts[:40_000])
    acquirer = Acquirer(pattern)
    for start in range(50_000, 500_000, 30_000):
        assert acquirer.search(unpack(texts[start : start + 1024], "lsb")) is None
    rng = np.random.default_rng(14)
    for start in (0, 1234, 39_000):
        stream = pattern.bits(8 * start + 3, 8192) ^ (rng.random(8192) < 0.1)
        assert acquirer.search(stream.astype("u1")).place == 8 * start + 3


def test_a_source_is_found_within_its_reach_of_the_place_asked_for():
    pattern = parse_pattern("bernoulli:0.5:3")
    acquirer = Acquirer(pattern)
    stream = pattern.bits(50_000_000, 2048)
    assert acquirer.search(stream) is None
    assert acquirer.search(stream, near=50_250_000).place == 50_000_000
