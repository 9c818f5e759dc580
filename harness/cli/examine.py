"""`bitassay examine` and `emit`: bytes in a file, counted or made."""

from __future__ import annotations

import re
import sys
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO, Literal

from harness.cli.failure import FAULT, PASS, UNDECIDED, UserError, warn
from harness.cli.output import new_store, open_writing, print_json, store_place

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from harness.bench.identification import Identified
    from harness.record import BitOrder, Run

ORDERS = ("lsb", "msb")
EMIT_BYTES = 1 << 20


def examine(
    file: Path,
    pattern: str,
    bit_order: str,
    rate_bps: float | None,
    confidence: float,
    store: str | None,
    *,
    as_json: bool,
) -> int:
    """Count errors in a capture."""
    from harness.assess.run import assess
    from harness.bench.examine import Examination, map_file, nothing_found
    from harness.cli.page import page

    _check(bit_order, rate_bps, confidence)
    if not file.is_file():
        what = "is a folder" if file.is_dir() else "is no regular file" if file.exists() else "no such file"
        raise UserError(f"{file}: {what}", "name a file of captured bytes")
    try:
        data = map_file(file)
    except OSError as error:
        raise UserError(f"{file}: {error.strerror}", "check the file and its permissions") from error
    if not len(data):
        raise UserError(
            f"{file} is empty: not a single bit came", "capture again; nothing was counted", FAULT
        )
    found = _identified(data, pattern, bit_order, rate_bps)
    if found.capture is None:
        examination = None
        record = nothing_found(data, rate_bps, pattern)
    else:
        examination = Examination(found.capture)
        examination.run()
        record = examination.record()
    settings = {**record.settings, "confidence": confidence, "file": str(file)}
    record = replace(record, title=f"capture {file.name}", settings=settings)
    if store is not None:
        new = None if as_json else new_store(store)
        record = _keep(record, store)
        if new is not None:
            print(f"new store at {new}", file=sys.stderr)
    assessment = assess(record)
    if not record.key:
        assessment = replace(assessment, run=None)
    document = assessment.to_json() | {
        "identification": found.words,
        "identification_confidence": found.confidence,
    }
    if as_json:
        print_json(document)
    else:
        print("\n".join(page(assessment, store_place(store) if store is not None else "")))
        if found.words:
            print(f"identified  {found.words}")
    if assessment.whole.tally.compared:
        return PASS
    sys.stdout.flush()
    if found.capture is None:
        warn(f"{file}: {found.words}")
        print(f"  {_what_to_try(pattern, found.words)}", file=sys.stderr)
    else:
        warn(f"{file} was never aligned to {found.capture.pattern.name}")
        print("  try --pattern auto, the other --bit-order, or a longer capture", file=sys.stderr)
    return UNDECIDED


def _what_to_try(pattern: str, looks: str) -> str:
    """Say what to do where no pattern was found."""
    if pattern.lower() != "auto":
        return "leave out --pattern to have it looked for among all that are known"
    if "constant" in looks:
        return "that is a dead line, or the wrong file: check what was captured"
    if repeated := re.search(r"\b(word|taps):\S+", looks):
        return f"if that is what was sent, count against it with --pattern {repeated[0]}"
    return "name the pattern with --pattern if you know what was sent"


def _check(bit_order: str, rate_bps: float | None, confidence: float) -> None:
    if bit_order not in (*ORDERS, "auto"):
        raise UserError(f"there is no bit order {bit_order!r}", "choose lsb, msb or auto")
    if rate_bps is not None and not 8 <= rate_bps < float("inf"):
        raise UserError(
            f"a rate of {rate_bps:g} bit/s makes no sense", "give --rate in bit/s, for example 48000"
        )
    if not 0 < confidence < 1:
        raise UserError(f"a confidence of {confidence:g} is outside 0 to 1", "give 0.95 for 95 %")


def _identified(data: NDArray[np.uint8], pattern: str, bit_order: str, rate_bps: float | None) -> Identified:
    """Find out pattern and order where they are not told."""
    from harness.bench.examine import Capture
    from harness.bench.identification import Identified, identify_capture
    from harness.signal.patterns import parse_pattern

    if pattern.lower() != "auto" and bit_order != "auto":
        order: BitOrder = "lsb" if bit_order == "lsb" else "msb"
        named = parse_pattern(pattern, bit_order=order, read=_read)
        return Identified(Capture(data, named, order, rate_bps), "", 1.0)
    chosen: Literal["lsb", "msb", "auto"] = "auto"
    if bit_order != "auto":
        chosen = "lsb" if bit_order == "lsb" else "msb"
    return identify_capture(data, pattern, chosen, rate_bps, _read)


def _read(path: str) -> bytes:
    try:
        return Path(path).read_bytes()
    except OSError as error:
        raise UserError(f"{path}: {error.strerror}", "name a pattern file that can be read") from error


def _keep(record: Run, store: str) -> Run:
    from harness.assess.run import assess
    from harness.bench.session import bench_host, bench_versions
    from harness.record import Sitting

    point = record.points[0]
    with open_writing(store) as opened:
        key: str = opened.begin_run(
            title=record.title,
            command=record.command,
            started=record.started,
            profile_text="",
            overrides=(),
            settings=record.settings,
            device={},
        )
        opened.begin_sitting(key, Sitting(0, record.started, None, bench_host(), bench_versions()))
        opened.begin_point(key, 0, {}, point.started, point.facts)
        opened.commit(key, point.seconds, [(0, event) for event in point.events], 0)
        assert record.ended is not None
        opened.end_point(key, 0, record.ended, "end_of_data", point.after_decision, {})
        opened.end_sitting(key, 0, record.ended, "completed")
        kept = replace(opened.load(key), status="completed", ended=record.ended, ended_by="end_of_data")
        stated = assess(kept).to_json()
        opened.end_run(key, record.ended, "completed", "end_of_data", None, stated)
    return kept


def emit(pattern: str, number: int, bit_order: str, output: Path | None) -> int:
    """Write a pattern's bytes."""
    import numpy as np

    from harness.signal.patterns import parse_pattern

    if bit_order not in ORDERS:
        raise UserError(f"there is no bit order {bit_order!r}", "choose lsb or msb")
    order: BitOrder = "lsb" if bit_order == "lsb" else "msb"
    reader = parse_pattern(pattern, bit_order=order, read=_read).reader(0, order)
    buffer = np.empty(min(number, EMIT_BYTES), dtype=np.uint8)

    def write(target: BinaryIO) -> None:
        left = number
        while left:
            chunk = buffer[: min(left, len(buffer))]
            reader.read_into(chunk)
            target.write(chunk.data)
            left -= len(chunk)
        target.flush()

    if output is None:
        write(sys.stdout.buffer)
        return 0
    there = output.is_file() and output.stat().st_size > 0
    try:
        with output.open("wb") as file:
            write(file)
    except OSError as error:
        raise UserError(f"{output}: {error.strerror}", "choose a file that can be written") from error
    print(f"{'replaced' if there else 'wrote'} {output}", file=sys.stderr)
    return 0
