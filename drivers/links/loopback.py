"""The loopback: bytes come back through a channel of models, at memory speed and in bounded memory."""

from __future__ import annotations

import math
import time
from collections import deque
from collections.abc import Mapping
from dataclasses import replace
from threading import Condition, Lock
from typing import Annotated

import numpy as np
from pydantic import Field

from drivers.channel.delay import BitDelay
from drivers.channel.models import AnyChannel, Chain
from drivers.channel.stage import BitOrder, Bytes, Line, OneOrSeveral
from drivers.contract import (
    EndOfStream,
    Interrupted,
    Knob,
    Link,
    LinkLost,
    OutOfLimits,
    Section,
    SendRefused,
    Traits,
)
from drivers.keys import written

_DELAY_STEP_S = 1e-3  # bytes accepted within the same millisecond come back together


class LoopbackSection(Section):
    """What comes back, how late, and what happens to it on the way."""

    channel: Annotated[tuple[AnyChannel, ...], OneOrSeveral()] = Field(
        default=(), description="What happens to the bits, in order; none: they come back as they were."
    )
    delay_s: float = Field(default=0.0, ge=0, le=600, description="Every byte comes back this much later.")
    delay_bits: int = Field(
        default=0,
        ge=0,
        le=1 << 28,
        description="A shift register of this many bits lies in the loop; it is full of ONEs at first.",
    )
    bit_order: BitOrder = Field(
        default="lsb", description="Which bit of a byte goes first: as pattern.bit_order."
    )
    buffer_bytes: int = Field(
        default=1 << 20, ge=1, le=1 << 30, description="Room for what was sent and not yet received."
    )


class LoopbackLink(Link):
    """Gives back what was sent, through the channel that the profile describes.

    One thread may send while another receives; knobs may be turned from a third. The channel lives as
    long as the object: after `close` and `open` its streams of errors go on, and knobs stay as they were
    turned, but what was on its way is gone.
    """

    Section = LoopbackSection

    def __init__(self, section: LoopbackSection, nominal_bps: float | None = None) -> None:
        super().__init__(section, nominal_bps)
        self._sitting = 0
        self._chain = self._new_chain()
        whole_bytes = self._chain.whole_bytes and section.delay_bits % 8 == 0
        self.traits = Traits(whole_bytes=whole_bytes, ends_with_input=True)
        self._delay: BitDelay | None = None
        self._channel = Lock()  # held while bits pass through the chain, or a knob is turned
        self._sending = Lock()
        self._receiving = Lock()
        self._changed = Condition()  # guards everything below
        self._open = False
        self._interrupted = False
        self._finished = False
        self._ring: Bytes = np.empty(0, dtype=np.uint8)
        self._spill: Bytes = np.empty(0, dtype=np.uint8)  # follows the ring where the channel made more bytes
        self._written = 0  # bytes ever put into ring and spill
        self._ring_end = 0  # bytes ever put into the ring; the spill begins there
        self._read = 0
        self._due: deque[tuple[int, float]] = deque()  # (written, when they may be received)
        self._ripe = 0  # bytes that may be received, counted like `_written`

    def _new_chain(self) -> Chain:
        return Chain(self.section.channel, Line(self.section.bit_order, self._nominal_bps), self._sitting)

    def begin_sitting(self, number: int) -> None:
        """Draw other errors than in the sittings before; knobs are as the profile has them."""
        with self._channel:
            self._sitting = number
            self._chain = self._new_chain()

    def open(self) -> None:
        """Start with an empty buffer and a fresh delay."""
        with self._changed:
            if self._open:
                return
            if len(self._ring) != self.section.buffer_bytes:
                self._ring = np.empty(self.section.buffer_bytes, dtype=np.uint8)
            self._spill = self._spill[:0]
            self._written = self._ring_end = self._read = self._ripe = 0
            self._due.clear()
            self._delay = (
                BitDelay(self.section.delay_bits, self.section.bit_order) if self.section.delay_bits else None
            )
            self._interrupted = self._finished = False
            self._open = True

    def close(self) -> None:
        """Forget what is on its way; a thread that waits is woken."""
        with self._changed:
            self._open = False
            self._changed.notify_all()

    def send(self, data: memoryview, timeout: float) -> int:
        """Take what there is room for; waits at most `timeout` seconds for the first byte's room."""
        source = np.frombuffer(data, dtype=np.uint8)
        accepted = 0
        with self._sending:
            deadline = time.monotonic() + timeout
            while accepted < len(source):
                room = self._room(deadline if not accepted else 0.0)
                if not room:
                    break
                start = self._ring_end % len(self._ring)
                count = min(room, len(self._ring) - start, self._chain.step_bytes, len(source) - accepted)
                target = self._ring[start : start + count]
                target[:] = source[accepted : accepted + count]
                with self._channel:
                    out = self._chain.apply(target)
                    if self._delay is not None:
                        out = self._delay.apply(out)
                self._publish(out, in_place=out is target)
                accepted += count
        return accepted

    def receive(self, buffer: memoryview, timeout: float) -> int:
        """Fill the start of `buffer` with what has come back."""
        target = np.frombuffer(buffer, dtype=np.uint8)
        with self._receiving:
            count = min(self._available(time.monotonic() + timeout), len(target))
            done = 0
            while done < count:
                place = self._read + done
                if place < self._ring_end:
                    start = place % len(self._ring)
                    length = min(count - done, self._ring_end - place, len(self._ring) - start)
                    target[done : done + length] = self._ring[start : start + length]
                else:
                    length = count - done
                    start = place - self._ring_end
                    target[done : done + length] = self._spill[start : start + length]
                done += length
            if count:
                self._take(count)
        return count

    def drain(self, timeout: float) -> bool:
        """Let the channel give out what it holds back: a modulator fills its last symbol with idle bits."""
        del timeout  # nothing to wait for: what comes out may spill over
        with self._sending:
            with self._changed:
                self._check()
                if self._finished:
                    return True
            with self._channel:
                held = self._chain.flush()
                if self._delay is not None:
                    held = self._delay.apply(held)
            self._publish(held, in_place=False)
        return True

    def finish_sending(self) -> None:
        """Nothing more will be sent: what is on its way still comes back, then the stream ends."""
        with self._sending:
            with self._changed:
                if not self._open or self._finished:
                    return
            with self._channel:
                held = self._chain.flush()
                if self._delay is not None:
                    held = np.concatenate([self._delay.apply(held), self._delay.rest()])
            with self._changed:
                self._finished = True
                self._spill_over(held)
                self._changed.notify_all()

    def interrupt(self) -> None:
        """Wake whoever waits."""
        with self._changed:
            self._interrupted = True
            self._changed.notify_all()

    def describe(self) -> Mapping[str, str]:
        """The channel in words, with the seeds that were drawn."""
        told = {"peer": "loopback inside this program"}
        for number, (section, seed) in enumerate(
            zip(self.section.channel, self._chain.seeds, strict=True), start=1
        ):
            keys = {**section.model_dump(exclude_defaults=True, exclude={"model", "seed"}), "seed": seed}
            words = ", ".join(f"{key} {written(value)}" for key, value in keys.items())
            if self._sitting:
                keys["sitting"] = self._sitting
            told[f"channel {number}"] = f"{section.model}: {words}"
        return told

    def knobs(self) -> Mapping[str, Knob]:
        """The channel's knobs; they may be turned at any time, also before `open`."""
        return {name: self._guarded(name, knob) for name, knob in self._chain.knobs().items()}

    def _guarded(self, name: str, knob: Knob) -> Knob:
        def turn(value: float) -> None:
            if not (math.isfinite(value) and knob.minimum <= value <= knob.maximum):
                raise OutOfLimits(
                    f"the channel's {name} goes from {knob.minimum:g} to {knob.maximum:g}, not to {value:g}",
                    "choose limits within it",
                )
            with self._channel:
                knob.turn(value)

        return replace(knob, turn=turn)

    def _check(self) -> None:
        if self._interrupted:
            raise Interrupted
        if not self._open:
            raise LinkLost("the loopback is closed", "open it first")

    def _room(self, deadline: float) -> int:
        """Wait for room, return how much there is; 0 at the deadline."""
        with self._changed:
            while True:
                self._check()
                if self._finished:
                    raise SendRefused("the loopback was told that nothing more would come", "open it again")
                # Whatever spilled over lies behind the ring: no room before it has been taken.
                room = 0 if len(self._spill) else len(self._ring) - (self._written - self._read)
                if room:
                    return room
                remaining = deadline - time.monotonic()
                if remaining <= 0:
                    return 0
                self._changed.wait(remaining)

    def _publish(self, out: Bytes, *, in_place: bool) -> None:
        """Put what came out of the channel behind what is there; only the sender calls it."""
        size = len(self._ring)
        with self._changed:
            room = 0 if len(self._spill) else size - (self._written - self._read)
        fits = min(len(out), room)
        if not in_place:
            start = self._ring_end % size
            head = min(fits, size - start)
            self._ring[start : start + head] = out[:head]
            self._ring[: fits - head] = out[head:fits]
        with self._changed:
            self._ring_end += fits
            self._written += fits
            self._spill_over(out[fits:])
            self._ripen()
            self._changed.notify_all()

    def _spill_over(self, out: Bytes) -> None:
        if len(out):
            self._spill = np.concatenate([self._spill, out])
            self._written += len(out)
            self._ripen()

    def _ripen(self) -> None:
        """Note when the bytes put in just now may be received."""
        delay_s = self.section.delay_s
        if not delay_s:
            self._ripe = self._written
            return
        due = (math.ceil(time.monotonic() / _DELAY_STEP_S) * _DELAY_STEP_S) + delay_s
        if self._due and self._due[-1][1] >= due:
            due = self._due.pop()[1]
        self._due.append((self._written, due))

    def _available(self, deadline: float) -> int:
        """Wait for bytes that may be received, return how many; 0 at the deadline."""
        with self._changed:
            while True:
                self._check()
                now = time.monotonic()
                while self._due and self._due[0][1] <= now:
                    self._ripe = self._due.popleft()[0]
                if self._ripe > self._read:
                    return self._ripe - self._read
                if self._finished and self._read == self._written:
                    raise EndOfStream
                remaining = deadline - now
                if remaining <= 0:
                    return 0
                next_due = self._due[0][1] - now if self._due else remaining
                self._changed.wait(max(min(remaining, next_due), 0.0))

    def _take(self, count: int) -> None:
        with self._changed:
            self._read += count
            if len(self._spill) and self._read == self._written:
                # Everything is taken: the ring starts again behind the spill.
                self._spill = self._spill[:0]
                self._ring_end = self._written
            self._changed.notify_all()
