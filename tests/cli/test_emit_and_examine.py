"""`emit` against a shift register written bit by bit, and `examine` on what was changed on purpose."""

from __future__ import annotations

import random

import pytest

TABLE = {  # stages added, sent inverted (ITU-T O.150 section 5; PRBS7 and PRBS13 common practice, IEEE 802.3)
    "PRBS7": ((6, 7), False),
    "PRBS9": ((5, 9), False),
    "PRBS11": ((9, 11), False),
    "PRBS13": ((1, 2, 12, 13), False),
    "PRBS15": ((14, 15), True),
    "PRBS20": ((3, 20), False),
    "QRSS": ((17, 20), False),
    "PRBS23": ((18, 23), True),
    "PRBS29": ((27, 29), True),
    "PRBS31": ((28, 31), True),
}


def shift_register(name: str, count: int) -> list[int]:
    """Bit by bit: the register holds ONEs at first, its newest bit is the sum of the stages."""
    taps, inverted = TABLE[name]
    stages = taps[-1]
    made = [1] * stages
    while len(made) < count + 15:
        made.append(sum(made[-tap] for tap in taps) % 2)
    if name == "QRSS":  # a ONE is forced where the next 14 bits would all be ZERO
        made = [bit if any(made[i + 1 : i + 15]) else 1 for i, bit in enumerate(made[:-14])]
    return [bit ^ inverted for bit in made[:count]]


def packed(bits: list[int], order: str) -> bytes:
    out = bytearray()
    for i in range(0, len(bits), 8):
        byte = bits[i : i + 8]
        out.append(sum(bit << (k if order == "lsb" else 7 - k) for k, bit in enumerate(byte)))
    return bytes(out)


@pytest.mark.parametrize("order", ["lsb", "msb"])
@pytest.mark.parametrize("name", TABLE)
def test_emit_equals_a_shift_register_written_independently(bitassay, tmp_path, name, order):
    done = bitassay(
        "emit", "--pattern", name.lower(), "--bytes", 4096, "--bit-order", order, "--output", "out.bin"
    )
    assert done.status == 0, done.err
    assert (tmp_path / "out.bin").read_bytes() == packed(shift_register(name, 8 * 4096), order)


@pytest.mark.parametrize("name", TABLE)
def test_examine_finds_exactly_the_bits_that_were_flipped(bitassay, tmp_path, name):
    rng = random.Random(name)
    data = bytearray(packed(shift_register(name, 8 * 4096), "msb"))
    flips = rng.sample(range(8 * 4096), 17)
    for bit in flips:
        data[bit // 8] ^= 0x80 >> bit % 8
    (tmp_path / "got.bin").write_bytes(data)
    got = bitassay("examine", "got.bin", "--json").json
    assert got["errors"] == 17
    assert got["bits_compared"] == got["bits_received"] == 8 * 4096
    assert name in (got["pattern"], *got["alternatives"])
    assert got["bit_order"] == "msb"
    assert got["inverted"] is False
    ones_lost = sum(not data[bit // 8] >> (7 - bit % 8) & 1 for bit in flips)
    assert got["ones_as_zeros"] == ones_lost
    assert got["zeros_as_ones"] == 17 - ones_lost


def test_examine_says_that_a_stream_is_inverted(bitassay, tmp_path):
    data = bytes(255 - byte for byte in packed(shift_register("PRBS15", 8 * 4096), "lsb"))
    (tmp_path / "got.bin").write_bytes(data)
    got = bitassay("examine", "got.bin", "--json").json
    assert (got["pattern"], got["inverted"], got["errors"]) == ("PRBS15", True, 0)


def test_examine_locates_a_lost_byte_and_a_doubled_one(bitassay, tmp_path):
    data = packed(shift_register("PRBS23", 8 * 30_000), "lsb")
    (tmp_path / "got.bin").write_bytes(data[:9_000] + data[9_001:20_000] + data[19_999:])
    got = bitassay("examine", "got.bin", "--pattern", "PRBS23", "--bit-order", "lsb", "--json").json
    assert [slip["bits"] for slip in got["slips"]] == [-8, 8]
    assert got["errors"] == 0
    assert got["bits_lost"] == got["bits_inserted"] == 8
    assert abs(got["slips"][0]["bit"] - 8 * 9_000) < 40


def test_with_a_rate_there_are_seconds_and_availability(bitassay, tmp_path):
    data = bytearray(packed(shift_register("PRBS15", 48_000 * 5), "lsb"))
    data[6_000 * 2 + 3] ^= 1  # in the third second
    (tmp_path / "got.bin").write_bytes(data)
    got = bitassay("examine", "got.bin", "--rate", "48000", "--json").json
    g821 = got["availability"][0]
    assert (g821["seconds"], g821["errored"], g821["severely_errored"]) == (5, 1, 0)
    assert got["seconds"] == pytest.approx(5)


def test_without_a_rate_availability_is_empty_and_no_record_is_kept(bitassay, tmp_path):
    (tmp_path / "got.bin").write_bytes(packed(shift_register("PRBS15", 80_000), "lsb"))
    got = bitassay("examine", "got.bin", "--json").json
    assert got["availability"] == []
    assert got["run"] is None
    assert not (tmp_path / "results").exists()


def test_with_a_store_the_record_is_kept_and_verified(bitassay, tmp_path):
    (tmp_path / "got.bin").write_bytes(packed(shift_register("PRBS15", 80_000), "lsb"))
    got = bitassay("examine", "got.bin", "--store", "kept.sqlite", "--json").json
    shown = bitassay("show", "last", "--store", "kept.sqlite", "--json").json
    assert shown["run"] == got["run"]
    assert shown["bits_compared"] == 80_000
    assert bitassay("verify", "last", "--store", "kept.sqlite").status == 0


@pytest.mark.parametrize(
    "content", [bytes(8192), b"\xff" * 8192, b"The river rose by a hand overnight. " * 300]
)
def test_what_no_pattern_fits_is_said_and_ends_in_status_3(bitassay, tmp_path, content):
    (tmp_path / "got.bin").write_bytes(content)
    done = bitassay("examine", "got.bin", "--json")
    assert done.status == 3
    assert done.json["pattern"] is None
    assert done.json["bits_unaligned"] == 8 * len(content)
    assert done.json["bits_compared"] == 0
    assert "no known pattern" in done.json["identification"]


def test_without_a_rate_no_time_is_made_up(bitassay, tmp_path):
    (tmp_path / "got.bin").write_bytes(packed(shift_register("PRBS15", 80_000), "lsb"))
    got = bitassay("examine", "got.bin", "--json").json
    assert (got["seconds"], got["measured_bps"]) == (None, None)
    page = bitassay("examine", "got.bin").out
    assert "no time is known without a rate" in page
    assert "bit/s" not in page


def test_with_a_rate_what_no_pattern_fits_is_unavailable_second_by_second(bitassay, tmp_path):
    (tmp_path / "got.bin").write_bytes(random.Random(3).randbytes(6_000 * 12 + 600))
    done = bitassay("examine", "got.bin", "--rate", "48000", "--json")
    g821 = done.json["availability"][0]
    assert done.status == 3
    assert (g821["seconds"], g821["unavailable"], g821["partial"]) == (12, 12, 1)
    assert done.json["seconds"] == pytest.approx(12.1)
    assert done.json["bits_unaligned"] == 8 * 6_000 * 12 + 4_800


@pytest.mark.parametrize(
    ("content", "words"),
    [(bytes(8192), "a dead line"), (b"\xa5" * 8192, "--pattern word:"), (b"", "capture again")],
)
def test_what_to_do_about_a_capture_that_fits_nothing_goes_with_what_is_in_it(
    bitassay, tmp_path, content, words
):
    (tmp_path / "got.bin").write_bytes(content)
    done = bitassay("examine", "got.bin")
    assert words in done.err.splitlines()[1]
    if "word:" in words:
        word = done.err.rpartition("--pattern ")[2].strip()
        assert bitassay("examine", "got.bin", "--pattern", word, "--json").json["bits_compared"] == 8 * 8192


def test_a_folder_is_not_called_missing(bitassay, tmp_path):
    done = bitassay("examine", tmp_path)
    assert done.status == 2
    assert "is a folder" in done.err


def test_clustering_is_an_object_also_where_there_is_nothing_to_judge(bitassay, tmp_path):
    (tmp_path / "got.bin").write_bytes(packed(shift_register("PRBS15", 80_000), "lsb"))
    got = bitassay("examine", "got.bin", "--json").json["clustering"]
    assert (got["clustered"], got["events"], got["bounds"]) == (False, 0, None)
