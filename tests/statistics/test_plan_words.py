"""What a plan says of itself: the paragraph for a procedure, and its stairs as lines."""

from __future__ import annotations

import pytest

from harness.statistics.plans import PLAIN, Ink, describe, draw_stairs, good_unit_fails, make_plan

PLANS = [
    ("fixed", 0, 2.0),
    ("curtailed", 3, 2.0),
    ("sequential", 0, 2.0),
    ("sequential", 0, 1.5),
    ("sequential", 0, 10.0),
]


@pytest.mark.parametrize(("kind", "accepts", "margin"), PLANS)
def test_the_paragraph_states_requirement_rule_and_risks(kind: str, accepts: int, margin: float) -> None:
    plan = make_plan(kind, 1e-6, accept_errors=accepts, margin=margin)
    text = describe(plan, rate_bps=48_000)
    assert "at most 1e-6" in text
    assert "95 % confidence" in text
    assert f"{plan.longest_bits:,} bits".replace(",", " ") in text
    assert "48 000 bit/s" in text
    assert f"{100 * plan.producer_risk:.3g} % (producer's risk)" in text
    assert f"{margin:g} times better" in text
    assert "not demonstrated" in text
    if kind == "sequential":
        assert f"{plan.boundaries[0].accept_at:,} bits".replace(",", " ") in text
    assert "at most 3 errors" in text or kind != "curtailed"
    assert "48 000" not in describe(plan)
    assert all(p[0].isupper() and p.endswith(".") for p in text.split("\n\n"))


def test_what_cannot_be_met_is_said() -> None:
    plan = make_plan("sequential", 1e-6, confidence=0.7, margin=10.0, producer_risk=0.3)
    assert "cannot be met exactly" in describe(plan)


def test_a_fail_says_how_often_a_good_unit_fails() -> None:
    assert good_unit_fails(make_plan("fixed", 1e-6)) == (
        "not demonstrated; a unit 2 times better fails this test with probability 77.6 %"
    )


@pytest.mark.parametrize(("kind", "accepts", "margin"), PLANS)
@pytest.mark.parametrize(("width", "height"), [(72, 18), (40, 6), (100, 40)])
def test_every_character_of_the_stairs_agrees_with_the_boundaries(
    kind, accepts, margin, width, height
) -> None:
    plan = make_plan(kind, 1e-6, accept_errors=accepts, margin=margin)
    lines = draw_stairs(plan, width, height, Ink("R", "o", "A", "+", "-", "|"))
    assert all(len(line) <= width for line in lines)
    area = [line for line in lines if "|" in line]
    assert len(area) <= height + 1
    n = plan.longest_bits
    rows = {row.errors: row for row in plan.boundaries}
    seen = []
    for line in area:
        label, drawing = line.split("|")
        errors = int(label)
        seen.append(errors)
        for i, mark in enumerate(drawing):
            left, right = n * i / len(drawing), n * (i + 1) / len(drawing)
            if rows:
                reject, accept = rows[errors].reject_at or 0, rows[errors].accept_at
            else:
                reject, accept = (n if errors > accepts else 0), n
            expected = "R" if left < reject - 1e-6 else "A" if right * (1 + 1e-9) >= accept else "o"
            assert mark == expected, (errors, i)
    assert seen == sorted(seen, reverse=True)
    assert seen[-1] == 0
    assert seen[0] == (plan.boundaries[-1].errors if rows else accepts + 1)
    assert f"{n:,} bits".replace(",", " ") in lines[-2]


def test_plain_stairs_need_no_special_characters() -> None:
    text = "\n".join(draw_stairs(make_plan("sequential", 1e-6), ink=PLAIN))
    assert text.isascii()
    assert not "\n".join(draw_stairs(make_plan("sequential", 1e-6))).isascii()
