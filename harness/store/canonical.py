"""The canonical form of a record, and its SHA-256.

A record's canonical form is a sequence of lines, each one JSON value as RFC 8785 writes it (no spaces,
keys sorted, shortest numbers), with one departure: every integer is written as a string, since RFC 8785
takes none over 2^53. Each line is UTF-8 and ends with a line feed. The lines are, in this order:

1. the head: ``record`` (the version of this form, "1"), key, title, command, started, ended, status,
   ended_by, verdict, ``profile`` (SHA-256 of the profile's text), overrides, settings, device, stated;
2. each sitting, by its number;
3. each point, by its number, followed by its seconds and then its events, in order.

A second's tallies are lists [received, compared, unaligned, errors, ones_as_zeros, zeros_as_ones];
its positions stand as the SHA-256 of the 64-bit little-endian integers, its kinds as the SHA-256 of one
byte each (1: a ONE received as a ZERO). Notes are not part of it: they are added later.
The digest is the SHA-256 of all lines, in hexadecimal.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from decimal import Decimal
from typing import Any

import numpy as np

from harness.record import Event, Point, Run, Second, Sitting, Tally


def canonical(value: Any) -> str:
    """Write a JSON value in canonical form; integers become strings.

    Raises
    ------
    ValueError
        For NaN and infinities, which JSON does not have.
    """
    if value is None or isinstance(value, bool):
        return {None: "null", True: "true", False: "false"}[value]
    if isinstance(value, int):
        return f'"{value}"'
    if isinstance(value, float):
        return _number(value)
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, Mapping):
        keys = sorted(value, key=lambda k: k.encode("utf-16-be", "surrogatepass"))
        return "{" + ",".join(f"{canonical(k)}:{canonical(value[k])}" for k in keys) + "}"
    return "[" + ",".join(canonical(v) for v in value) + "]"


def _number(value: float) -> str:
    """Write a float as ECMAScript does: the shortest digits that read back the same."""
    if value != value or value in (float("inf"), float("-inf")):
        raise ValueError("JSON has no NaN and no infinity")
    if value == 0:
        return "0"
    sign, digit_list, exponent = Decimal(repr(value)).normalize().as_tuple()
    digits = "".join(map(str, digit_list))
    minus, count = "-" * sign, len(digits)
    point = count + int(exponent)  # where the decimal point stands, counted from the first digit
    if count <= point <= 21:
        return minus + digits + "0" * (point - count)
    if 0 < point <= 21:
        return f"{minus}{digits[:point]}.{digits[point:]}"
    if -6 < point <= 0:
        return f"{minus}0.{'0' * -point}{digits}"
    mantissa = digits if count == 1 else f"{digits[0]}.{digits[1:]}"
    return f"{minus}{mantissa}e{point - 1:+d}"


def _tally(tally: Tally) -> list[int]:
    return [
        tally.received,
        tally.compared,
        tally.unaligned,
        tally.errors,
        tally.ones_as_zeros,
        tally.zeros_as_ones,
    ]


def _hash(data: bytes) -> str:
    return hashlib.sha256(data).hexdigest()


_NO_BYTES = _hash(b"")


def _second_line(second: Second) -> str:
    """Write a second's line; by hand, since a night has tens of thousands of them."""
    positions = kinds = _NO_BYTES
    if len(second.positions):
        positions = _hash(np.asarray(second.positions, dtype="<i8").tobytes())
        kinds = _hash(np.asarray(second.ones_lost, dtype=np.uint8).tobytes())
    tally = '","'.join(map(str, _tally(second.tally)))
    stretches = ",".join(f'["{bits}",{"true" if aligned else "false"}]' for bits, aligned in second.stretches)
    return (
        f'{{"at":"{second.at}","bits_inserted":"{second.bits_inserted}","bits_lost":"{second.bits_lost}",'
        f'"due":{"true" if second.due else "false"},"duration_ns":"{second.duration_ns}",'
        f'"first_bit":"{second.first_bit}","kinds":"{kinds}","point":"{second.point}",'
        f'"positions":"{positions}","positions_complete":{"true" if second.positions_complete else "false"},'
        f'"second":"{second.index}","sent":"{second.sent}","sitting":"{second.sitting}",'
        f'"slips":"{second.slips}","stretches":[{stretches}],"tally":["{tally}"]}}\n'
    )


class Digest:
    """Takes a record part by part, in the order of the canonical form."""

    def __init__(self) -> None:
        self._sum = hashlib.sha256()

    def _line(self, value: Any) -> None:
        self._sum.update(canonical(value).encode("utf-8", "surrogatepass"))
        self._sum.update(b"\n")

    def head(self, run: Run) -> None:
        """Take what the run says of itself; its sittings and points are taken apart from it."""
        self._line(
            {
                "record": 1,
                "key": run.key,
                "title": run.title,
                "command": run.command,
                "started": run.started,
                "ended": run.ended,
                "status": run.status,
                "ended_by": run.ended_by,
                "verdict": run.verdict,
                "profile": _hash(run.profile_text.encode()),
                "overrides": run.overrides,
                "settings": run.settings,
                "device": run.device,
                "stated": run.stated,
            }
        )

    def sitting(self, sitting: Sitting) -> None:
        """Take a sitting."""
        self._line(
            {
                "sitting": sitting.index,
                "started": sitting.started,
                "ended": sitting.ended,
                "status": sitting.status,
                "host": sitting.host,
                "versions": sitting.versions,
                "undecided_bits": sitting.undecided_bits,
            }
        )

    def point(self, point: Point) -> None:
        """Take a point; its seconds and events are taken apart from it."""
        self._line(
            {
                "point": point.index,
                "values": point.values,
                "started": point.started,
                "ended": point.ended,
                "ended_by": point.ended_by,
                "after_decision": _tally(point.after_decision),
                "facts": point.facts,
            }
        )

    def second(self, second: Second) -> None:
        """Take a second."""
        self._sum.update(_second_line(second).encode())

    def event(self, event: Event) -> None:
        """Take an event."""
        self._line(
            {"event": event.kind, "bit": event.bit, "at": event.at, "text": event.text, "data": event.data}
        )

    def hexdigest(self) -> str:
        """Give the digest of what was taken so far."""
        return self._sum.hexdigest()


def digest_of(run: Run) -> str:
    """Give the SHA-256 of a record's canonical form, in hexadecimal."""
    digest = Digest()
    digest.head(run)
    for sitting in run.sittings:
        digest.sitting(sitting)
    for point in run.points:
        digest.point(point)
        for second in point.seconds:
            digest.second(second)
        for event in point.events:
            digest.event(event)
    return digest.hexdigest()
