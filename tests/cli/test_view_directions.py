"""Both directions of a duplex run are seen while it goes on: neither hides the other."""

from __future__ import annotations

from harness.assess.requirement import Requirement
from harness.bench.run import BenchRun, Hooks
from harness.cli.view.sheet import sheet_of_progress
from harness.cli.watch import progress_line
from harness.profile import load_profile
from harness.store import open_store

REQUIREMENT = Requirement(ber=1e-4, accept_errors=2)
NOW = 1_788_250_000 * 10**9


def duplex(making, forward, reverse):
    """Make the progress of two directions from their seconds."""

    def way(name, seconds, **more):
        made = making.progress(seconds, [making.event("aligned", "found")], REQUIREMENT, **more)
        point = made.point
        object.__setattr__(point, "facts", {**point.facts, "direction": name})
        return made

    return way("forward", forward, beside=(way("reverse", reverse),))


def test_the_page_has_a_bar_and_a_line_for_each_direction(making):
    sheet = sheet_of_progress(duplex(making, [0, 1], [0, 0]), NOW)
    assert [label for label, _bar in sheet.bars] == ["forward", "reverse"]
    assert [line.split(":")[0] for line in sheet.points] == ["forward direction", "reverse direction"]
    assert sheet.recent[-1][1].errors == 1
    assert {event.text for event in sheet.events} == {"forward: found", "reverse: found"}
    assert not sheet.against


def test_a_direction_that_cannot_pass_any_more_is_named_though_the_other_is_well(making):
    sheet = sheet_of_progress(duplex(making, [0, 0], [0, 9]), NOW)
    assert sheet.against
    assert sheet.verdict == "reverse: cannot pass any more"
    assert sheet.reasons[0].startswith("reverse: 9 errors")


def test_lines_say_both_directions(making):
    line = progress_line(duplex(making, [0, 1], [0, 0]), NOW)
    assert "forward: 1 error in" in line
    assert "reverse: 0 errors in" in line


def test_a_run_tells_of_both_directions_while_it_goes_on(bridge, tmp_path):
    ports = bridge(flip_back=[500])
    (tmp_path / "two.toml").write_text(
        f'[link]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[0]}\nduplex = true\n'
        "rate_bps = 400_000\npace_bps = 400_000\n"
        f'[link.receive]\ndriver = "tcp"\nhost = "127.0.0.1"\nport = {ports[1]}\n'
        '[pattern.reverse]\nname = "PRBS23"\n[stop]\nseconds = 2.5\n'
    )
    seen = []
    with open_store(str(tmp_path / "runs.sqlite"), create=True) as store:
        hooks = Hooks(tick=seen.append)
        BenchRun(load_profile(tmp_path / "two.toml"), store, hooks, lock=tmp_path, command="measure").run()
    (beside,) = seen[-1].beside
    assert (seen[-1].point.facts["direction"], beside.point.facts["direction"]) == ("forward", "reverse")
    assert (seen[-1].point.tally.errors, beside.point.tally.errors) == (0, 1)
