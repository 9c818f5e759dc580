"""The ring keeps every byte, its order and its time; traffic knows what is on its way."""

from __future__ import annotations

import random
import threading
import time

from harness.bench.chronicle import Chronicle
from harness.bench.missing import Missing
from harness.bench.places import Places
from harness.bench.ring import JOIN_NS, Ring
from harness.bench.traffic import Traffic


def put(ring: Ring, data: bytes, at: int) -> int:
    done = 0
    while done < len(data):
        room = ring.room()
        part = data[done : done + len(room)]
        if not part:
            break
        room[: len(part)] = part
        ring.written(len(part), at)
        done += len(part)
    return done


def test_bytes_come_out_as_they_went_in_across_many_turns_of_the_ring():
    ring, rng = Ring(size=1000), random.Random(1)
    sent, got = bytearray(), bytearray()
    for step in range(2000):
        data = rng.randbytes(rng.randrange(0, 400))
        sent += data[: put(ring, data, step * 2 * JOIN_NS)]
        while rng.random() < 0.7 and (piece := ring.next_piece(0)) is not None:
            got += piece.data
            ring.give_back(piece)
    while (piece := ring.next_piece(0)) is not None:
        got += piece.data
        ring.give_back(piece)
    assert got == sent
    assert len(sent) > 100_000


def test_lost_bytes_keep_their_place_in_the_stream():
    ring = Ring(size=64)
    put(ring, b"abc", 1)
    ring.lost(5, 2)
    ring.lost(7, 3)
    put(ring, b"def", 4)
    pieces = [ring.next_piece(0) for _ in range(3)]
    assert [(bytes(p.data), p.lost_bytes) for p in pieces] == [(b"abc", 0), (b"", 12), (b"def", 0)]


def test_bytes_that_trickle_in_are_joined_only_within_a_moment():
    ring = Ring(size=64)
    put(ring, b"a", 0)
    put(ring, b"b", JOIN_NS - 1)
    put(ring, b"c", 10 * JOIN_NS)
    assert bytes(ring.next_piece(0).data) == b"ab"


def test_a_closed_ring_is_drained_only_when_it_is_empty():
    ring = Ring(size=64)
    put(ring, b"abc", 0)
    ring.close()
    assert not ring.drained
    ring.give_back(ring.next_piece(0))
    assert ring.drained


def test_a_full_ring_has_no_room_until_something_is_given_back():
    ring = Ring(size=8)
    put(ring, b"12345678", 0)
    assert len(ring.room()) == 0
    assert not ring.wait_for_room(0.01)
    piece = ring.next_piece(0)
    threading.Timer(0.05, ring.give_back, [piece]).start()
    assert ring.wait_for_room(2)


def test_what_is_on_its_way_is_sent_less_received_and_given_up():
    traffic = Traffic()
    traffic.sent(1000, 1)
    traffic.received(300, 2)
    assert traffic.in_flight() == 700
    assert traffic.write_off() == 700
    assert traffic.in_flight() == 0
    traffic.received(100, 3)  # late, not lost after all
    assert traffic.written_off_bits == 600


def test_a_loss_shown_before_the_link_says_that_it_took_the_bits_is_counted_once():
    traffic = Traffic()
    traffic.offered(800)
    traffic.received(792, 1)  # back, with a byte lost, before `send` has returned
    traffic.lose(8)
    traffic.sent(800, 2)
    assert traffic.in_flight() == 0
    assert traffic.written_off_bits == 8


def test_invented_bits_do_not_stand_in_for_lost_ones():
    traffic = Traffic()
    traffic.sent(1000, 1)
    traffic.received(992, 2)
    traffic.invent(8)  # among the 992: 984 came back
    assert traffic.in_flight() == 16
    traffic.lose(8)
    assert traffic.in_flight() == 8
    assert not traffic.wait_for_quiet(0)
    assert not traffic.wait_for_room(15, 8, 0)
    assert traffic.wait_for_room(16, 8, 0)
    traffic.received(8, 3)
    assert traffic.in_flight() == 0


def test_a_loss_that_shows_late_has_had_its_bits_made_up_meanwhile():
    traffic = Traffic()
    traffic.sent(1000, 1)
    traffic.received(1000, 2)  # 8 of them lost, and 8 made up at the end
    traffic.lose(8)
    assert traffic.surplus() == 8
    traffic.invent(8)
    assert (traffic.in_flight(), traffic.surplus(), traffic.written_off_bits) == (0, 0, 8)


def test_a_loss_stays_one_when_an_invented_bit_comes_in_its_stead_before_it_is_noticed():
    traffic = Traffic()
    traffic.sent(1000, 1)
    traffic.received(900, 2)
    traffic.lose(8)
    traffic.received(100, 3)  # eight of them invented, which shows only now
    assert traffic.written_off_bits == 0
    traffic.invent(8)
    assert traffic.written_off_bits == 8
    assert traffic.in_flight() == 0


def test_times_of_sending_are_found_again():
    traffic = Traffic()
    for n in range(1, 100):
        traffic.sent(8, n * 1000)
    assert traffic.sent_by(5_500) == 40
    assert traffic.when_sent(39) == 5_000
    assert traffic.when_sent(40) == 6_000
    assert traffic.when_sent(10**6) is None


def test_the_loop_delay_is_that_of_the_bit_which_came_back():
    traffic = Traffic()
    for n in range(1, 101):
        traffic.sent(80, n * 1_000_000)
    delay = Places(traffic, period=32767, unit=8, most_in_flight=None).aligned(0, 0, 50_000_000, 80)
    assert delay.bits == 49 * 80
    assert delay.seconds == 0.049
    assert delay.modulo is None


def test_a_slip_is_taken_the_way_that_causality_allows():
    traffic = Traffic()
    traffic.sent(100_000, time.monotonic_ns())
    now = time.monotonic_ns()
    places = Places(traffic, period=127, unit=8, most_in_flight=None)
    places.aligned(0, 0, now, 8)
    # 508 bits forward are 508 bits lost, or as well 508 bits more of a stream that was sent twice.
    size, modulo = places.slipped(50_000, -8, 1016, now)
    assert (size, modulo) == (-8, 1016)
    # Near the end of what was sent nothing more can have been lost.
    places = Places(traffic, period=127, unit=8, most_in_flight=None)
    places.aligned(0, 0, now, 8)
    size, modulo = places.slipped(99_990, -16, 1016, now)
    assert size == 1000


def test_what_was_sent_just_now_is_not_given_up_however_long_ago_the_last_bits_came():
    second = 1_000_000_000
    traffic = Traffic()
    missing = Missing(traffic, Chronicle(0, 0), drain_ns=second)
    traffic.sent(800, second)
    traffic.received(800, second + 1)
    traffic.sent(800, 10 * second)
    missing.write_off(10 * second + 1)
    assert traffic.in_flight() == 800
    missing.write_off(11 * second)
    assert traffic.in_flight() == 0
    assert traffic.written_off_bits == 800
