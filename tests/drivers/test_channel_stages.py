"""What each channel model does to the bits, against a plain reference that works bit by bit."""

from __future__ import annotations

import numpy as np
import pytest
from pydantic import TypeAdapter, ValidationError

from drivers.channel.models import AnyChannel, Chain
from drivers.channel.stage import BitOrder, Line
from drivers.contract import OpenFailed

ADAPTER: TypeAdapter[AnyChannel] = TypeAdapter(AnyChannel)


def chain(*sections: dict[str, object], order: BitOrder = "lsb", rate_bps: float | None = None) -> Chain:
    return Chain([ADAPTER.validate_python(section) for section in sections], Line(order, rate_bps))


def random_bytes(count: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 256, count, dtype=np.uint8)


def bits_of(data: np.ndarray, order: BitOrder = "lsb") -> np.ndarray:
    return np.unpackbits(data, bitorder="little" if order == "lsb" else "big")


def whole_bytes(bits: np.ndarray) -> np.ndarray:
    return bits[: len(bits) // 8 * 8]


def once(sections: list[dict[str, object]], data: np.ndarray, **line: object) -> np.ndarray:
    return chain(*sections, **line).apply(data.copy())  # type: ignore[arg-type]


def cut(sections: list[dict[str, object]], data: np.ndarray, seed: int, **line: object) -> np.ndarray:
    """The same stream in chunks of 0 to 3 000 bytes, often of one."""
    rng = np.random.default_rng(seed)
    stages = chain(*sections, **line)  # type: ignore[arg-type]
    out, at = [], 0
    while at < len(data):
        size = int(rng.choice([0, 1, 2, 7, rng.integers(1, 3000)]))
        out.append(stages.apply(data[at : at + size].copy()))
        at += size
    out.append(stages.flush())
    return np.concatenate(out)


EVERY_MODEL: dict[str, list[dict[str, object]]] = {
    "independent": [{"model": "independent", "ber": 0.01}],
    "independent, many": [{"model": "independent", "ber": 0.4}],
    "burst": [{"model": "burst", "burst_bits": 20, "gap_bits": 300, "ber_outside": 0.01}],
    "burst, short": [{"model": "burst", "burst_bits": 1.5, "gap_bits": 2, "ber_inside": 1}],
    "slip": [{"model": "slip", "bits": [-5, 3, 17], "rate": 0.001}],
    "slip, one bit lost": [{"model": "slip", "bits": -1, "every_bits": 10_007}],
    "slip, repeated": [{"model": "slip", "bits": [300, -4], "rate": 0.0005, "filler": "repeat"}],
    "slip, bytes": [{"model": "slip", "bits": [-8, 16], "rate": 0.0005}],
    "byte loss": [{"model": "byte_loss", "rate": 0.01, "count": 3}],
    "byte repeat": [{"model": "byte_loss", "kind": "repeat", "every_bytes": 101, "count": 5}],
    "byte insertion": [{"model": "byte_loss", "kind": "insertion", "rate": 0.01}],
    "dropout": [{"model": "dropout", "rate": 0.0005, "for_bits": 900, "length": "exponential"}],
    "dropout, noise": [{"model": "dropout", "every_bits": 10_001, "for_bits": 999, "fill": "noise"}],
    "dropout, for ever": [{"model": "dropout", "at_bits": [44_444]}],
    "inversion": [{"model": "inversion", "rate": 0.001}],
    "awgn bpsk": [{"model": "awgn", "modulation": "bpsk", "ebn0_db": 3}],
    "awgn 8psk": [{"model": "awgn", "modulation": "8psk", "ebn0_db": 5}],
    "awgn 64qam": [{"model": "awgn", "modulation": "64-QAM", "ebn0_db": 9}],
    "awgn dbpsk": [{"model": "awgn", "modulation": "dbpsk", "ebn0_db": 5}],
    "awgn 8dpsk": [{"model": "awgn", "modulation": "8dpsk", "ebn0_db": 8}],
    "awgn 8fsk": [{"model": "awgn", "modulation": "8fsk", "ebn0_db": 4}],
    "rayleigh": [{"model": "rayleigh", "modulation": "qpsk", "ebn0_db": 10, "doppler_hz": 100}],
    "rician": [{"model": "rician", "modulation": "2fsk", "ebn0_db": 10, "k_factor_db": 6}],
    "several": [
        {"model": "independent", "ber": 0.01},
        {"model": "slip", "bits": [-3, 7], "rate": 0.0005},
        {"model": "awgn", "modulation": "64qam", "ebn0_db": 8},
        {"model": "inversion", "every_bits": 4001},
    ],
}


@pytest.mark.parametrize("order", ["lsb", "msb"])
@pytest.mark.parametrize("name", EVERY_MODEL)
def test_a_seed_gives_the_same_stream_however_it_is_cut(name: str, order: BitOrder) -> None:
    data = random_bytes(20_001)
    sections = [{**section, "seed": 11} for section in EVERY_MODEL[name]]
    stages = chain(*sections, order=order, rate_bps=9600)
    whole = np.concatenate([stages.apply(data.copy()), stages.flush()])
    for seed in (1, 2):
        np.testing.assert_array_equal(cut(sections, data, seed, order=order, rate_bps=9600), whole)
    assert len(whole) != len(data) or (whole != data).any()


LEFT_TO_CHANCE = [
    name
    for name, sections in EVERY_MODEL.items()
    if not all({"every_bits", "every_bytes", "at_bits"} & set(section) for section in sections)
]


@pytest.mark.parametrize("name", LEFT_TO_CHANCE)
def test_another_seed_gives_another_stream(name: str) -> None:
    data = random_bytes(20_001)
    one, other = (
        once([{**section, "seed": seed} for section in EVERY_MODEL[name]], data, rate_bps=9600)
        for seed in (11, 12)
    )
    assert len(one) != len(other) or (one != other).any()


@pytest.mark.parametrize("order", ["lsb", "msb"])
def test_a_slip_cuts_out_and_puts_in_exactly_the_bits_that_it_says(order: BitOrder) -> None:
    data = random_bytes(5_000)
    bits = bits_of(data, order)
    for size in (-1, -13, -8, -4096, 1, 5, 8, 4096):
        place = 12_345 if size % 8 else 12_344
        section = {"model": "slip", "bits": size, "at_bits": [12_345], "filler": "ones"}
        middle = np.ones(max(size, 0), dtype=np.uint8)
        expected = np.concatenate([bits[:place], middle, bits[place + max(-size, 0) :]])
        got = bits_of(once([section], data, order=order), order)
        np.testing.assert_array_equal(got, whole_bytes(expected))
        assert chain(section).whole_bytes is (size % 8 == 0)


def test_slips_close_together_add_up() -> None:
    data = random_bytes(1_000)
    section = {"model": "slip", "bits": -100, "at_bits": [1_000, 1_040, 3_000]}
    bits = bits_of(data)
    expected = np.concatenate([bits[:1_000], bits[1_200:3_000], bits[3_100:]])
    np.testing.assert_array_equal(bits_of(once([section], data)), whole_bytes(expected))


def test_a_loss_goes_on_into_the_next_chunks() -> None:
    data = np.arange(30, dtype=np.uint8)
    stages = chain({"model": "byte_loss", "count": 7, "at_bytes": [9]})
    got = np.concatenate([stages.apply(data[at : at + 5].copy()) for at in range(0, 30, 5)])
    assert got.tolist() == [*range(9), *range(16, 30)]


def test_a_repeat_gives_the_last_bytes_again() -> None:
    data = np.arange(20, dtype=np.uint8)
    got = once([{"model": "byte_loss", "kind": "repeat", "count": 2, "at_bytes": [5]}], data)
    assert got.tolist() == [0, 1, 2, 3, 4, 3, 4, *range(5, 20)]


def test_a_byte_is_lost_every_so_many_bytes_and_seconds() -> None:
    data = np.arange(200, dtype=np.uint8)
    kept = [n for n in range(200) if n == 0 or n % 25]
    assert once([{"model": "byte_loss", "every_bytes": 25}], data).tolist() == kept
    in_time = once([{"model": "byte_loss", "every_s": 0.5}], data, rate_bps=400)
    assert in_time.tolist() == kept


def test_a_device_deaf_for_half_of_the_time_gives_half_of_the_bytes() -> None:
    data = random_bytes(8_000)
    section = {"model": "dropout", "every_bits": 16_000, "for_bits": 8_000}
    got = once([section], data)
    expected = np.concatenate([data[:2000], data[3000:4000], data[5000:6000], data[7000:]])
    np.testing.assert_array_equal(got, expected)
    in_time = {"model": "dropout", "every_s": 4, "for_s": 2}
    np.testing.assert_array_equal(once([in_time], data, rate_bps=4_000), expected)


def test_a_short_dropout_within_a_longer_one_does_not_end_it() -> None:
    data = random_bytes(20_000)
    keys = {"model": "dropout", "for_bits": 8_000, "length": "exponential"}
    shorter_within = 0
    for seed in range(30):
        first = once([{**keys, "at_bits": [0], "seed": seed}], data)
        both = once([{**keys, "at_bits": [0, 800], "seed": seed}], data)
        assert len(both) <= len(first)
        shorter_within += len(both) == len(first) < len(data) - 100
    assert shorter_within > 5  # or the loop would have proved nothing


@pytest.mark.parametrize(("fill", "byte"), [("zeros", 0), ("ones", 255)])
def test_a_dropout_can_be_constant_and_keeps_the_count(fill: str, byte: int) -> None:
    data = random_bytes(1_000)
    got = once([{"model": "dropout", "at_bits": [803], "for_bits": 800, "fill": fill}], data)
    expected = data.copy()
    expected[100:201] = byte  # 803 to 1603, widened to whole bytes
    np.testing.assert_array_equal(got, expected)


@pytest.mark.parametrize("order", ["lsb", "msb"])
def test_an_inversion_turns_the_polarity_over_from_its_place_to_the_next(order: BitOrder) -> None:
    data = random_bytes(2_000)
    bits = bits_of(data, order)
    expected = bits.copy()
    expected[1_003:1_006] ^= 1
    expected[5_001:] ^= 1
    section = {"model": "inversion", "at_bits": [1_003, 1_006, 5_001]}
    np.testing.assert_array_equal(bits_of(once([section], data, order=order), order), expected)
    turned = {"model": "inversion", "from_start": True}
    np.testing.assert_array_equal(once([turned], data), ~data)


def test_bursts_have_the_lengths_and_gaps_that_they_say() -> None:
    # All bits wrong inside and none outside: the errors are the bad state itself.
    data = np.zeros(4_000_000, dtype=np.uint8)
    section = {"model": "burst", "burst_bits": 12, "gap_bits": 90, "ber_inside": 1, "seed": 5}
    state = bits_of(once([section], data))
    edges = np.flatnonzero(np.diff(state))
    lengths = np.diff(edges)
    first_is_gap = state[edges[0] + 1] == 0
    gaps, bursts = (lengths[0::2], lengths[1::2]) if first_is_gap else (lengths[1::2], lengths[0::2])
    for seen, mean in ((bursts, 12), (gaps, 90)):
        deviation = (mean * (mean - 1)) ** 0.5  # of a geometric length
        assert abs(seen.mean() - mean) < 6 * deviation / len(seen) ** 0.5  # chance: 2e-9
        assert abs(seen.std() / deviation - 1) < 0.03
    # Memoryless: the longer half of the gaps goes on as long as a gap does.
    late = gaps[gaps > 90] - 90
    assert abs(late.mean() - 90) < 6 * 90 / len(late) ** 0.5


def test_the_gap_between_bursts_is_a_knob() -> None:
    stages = chain({"model": "burst", "burst_bits": 10, "gap_bits": 1e15, "ber_inside": 1, "seed": 5})
    data = np.zeros(100_000, dtype=np.uint8)
    assert not stages.apply(data.copy())[200:].any()
    stages.knobs()["gap_bits"].turn(10)
    share = bits_of(stages.apply(data.copy())).mean()
    assert abs(share - 0.5) < 0.02
    stages.knobs()["ber_inside"].turn(0.0)
    assert not stages.apply(data.copy()).any()


def test_bits_that_fill_no_symbol_come_out_when_the_sender_pauses() -> None:
    data = random_bytes(3 * 100 + 1)
    stages = chain({"model": "awgn", "modulation": "8psk", "ebn0_db": 60, "seed": 1})
    first = stages.apply(data.copy())
    assert len(first) < len(data)
    np.testing.assert_array_equal(np.concatenate([first, stages.flush()]), data)
    assert len(stages.flush()) == 0
    np.testing.assert_array_equal(stages.apply(data[:300].copy()), data[:300])


def test_what_a_stage_held_back_still_goes_through_those_behind_it() -> None:
    data = random_bytes(100)
    noisy = {"model": "awgn", "modulation": "64qam", "ebn0_db": 90, "seed": 1}
    stages = chain(noisy, {"model": "inversion", "from_start": True})
    first, rest = stages.apply(data.copy()), stages.flush()
    assert len(rest) == 1
    np.testing.assert_array_equal(np.concatenate([first, rest]), ~data)


def test_attenuation_takes_off_as_many_decibels() -> None:
    data = random_bytes(50_000)
    pad = {"model": "awgn", "modulation": "bpsk", "ebn0_db": 26, "attenuation_db": 20, "seed": 2}
    plain = {"model": "awgn", "modulation": "bpsk", "ebn0_db": 6, "seed": 2}
    np.testing.assert_array_equal(once([pad], data), once([plain], data))
    turned = chain({**pad, "attenuation_db": 0})
    turned.knobs()["attenuation_db"].turn(20)
    np.testing.assert_array_equal(turned.apply(data.copy()), once([plain], data))


@pytest.mark.parametrize(
    "wrong",
    [
        {"model": "slip", "bits": 0, "rate": 0.1},
        {"model": "slip", "bits": 3},
        {"model": "slip", "bits": 3, "rate": 0.1, "every_bits": 5},
        {"model": "byte_loss"},
        {"model": "dropout", "at_bits": [1], "for_bits": 3, "for_s": 1},
        {"model": "dropout", "at_bits": [1], "length": "exponential"},
        {"model": "inversion"},
        {"model": "burst", "burst_bits": 0.5, "gap_bits": 10},
        {"model": "awgn", "modulation": "9psk", "ebn0_db": 3},
        {"model": "awgn", "modulation": "bpsk", "ebn0_db": float("nan")},
        {"model": "echo"},
    ],
)
def test_keys_that_make_no_sense_are_refused(wrong: dict[str, object]) -> None:
    with pytest.raises(ValidationError):
        ADAPTER.validate_python(wrong)


@pytest.mark.parametrize(
    "needy",
    [
        {"model": "dropout", "every_s": 1, "for_s": 0.5},
        {"model": "byte_loss", "every_s": 1},
        {"model": "rayleigh", "modulation": "bpsk", "ebn0_db": 3, "doppler_hz": 5},
    ],
)
def test_seconds_without_a_rate_are_refused_with_advice(needy: dict[str, object]) -> None:
    with pytest.raises(OpenFailed) as caught:
        chain(needy)
    assert "link.rate_bps" in caught.value.advice
    chain(needy, rate_bps=9600)


def test_a_doppler_frequency_beyond_half_the_symbol_rate_is_refused() -> None:
    section = {"model": "rayleigh", "modulation": "qpsk", "ebn0_db": 3, "doppler_hz": 3000}
    with pytest.raises(OpenFailed):
        chain(section, rate_bps=9600)
