"""The counter equals the oracle's minimum: errors, slips and places, on random streams; and the truth nearly."""

from collections import Counter as Tallied

import numpy as np
import pytest

BATCH = 64
HARDLY = 1.25  # times the spacing that tells two slips apart; up to there chance may hide a place


def _expected(stream, cuts):
    """Events and where they lie by the oracle."""
    out = [("aligned", 0, None)]
    for (old, was), (new, turned), cut in zip(stream.offsets, stream.offsets[1:], cuts, strict=False):
        if old != new:
            out.append(("slip", cut, old - new))
        if was != turned:
            out.append(("inversion", cut, None))
    return out


def _led_astray(made, stream, cuts):
    """Whether a burst let the oracle explain more away than happened: a cut far from the true one."""
    off = made.by_ber(made.TOLERANCE, stream.ber)
    return bool(stream.bursts) and any(
        abs(cut - true) > off for cut, true in zip(cuts, stream.changes, strict=True)
    )


def _compare(counting, made, stream, errors, cuts):
    """Class of the stream and whether the counter equals the oracle; invariants are asserted for all."""
    rng = np.random.default_rng(stream.seed + 1)
    chunks = made.cuts_into_chunks(rng, len(stream.received) // 8)
    segments = counting.run(stream.name, stream.received, chunks, slip_unit=stream.unit)
    got = [(e.kind, e.bit, e.data["bits"] if e.kind == "slip" else None) for e in counting.events(segments)]
    tally = counting.total(segments)
    same = tally.errors == errors and tally.unaligned == 0 and got == _expected(stream, cuts)
    if same:
        places = [s for s in segments if s.aligned]
        cut_at = [0, *cuts, len(stream.received)]
        for s in places:
            at = max(k for k, cut in enumerate(cut_at[:-1]) if cut <= s.start)
            index, turned = stream.offsets[at]
            assert s.inverted == bool(turned)
            assert (s.place - (stream.origin + index + s.start)) % counting.Counter_period(stream.name) == 0
    return same


@pytest.fixture(scope="session")
def judged(counting, made, oracle, parse):
    counting.Counter_period = lambda name: parse(name).period

    def judge(seeds, **how):
        result, failed = Tallied(), []
        for at in range(0, len(seeds), BATCH):
            streams = [made.make(parse, seed, **how) for seed in seeds[at : at + BATCH]]
            answers = oracle.count_many([(s.received, s.master, s.offsets) for s in streams])
            for stream, (errors, cuts) in zip(streams, answers, strict=True):
                same = _compare(counting, made, stream, errors, cuts)
                kind = "burst" if stream.bursts else "inversion" if any(t for _, t in stream.offsets) else ""
                kind = kind or ("slips" if stream.changes else "plain")
                if stream.closest < HARDLY and not same:
                    result["hardly further than stated, not equal", kind] += stream.closest >= 1
                    result["closer than stated", kind] += stream.closest < 1
                    continue
                if stream.closest < 1 or _led_astray(made, stream, cuts):
                    result["closer than stated", kind] += 1
                    continue
                result["equal" if same else "not equal", kind] += 1
                if not same:
                    failed.append(stream.seed)
                    continue
                off = made.by_ber(made.TOLERANCE, stream.ber)
                assert all(abs(a - b) <= off for a, b in zip(cuts, stream.changes, strict=True))
                # What can be explained away near a cut, 1.27 errors on average at a BER of 0.3.
                assert stream.bursts or stream.errors - errors <= 6 * (len(cuts) + 1) * max(
                    stream.ber * 10, 0.3
                )
        return result, failed

    return judge


def test_the_quick_oracle_equals_the_plain_one(oracle, made, parse):
    streams = [made.make(parse, seed, slips=seed % 4, spread=0.02, near=64) for seed in range(24)]
    taken = [(s.received[:900], s.master, s.offsets) for s in streams]
    assert oracle.count_many(taken) == [oracle.count(*stream) for stream in taken]


def test_the_independent_register_equals_the_pattern(made, parse):
    for seed in range(12):
        stream = made.make(parse, seed, ber=0.0, slips=0, bursts=0, spread=0.1)
        expected = parse(stream.name).bits(stream.origin, len(stream.received))
        assert np.array_equal(stream.received, expected), stream.name


def test_random_streams_equal_the_oracle(judged):
    result, failed = judged(range(128), spread=0.6)
    assert not failed, (result, failed)
    assert sum(n for (verdict, _), n in result.items() if verdict == "equal") >= 45


def test_streams_in_which_another_place_looked_right_equal_the_oracle(judged):
    # In each of them a place was taken in that was like the right one for a while, and fitted a burst better.
    result, failed = judged([1_000_920, 1_000_923, 1_001_009])
    assert not failed
    assert sum(n for (verdict, _), n in result.items() if verdict == "equal") == 3


@pytest.mark.campaign
@pytest.mark.parametrize("part", range(20))
def test_campaign(judged, part):
    # Chance that errors hide a place, or lend one to a burst, leaves a few: at most 1 stream in 400.
    seeds = range(1_000_000 + 512 * part, 1_000_000 + 512 * (part + 1))
    result, failed = judged(seeds)
    print(f"part {part}: {dict(result)}, not equal: {failed}")
    equal = sum(n for (verdict, _), n in result.items() if verdict == "equal")
    hardly = sum(n for (verdict, _), n in result.items() if verdict.startswith("hardly"))
    assert equal >= 250
    assert len(failed) <= 1 + equal // 400
    assert hardly <= 10
