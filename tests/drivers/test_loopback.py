"""The loopback gives back exactly what its channel makes of what was sent, in bounded memory."""

from __future__ import annotations

import threading
import time
from contextlib import suppress

import numpy as np
import pytest
from pydantic import ValidationError

from drivers.contract import EndOfStream, Interrupted, LinkLost, OutOfLimits, SendRefused
from drivers.links.loopback import LoopbackLink, LoopbackSection


def loopback(nominal_bps: float | None = None, **keys: object) -> LoopbackLink:
    return LoopbackLink(LoopbackSection.model_validate(keys), nominal_bps)


def random_bytes(count: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 256, count, dtype=np.uint8)


def pass_through(link: LoopbackLink, data: np.ndarray, cuts: np.random.Generator | None = None) -> np.ndarray:
    """Send `data` in one thread and receive in another until the end of the stream."""
    largest = 100_000

    def size() -> int:
        return int(cuts.integers(1, largest)) if cuts is not None else largest

    def sender() -> None:
        sent = 0
        while sent < len(data):
            sent += link.send(memoryview(data[sent : sent + size()]), 5.0)
        link.finish_sending()

    received = []
    with link:
        thread = threading.Thread(target=sender)
        thread.start()
        try:
            while True:
                buffer = np.empty(size(), dtype=np.uint8)
                received.append(buffer[: link.receive(memoryview(buffer), 5.0)])
        except EndOfStream:
            pass
        thread.join()
    return np.concatenate(received)


def differing_bits(one: np.ndarray, other: np.ndarray) -> int:
    return int(np.bitwise_count(one ^ other).sum())


def test_without_a_channel_every_byte_comes_back_in_order() -> None:
    data = random_bytes(3_000_000)
    got = pass_through(loopback(buffer_bytes=10_007), data, np.random.default_rng(2))
    np.testing.assert_array_equal(got, data)


@pytest.mark.parametrize("ber", [0.0, 1e-4, 1e-2, 0.3, 1.0])
def test_a_seed_gives_the_same_errors_however_the_stream_is_cut(ber: float) -> None:
    data = random_bytes(400_000)
    channel = {"model": "independent", "ber": ber, "seed": 7}
    whole = pass_through(loopback(channel=channel, buffer_bytes=1 << 20), data)
    for seed in range(3):
        cut = pass_through(loopback(channel=channel, buffer_bytes=4096), data, np.random.default_rng(seed))
        np.testing.assert_array_equal(cut, whole)
    # Six standard deviations: chance fails this once in 5e8.
    bits = 8 * len(data)
    assert abs(differing_bits(whole, data) - ber * bits) <= 6 * (bits * ber * (1 - ber)) ** 0.5


def test_another_seed_and_another_place_in_the_chain_give_other_errors() -> None:
    data = random_bytes(100_000)
    seven, eight = (
        pass_through(loopback(channel={"model": "independent", "ber": 1e-2, "seed": seed}), data)
        for seed in (7, 8)
    )
    assert differing_bits(seven, eight) > 0
    twice = [{"model": "independent", "ber": 1e-2, "seed": 7}] * 2
    errors = differing_bits(pass_through(loopback(channel=twice), data), data)
    # The same errors twice would cancel; independent ones nearly add up to 2 %.
    assert errors > 0.018 * 8 * len(data)


def test_the_same_object_does_not_repeat_its_errors_after_it_was_opened_again() -> None:
    data = random_bytes(50_000)
    link = loopback(channel={"model": "independent", "ber": 1e-2, "seed": 7})
    first, second = pass_through(link, data), pass_through(link, data)
    assert differing_bits(first, second) > 0


@pytest.mark.parametrize("order", ["lsb", "msb"])
@pytest.mark.parametrize("bits", [0, 5, 8, 803, 100_000, 800_003])
def test_a_delay_of_bits_shifts_the_stream_by_exactly_so_many(bits: int, order: str) -> None:
    data = random_bytes(50_001)
    link = loopback(delay_bits=bits, bit_order=order)
    got = pass_through(link, data, np.random.default_rng(3))
    numpy_order = "little" if order == "lsb" else "big"
    sent = np.unpackbits(data, bitorder=numpy_order)
    back = np.unpackbits(got, bitorder=numpy_order)
    expected = np.concatenate([np.ones(bits, dtype=np.uint8), sent])
    np.testing.assert_array_equal(back, expected[: len(expected) // 8 * 8])
    assert link.traits.whole_bytes is (bits % 8 == 0)


def test_a_delay_of_seconds_holds_bytes_back_and_then_gives_them_all() -> None:
    with loopback(delay_s=0.25) as link:
        buffer = memoryview(bytearray(100))
        began = time.monotonic()
        assert link.send(memoryview(b"early"), 1.0) == 5
        assert link.receive(buffer, 0.05) == 0
        assert link.receive(buffer, 5.0) == 5
        assert time.monotonic() - began >= 0.25
        assert bytes(buffer[:5]) == b"early"


def test_bytes_sent_later_come_later_where_there_is_a_delay() -> None:
    with loopback(delay_s=0.3) as link:
        buffer = memoryview(bytearray(100))
        link.send(memoryview(b"one"), 1.0)
        time.sleep(0.15)
        link.send(memoryview(b"two"), 1.0)
        assert link.receive(buffer, 5.0) == 3
        assert link.receive(buffer, 0.0) == 0
        assert link.receive(buffer, 5.0) == 3
        assert bytes(buffer[:3]) == b"two"


def test_memory_is_bounded_and_a_full_buffer_says_so() -> None:
    with loopback(buffer_bytes=1000) as link:
        data = memoryview(random_bytes(5000))
        assert link.send(data, 0.0) == 1000
        assert link.send(data, 0.02) == 0
        buffer = memoryview(bytearray(300))
        assert link.receive(buffer, 0.0) == 300
        assert link.send(data, 0.0) == 300


def test_a_channel_that_makes_more_bytes_than_there_is_room_for_loses_none() -> None:
    data = random_bytes(60_000)
    channel = {"model": "byte_loss", "kind": "repeat", "count": 700, "every_bytes": 1000, "seed": 1}
    pieces = [data[:1000]]
    for at in range(1000, len(data), 1000):
        pieces += [data[at - 700 : at], data[at : at + 1000]]
    got = pass_through(loopback(channel=channel, buffer_bytes=1111), data, np.random.default_rng(4))
    np.testing.assert_array_equal(got, np.concatenate(pieces))


def test_bits_held_back_by_the_channel_come_at_the_end_and_on_drain() -> None:
    data = random_bytes(100)
    channel = {"model": "awgn", "modulation": "64qam", "ebn0_db": 90}
    np.testing.assert_array_equal(pass_through(loopback(channel=channel), data), data)
    with loopback(channel=channel) as link:
        buffer = np.empty(200, dtype=np.uint8)
        link.send(memoryview(data), 0.0)
        assert link.receive(memoryview(buffer), 0.0) == 99  # 800 bits are 133 symbols and 2 bits
        assert link.drain(1.0)
        assert link.receive(memoryview(buffer[99:]), 0.0) == 1
        np.testing.assert_array_equal(buffer[:100], data)


def test_draining_a_full_loopback_neither_waits_nor_changes_the_order() -> None:
    data = random_bytes(600)
    channel = [{"model": "awgn", "modulation": "64qam", "ebn0_db": 90}]
    with loopback(channel=channel, buffer_bytes=100) as link:
        got, sent = [], 0
        while sent < len(data):
            sent += link.send(memoryview(data[sent : sent + 64]), 0.0)
            assert link.drain(60.0)
            buffer = np.empty(41, dtype=np.uint8)
            got.append(buffer[: link.receive(memoryview(buffer), 0.0)])
        link.finish_sending()
        with suppress(EndOfStream):
            while True:
                buffer = np.empty(41, dtype=np.uint8)
                got.append(buffer[: link.receive(memoryview(buffer), 0.0)])
    np.testing.assert_array_equal(np.concatenate(got), data)


def test_a_device_that_swallows_everything_takes_bytes_for_ever_and_gives_none() -> None:
    with loopback(channel={"model": "dropout", "at_bits": [0]}, buffer_bytes=100) as link:
        for _ in range(50):
            assert link.send(memoryview(bytes(100)), 0.0) == 100
        assert link.receive(memoryview(bytearray(10)), 0.0) == 0


def test_the_link_tells_its_channel_and_the_seed_that_was_drawn() -> None:
    link = loopback(channel=[{"model": "independent", "ber": 1e-3}])
    told = link.describe()["channel 1"]
    assert told.startswith("independent: ber 0.001, seed ")
    data = random_bytes(20_000)
    again = loopback(channel={"model": "independent", "ber": 1e-3, "seed": int(told.split()[-1])})
    np.testing.assert_array_equal(pass_through(link, data), pass_through(again, data))


def test_interrupt_wakes_a_sender_and_a_receiver_until_the_next_open() -> None:
    link = loopback(buffer_bytes=10)
    link.open()
    link.send(memoryview(bytes(10)), 0.0)
    empty = loopback()
    empty.open()
    seen: list[str] = []

    def wait(name: str, call: object, *arguments: object) -> None:
        try:
            call(*arguments)  # type: ignore[operator]
        except Interrupted:
            seen.append(name)

    threads = [
        threading.Thread(target=wait, args=("sender", link.send, memoryview(bytes(10)), 60.0)),
        threading.Thread(target=wait, args=("receiver", empty.receive, memoryview(bytearray(10)), 60.0)),
    ]
    for thread in threads:
        thread.start()
    time.sleep(0.05)
    link.interrupt()
    empty.interrupt()
    for thread in threads:
        thread.join(10.0)
    assert sorted(seen) == ["receiver", "sender"]
    with pytest.raises(Interrupted):
        link.receive(memoryview(bytearray(1)), 0.0)
    link.close()
    with link:
        assert link.receive(memoryview(bytearray(1)), 0.0) == 0


def test_a_closed_loopback_is_lost_and_a_finished_one_takes_nothing() -> None:
    link = loopback()
    with pytest.raises(LinkLost):
        link.send(memoryview(b"x"), 0.0)
    with link:
        link.finish_sending()
        with pytest.raises(SendRefused):
            link.send(memoryview(b"x"), 0.0)
        with pytest.raises(EndOfStream):
            link.receive(memoryview(bytearray(1)), 1.0)


def test_a_knob_turns_what_is_sent_from_then_on_and_keeps_within_its_range() -> None:
    link = loopback(channel=[{"model": "independent", "ber": 0.0, "seed": 3}])
    knob = link.knobs()["ber"]
    knob.turn(0.25)  # before open: instruments are set first
    data = random_bytes(100_000)
    assert abs(differing_bits(pass_through(link, data), data) - 200_000) < 6 * 388
    knob.turn(0.0)
    assert knob.get() == 0.0
    assert differing_bits(pass_through(link, data), data) == 0
    for wrong in (float("nan"), -0.1, 1.1):
        with pytest.raises(OutOfLimits):
            knob.turn(wrong)


def test_two_knobs_of_one_name_are_told_apart() -> None:
    link = loopback(channel=[{"model": "independent", "ber": 0.1}, {"model": "independent", "ber": 0.2}])
    assert {name: knob.get() for name, knob in link.knobs().items()} == {"ber": 0.1, "ber@2": 0.2}


def test_a_single_table_is_a_channel_too_and_unknown_keys_are_refused() -> None:
    one = LoopbackSection.model_validate({"channel": {"model": "independent", "ber": 1e-6}})
    assert len(one.channel) == 1
    for wrong in (
        {"model": "independent", "ber": 1e-6, "bir": 1},
        {"model": "independent", "ber": 1.5},
        {"model": "independant", "ber": 1e-6},
    ):
        with pytest.raises(ValidationError):
            LoopbackSection.model_validate({"channel": [wrong]})


def test_rare_errors_keep_their_rate_and_never_overflow() -> None:
    # 1e12 bits cannot be sent here, so the gaps themselves are asked: their mean must be 1e12 within
    # six standard deviations, and none may overflow.
    from drivers.channel.independent import Gaps

    gaps = Gaps(1e-12, np.random.default_rng(5))
    places = gaps.take(10**16)
    assert abs(len(places) - 10_000) < 600
    assert (np.diff(places) > 0).all()
    rarest = Gaps(1e-300, np.random.default_rng(5))
    assert len(rarest.take(10**17)) == 0


def test_the_link_tells_its_channel_in_plain_words() -> None:
    link = loopback(
        channel=[{"model": "independent", "ber": 1e-6}, {"model": "slip", "bits": -8, "at_bits": [80, 160]}]
    )
    told = link.describe()
    assert told["channel 1"].startswith("independent: ber 1e-6, seed ")
    assert told["channel 2"].startswith("slip: bits -8, at_bits 80, 160, seed ")


def test_each_sitting_of_a_run_meets_errors_of_its_own() -> None:
    data = np.zeros(100_000, dtype=np.uint8)
    channel = [
        {"model": "independent", "ber": 0.01, "seed": 7},
        {"model": "independent", "ber": 0.02, "seed": 7},
    ]

    def errors(sitting: int) -> bytes:
        link = loopback(channel=channel)
        link.begin_sitting(sitting)
        return pass_through(link, data).tobytes()

    first, again, third = errors(0), errors(1), errors(2)
    assert first == errors(0) == pass_through(loopback(channel=channel), data).tobytes()
    assert again == errors(1)
    assert len({first, again, third}) == 3
    together = [np.frombuffer(one, np.uint8) for one in (first, again)]
    # Independent streams share errors by chance only: of about 23 500 in each some 700.
    assert int(np.bitwise_count(together[0] & together[1]).sum()) < 1_000
