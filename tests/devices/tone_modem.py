"""A modem made of tones, as a process of its own: bytes on standard input come back through a noisy line.

Each byte gets a start bit and a stop bit (8N1). A bit is a tone: one cycle for a ONE (mark, also the idle
line), two cycles for a ZERO (space). Both tones have whole cycles in a bit, so the phase is continuous and they
are orthogonal whatever the phase. White Gaussian noise is added; each tone's energy is taken over a bit's time
without knowing the phase, at every sample; a receiver looks for the edge of a start bit, samples in the middle
of each bit and checks the stop bit. Where noise hides a start bit, or makes one, bytes are lost and invented.

The same seed and bytes give the same bytes back, however they are cut into pieces, as long as the input is not
silent for more than a second: then the line is idle for a while. A folder named by `--log`
holds `in` and `out` (the bytes), and `sent_at` and `received_at` (int64: the sample at which the start bit of each
of them begins, as sent and as received).
"""

from __future__ import annotations

import argparse
import math
import os
import select
from pathlib import Path

import numpy as np

FRAME_BITS = 10
PIECE_BYTES = 4096
LEAD_BITS = 20  # of idle line before the first byte
TRAIL_BITS = 40  # and after the last one
SILENCE_S = 1.5  # without input: then the line is idle so that the last byte comes out, too


class Transmitter:
    """Turns bytes into the line's samples."""

    def __init__(self, samples_per_bit: int, gap_every: int, gap_bits: int) -> None:
        self._length = samples_per_bit
        self._gap_every = gap_every
        self._gap_bits = gap_bits
        turn = 2 * math.pi * np.arange(samples_per_bit) / samples_per_bit
        # Root two: the energy of a bit is its number of samples.
        self._tones = (math.sqrt(2) * np.sin([2 * turn, turn])).astype(np.float32)
        self._bytes = 0
        self.bits = 0  # on the line so far

    def idle(self, bits: int) -> np.ndarray:
        self.bits += bits
        return np.tile(self._tones[1], bits)

    def send(self, data: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Samples, and the sample at which each byte's start bit begins."""
        frames = np.ones((len(data), FRAME_BITS + self._gap_bits), dtype=np.intp)
        frames[:, 0] = 0
        frames[:, 1:9] = np.unpackbits(data[:, None], axis=1, bitorder="little")
        number = self._bytes + np.arange(1, len(data) + 1)
        gap = (number % self._gap_every == 0) if self._gap_every else np.zeros(len(data), dtype=np.bool_)
        lengths = FRAME_BITS + self._gap_bits * gap
        line = frames[np.arange(frames.shape[1]) < lengths[:, None]]
        begins = self.bits + np.cumsum(lengths) - lengths
        self._bytes += len(data)
        self.bits += len(line)
        return self._tones[line].reshape(-1), self._length * begins


class Demodulator:
    """Says for every sample which tone is the stronger one over the bit's time that begins there."""

    def __init__(self, samples_per_bit: int) -> None:
        self._length = samples_per_bit
        turn = 2 * np.pi * np.arange(samples_per_bit) / samples_per_bit
        self._references = [
            [part(cycles * turn).astype(np.float32) for part in (np.cos, np.sin)] for cycles in (2, 1)
        ]
        self._kept = np.empty(0, dtype=np.float32)
        self._at = 0  # sample of the first one kept

    def feed(self, samples: np.ndarray) -> np.ndarray:
        """Decisions that follow on the last ones: True where it is space.

        Only sums and products of single numbers in a fixed order, so that pieces do not matter to the last bit.
        """
        line = np.concatenate([self._kept, samples])
        count = len(line) - self._length + 1
        if count <= 0:
            self._kept = line
            return np.empty(0, dtype=np.bool_)
        space, mark = (self._energy(line, tone) for tone in self._references)
        self._kept = line[count:]
        self._at += count
        return space > mark

    def _energy(self, line: np.ndarray, tone: list[np.ndarray]) -> np.ndarray:
        energy = np.float32(0)
        for reference in tone:
            turned = np.resize(np.roll(reference, -(self._at % self._length)), len(line))
            part = line * turned
            step = 1
            while step < self._length:  # sums over a bit, by doubling
                part = part[:-step] + part[step:]
                step *= 2
            energy = energy + part * part
        return energy


class Receiver:
    """Finds bytes among the decisions, as the receiver of a serial port does."""

    def __init__(self, samples_per_bit: int, keep_misframed: bool) -> None:
        self._length = samples_per_bit
        self._keep = keep_misframed
        self._space = np.zeros(1, dtype=np.bool_)
        self._at = -1  # sample of the first decision kept: the line was idle before
        self._hunt_from = 0

    def feed(self, space: np.ndarray) -> tuple[bytes, list[int]]:
        """Bytes, and the sample at which the start bit of each was taken to begin."""
        self._space = np.concatenate([self._space, space])
        edges = np.flatnonzero(self._space[1:] & ~self._space[:-1]) + 1
        # The edge shows when half of the window lies in the start bit.
        begins = edges + self._length // 2 - 1
        whole = begins + (FRAME_BITS - 1) * self._length < len(self._space)
        ready = begins[whole]
        levels = ~self._space[ready[:, None] + self._length * np.arange(FRAME_BITS)]
        values = np.packbits(levels[:, 1:9], axis=1, bitorder="little")[:, 0]
        data, places = bytearray(), []
        for edge, begin, value, start, stop in zip(
            (edges[whole] + self._at).tolist(),
            (ready + self._at).tolist(),
            values.tolist(),
            (~levels[:, 0]).tolist(),
            levels[:, 9].tolist(),
            strict=True,
        ):
            if edge < self._hunt_from:
                continue
            if not start:  # a spike
                self._hunt_from = begin
                continue
            self._hunt_from = begin + (FRAME_BITS - 1) * self._length
            if stop or self._keep:
                data.append(value)
                places.append(begin)
        self._forget(edges[~whole])
        return bytes(data), places

    def _forget(self, waiting: np.ndarray) -> None:
        """Keep the decisions from before the first edge whose byte is not whole yet."""
        waiting = waiting[waiting + self._at >= self._hunt_from]
        first = int(waiting[0]) - 1 if len(waiting) else len(self._space) - 1
        self._space = self._space[first:]
        self._at += first


class Log:
    """What went in and came out, written before it is passed on."""

    def __init__(self, folder: Path | None) -> None:
        names = ("in", "out", "sent_at", "received_at")
        if folder is not None:
            folder.mkdir(parents=True, exist_ok=True)
        self._files = {} if folder is None else {name: (folder / name).open("wb", 0) for name in names}

    def write(self, name: str, data: bytes) -> None:
        if self._files and data:
            self._files[name].write(data)


class Modem:
    """The whole way there and back."""

    def __init__(self, options: argparse.Namespace) -> None:
        length = options.samples_per_bit
        self._transmitter = Transmitter(length, options.gap_every, options.gap_bits)
        self._demodulator = Demodulator(length)
        self._receiver = Receiver(length, options.keep_misframed)
        self._log = Log(options.log)
        self._noise = np.random.default_rng(options.seed)
        # Noise of density N0 has the variance N0/2 in each sample.
        self._sigma = np.float32(math.sqrt(length / (2 * 10 ** (options.ebn0_db / 10))))

    def begin(self) -> bytes:
        return self._through(self._transmitter.idle(LEAD_BITS))

    def pass_on(self, data: bytes) -> bytes:
        self._log.write("in", data)
        samples, begins = self._transmitter.send(np.frombuffer(data, dtype=np.uint8))
        self._log.write("sent_at", begins.astype("<i8").tobytes())
        return self._through(samples)

    def idle(self) -> bytes:
        return self._through(self._transmitter.idle(TRAIL_BITS))

    def _through(self, samples: np.ndarray) -> bytes:
        noise = self._noise.standard_normal(len(samples), dtype=np.float32)
        space = self._demodulator.feed(samples + self._sigma * noise)
        data, places = self._receiver.feed(space)
        self._log.write("out", data)
        self._log.write("received_at", np.array(places, dtype="<i8").tobytes())
        return data


def write_all(data: bytes) -> None:
    while data:
        data = data[os.write(1, data) :]


def options_of(arguments: list[str] | None = None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--ebn0-db", type=float, default=20.0, help="energy of a line bit over N0")
    parser.add_argument("--seed", type=int, default=1, help="of the noise")
    parser.add_argument("--samples-per-bit", type=int, choices=(8, 16), default=8)
    parser.add_argument("--gap-every", type=int, default=0, help="idle line after every so many bytes")
    parser.add_argument("--gap-bits", type=int, default=0, help="and for how long")
    parser.add_argument("--keep-misframed", action="store_true", help="pass on bytes without a stop bit")
    parser.add_argument("--log", type=Path, default=None, help="folder for what went in and came out")
    return parser.parse_args(arguments)


def main() -> None:
    modem = Modem(options_of())
    try:
        write_all(modem.begin())
        while True:
            if not select.select([0], [], [], SILENCE_S)[0]:
                write_all(modem.idle())
                select.select([0], [], [])
            data = os.read(0, PIECE_BYTES)
            if not data:
                break
            write_all(modem.pass_on(data))
        write_all(modem.idle())
    except BrokenPipeError:  # nobody listens any more
        pass


if __name__ == "__main__":
    main()
