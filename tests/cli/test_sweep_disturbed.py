"""An attenuator that moves away while a point is measured: what was counted there decides nothing."""

from __future__ import annotations

PACE = "pace_bps = 100_000"
SWEEP = "[sweep]\ninstrument = 'attenuator'\nvalues = [33, 34, 36]\nsensitivity_ber = 1e-2\n"
# At 34 dB the BER is 2.4e-3: some 250 errors until the plan decides, after more than a second.
REQUIRED = "[requirement]\nber = 1e-2\naccept_errors = 1_000\nat = { attenuator = 34 }\n"


def test_a_point_that_was_disturbed_has_no_verdict_and_is_not_on_the_curve(bitassay, attenuated, tmp_path):
    device = attenuated(falls_back_s=0.6, falls_back_at=[2], start_db=20)
    (tmp_path / "sweep.toml").write_text(
        device.profile(SWEEP, stop="seconds = 1.5", more=REQUIRED, link=PACE)
    )
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 3, done.err
    got = done.json
    disturbed = got["points"][1]
    assert disturbed["plan"]["decided_at_bit"] is not None  # by what was counted alone it would have passed
    assert [p["verdict"] for p in got["points"]] == [None, "UNDECIDED", None]
    assert got["verdict"] == "UNDECIDED"
    assert "did not stay where it was put" in disturbed["reasons"][0]
    assert "was put at 34 dB and reads 20 dB now" in disturbed["reasons"][0]
    assert got["sensitivity"]["lower"] <= 35.67 <= got["sensitivity"]["upper"]  # BPSK needs 4.33 dB for 1e-2
    assert got["status"] == "completed"
    assert device.settings() == [33, 34, 36, 80]
    shown = bitassay("show", "last").out
    assert "attenuator 34: attenuator did not stay where it was put" in shown
    assert bitassay("verify", "last").status == 0
    paper = bitassay("report", "last", "--text").out
    assert "did not stay where it was put" in paper
    assert "34 (moved meanwhile: does not count)" in paper


def test_a_search_on_an_attenuator_that_never_stays_ends(bitassay, attenuated, tmp_path):
    # At 35 dB ten errors have come at once; the next point takes three seconds, and is tried three times.
    device = attenuated(falls_back_s=0.6)
    search = "[search]\ninstrument = 'attenuator'\nlow = 25\nhigh = 45\nber = 1e-5\n"
    (tmp_path / "search.toml").write_text(device.profile(search, stop="seconds = 1.5", link=PACE))
    done = bitassay("sweep", "search.toml", "--json", timeout=120)
    assert done.status == 4, done.err
    assert "at 3 points in a row" in done.err
    got = done.json
    assert got["status"] == "failed"
    moved = [any("did not stay" in remark for remark in p["remarks"]) for p in got["points"]]
    assert moved == [False, True, True, True]
    assert device.settings() == [35, 30, 30, 30, 80]


def test_an_attenuator_that_no_longer_answers_at_a_points_end_leaves_the_point_in_doubt(
    bitassay, attenuated, tmp_path
):
    device = attenuated(mute_after_s=0.6)
    (tmp_path / "sweep.toml").write_text(device.profile(SWEEP, stop="bits = 100_000", link=PACE, timeout_s=2))
    done = bitassay("sweep", "sweep.toml", "--json", timeout=120)
    assert done.status == 4, done.err
    assert "no answer" in done.err
    (point,) = done.json["points"]
    assert point["bits_compared"] == 100_000
    assert any("nobody knows whether attenuator stayed" in remark for remark in point["remarks"])
