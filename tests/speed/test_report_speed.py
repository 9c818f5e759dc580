"""What the report of a 12 h run costs: all of it, and against loading the record alone."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from harness.record import Second, Sitting, Tally
from harness.report import assemble, material_of
from harness.report.exports.tables import write_seconds
from harness.report.figures.drawing import draw_all
from harness.report.html import to_html
from harness.report.pdf import to_pdf
from harness.store import digest_of, open_store, this_host

SECONDS = 43_200
T0 = 1_788_250_000 * 10**9
BITS = 48_000


def second(k: int, rng: np.random.Generator) -> Second:
    n = int(rng.poisson(0.5))
    places = np.sort(rng.choice(BITS, n, replace=False)).astype(np.int64) + k * BITS
    ones = rng.random(n) < 0.5
    o = int(ones.sum())
    return Second(
        0, 0, k, T0 + k * 10**9, 10**9, BITS, Tally(BITS, BITS, 0, n, o, n - o), first_bit=k * BITS,
        positions=places, ones_lost=ones, stretches=((BITS, True),),
    )  # fmt: skip


def record_a_night(path: Path) -> str:
    from harness.assess.run import assess

    rng = np.random.default_rng(1)
    end = T0 + SECONDS * 10**9
    with open_store(path) as store:
        key = store.begin_run(
            title="Wader-9, a night", command="measure", started=T0, profile_text="[stop]\nseconds = 43200\n",
            overrides=[], settings={"requirement": {"ber": 1.3e-5, "accept_errors": 26_000}},
            device={"serial_number": "0031", "model": "Wader-9"},
        )  # fmt: skip
        store.begin_sitting(key, Sitting(0, T0, None, this_host(), {}))
        facts = {"rate_bps": float(BITS), "pattern": "PRBS15", "bit_order": "lsb"}
        store.begin_point(key, 0, {}, T0, facts)
        for first in range(0, SECONDS, 600):
            store.commit(key, [second(k, rng) for k in range(first, first + 600)])
        store.end_point(key, 0, end, "seconds")
        store.end_sitting(key, 0, end, "completed")
        a = assess(store.load(key))
        store.end_run(key, end, "completed", "seconds", a.verdict, a.to_json())
    return key


@pytest.mark.campaign
def test_the_report_of_a_night(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    import io

    key = record_a_night(tmp_path / "night.sqlite")
    steps: list[tuple[str, float, float]] = []

    def timed(name: str, act: Callable[[], Any]) -> Any:
        wall, cpu = time.perf_counter(), time.process_time()
        made = act()
        steps.append((name, time.perf_counter() - wall, time.process_time() - cpu))
        return made

    with open_store(tmp_path / "night.sqlite") as store:
        run = timed("load", lambda: store.load(key))
        kept = store.digest(key)
    digest = timed("digest", lambda: digest_of(run))
    material = timed("assess", lambda: material_of(run, kept, digest, written=T0, program="bitassay"))
    document = timed("assemble", lambda: assemble(material))
    drawn = timed("draw", lambda: draw_all(document.figures()))
    page = timed("page", lambda: to_html(document, drawn))
    paper = timed("pdf", lambda: to_pdf(document, drawn))
    timed("csv", lambda: write_seconds(material, io.StringIO(newline="")))
    with capsys.disabled():
        print(f"\nthe report of {SECONDS} seconds: page {len(page) >> 10} KiB, PDF {len(paper) >> 10} KiB")
        for name, wall, cpu in steps:
            print(f"  {name:9} {wall:6.2f} s, {cpu:5.2f} s of computing")
        whole, computing = sum(s[1] for s in steps[:-1]), sum(s[2] for s in steps[:-1])
        times = whole / steps[0][1]
        print(f"  in all    {whole:6.2f} s, {computing:5.2f} s of computing: {times:.1f} times loading it")
