"""What is said of a sweep: the verdict on its sensitivity rests on something, and a change meanwhile is called."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any

import pytest

from harness.assess.run import assess
from harness.cli.view.sheet import sheet_of_assessment
from harness.record import Event, Point, Run, Second, Tally

BITS = 1_000_000
X0_DB = 40.0  # attenuation at which Eb/N0 is 0 dB; BER 1e-3 is reached 6.79 dB before it, at 33.21 dB
CROSSING = 33.21


def ber_at(attenuation_db: float) -> float:
    return 0.5 * math.erfc(10 ** ((X0_DB - attenuation_db) / 20))


def counts_of(values: list[float], ber: Callable[[float], float] = ber_at) -> dict[float, int | None]:
    return {value: round(BITS * ber(value)) for value in values}


@pytest.fixture
def sweep(record: Callable[..., Run], second: Callable[..., Second]) -> Callable[..., Run]:
    """A sweep of one second a point: attenuation -> errors, or None where nothing was ever aligned.

    Pairs where a value is visited twice.
    """

    def make(
        errors: Mapping[float, int | None] | list[tuple[float, int | None]],
        least: float | None = None,
        quantity: str = "attenuation",
        unit: str = "dB",
        more: Mapping[float, Mapping[str, Any]] | None = None,
        sensitivity: bool = True,
        **requirement: Any,
    ) -> Run:
        points = []
        for number, (value, k) in enumerate(dict(errors).items() if isinstance(errors, Mapping) else errors):
            own = dict((more or {}).get(value, {}))
            unaligned = own.pop("unaligned", 0 if k is not None else BITS)
            tally = Tally(BITS, BITS - unaligned, unaligned, k or 0, k or 0, 0)
            stretches = tuple(s for s in ((BITS - unaligned, True), (unaligned, False)) if s[0])
            turned = own.pop("inversions", 0) * (Event("inversion", 9, "polarity turned over", 0),)
            row = replace(
                second(number, bits=BITS, first_bit=0),
                point=number,
                tally=tally,
                stretches=stretches,
                positions_complete=False,
                **own,
            )
            facts = {"units": {"att": unit}, "rate_bps": float(BITS)}
            events = (Event("aligned", 0, "the pattern was found", 0), *turned) if k is not None else ()
            points.append(Point(number, {"att": value}, 0, 1, "seconds", (row,), events, facts=facts))
        return replace(
            record(),
            command="sweep",
            settings={
                "requirement": {
                    "ber": 1e-3,
                    "confidence": 0.95,
                    **requirement,
                    "sensitivity_at_least": least,
                },
                "instruments": {"att": {"quantity": quantity, "unit": unit}},
                "sweep": {"instrument": "att", "sensitivity_ber": 1e-3 if sensitivity else None},
            },
            points=tuple(points),
        )

    return make


STEPS = [30 + k / 2 for k in range(13)]


@pytest.mark.parametrize(("least", "verdict"), [(32.5, "PASS"), (34, "FAIL"), (CROSSING, "UNDECIDED")])
def test_the_bound_on_the_unfavourable_side_decides(sweep, least, verdict):
    found = assess(sweep(counts_of(STEPS), least))
    assert found.verdict == verdict, found.reasons
    assert found.sensitivity["value"] == pytest.approx(CROSSING, abs=0.1)


@pytest.mark.parametrize(("least", "verdict"), [(-32.5, "PASS"), (-34, "FAIL")])
def test_of_a_level_less_is_better(sweep, least, verdict):
    """A receiver that needs -33.21 dBm does not need -32.5 dBm, and does not get along with -34 dBm."""
    errors = {-value: k for value, k in counts_of(STEPS).items()}
    found = assess(sweep(errors, least, "level", "dBm"))
    assert found.verdict == ("PASS" if least > -CROSSING else "FAIL"), found.reasons
    assert found.verdict == verdict


def test_a_curve_that_goes_the_wrong_way_gives_no_verdict(sweep):
    """An attenuator that works backwards, or another run on it: 'more is better' would turn round."""
    errors = counts_of(STEPS, lambda value: ber_at(66 - value))  # crosses at 32.79, getting better upwards
    for least in (31.0, 35.0):
        found = assess(sweep(errors, least))
        assert found.verdict == "UNDECIDED"
        assert "falls as att goes up, and ought to rise" in found.reasons[0]
    assert any("no verdict rests on this" in remark for remark in found.whole.remarks)


def test_no_verdict_rests_on_values_beyond_those_measured(sweep):
    easy = counts_of([28, 29, 30, 31, 31.5, 32])
    assert assess(sweep(easy, 31.0)).verdict == "PASS"
    beyond = assess(sweep(counts_of([30, 31, 31.5, 32, 32.5]), 32.8))
    assert beyond.verdict == "UNDECIDED"
    assert "only 30 to 32.5 dB was measured" in " ".join(beyond.reasons) or beyond.sensitivity["lower"] < 32.8
    hard = assess(sweep(counts_of([34, 34.5, 35, 35.5, 36]), 33.9))
    assert hard.verdict == "UNDECIDED"
    assert "only 34 to 36 dB was measured" in hard.reasons[0]


def test_without_a_curve_what_is_sure_decides(sweep):
    """A unit so good that no error came at any value measured, and one that was never found at the lowest."""
    good = assess(sweep(dict.fromkeys([30.0, 32.0, 34.0], 0), 33))
    assert good.verdict == "PASS"
    assert "under 1e-3 as far as 34 dB" in good.reasons[0]
    few = assess(sweep(dict.fromkeys([30.0, 32.0, 34.0], 0), 35))
    assert few.verdict == "UNDECIDED"
    lost = assess(sweep({30.0: None, 32.0: 0, 34.0: 0, 36.0: None, 38.0: None}, 33))
    assert lost.verdict == "FAIL"
    assert "att 30: nothing was ever aligned" in lost.reasons
    dead = assess(sweep(dict.fromkeys([30.0, 32.0, 34.0], None), 33))  # a cable that is off fails no unit
    assert dead.verdict == "UNDECIDED"
    assert dead.reasons == ["nothing was ever aligned at any value: no bit could be compared"]
    deaf = assess(sweep({30.0: BITS // 4, 32.0: None, 34.0: None}, 33))
    assert deaf.verdict == "FAIL"
    assert any("over 1e-3 at 30 dB already" in reason for reason in deaf.reasons)
    kind = assess(sweep({30.0: 0, 32.0: None, 34.0: 0}, 33, lost_link="undecided"))
    assert kind.verdict == "UNDECIDED"


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({"slips": 1, "bits_lost": 8}, "1 slip, where at most 0 are allowed"),
        ({"inversions": 1}, "1 inversion in mid-stream, each like a slip, where at most 0 are allowed"),
        ({"unaligned": 5000}, "0.5 % of the bits were unaligned or lost, where at most 0.1 % are allowed"),
    ],
)
def test_slips_and_unaligned_bits_count_where_the_device_has_to_work(sweep, more, words):
    # At 36 dB it need not work: what happens there is no matter.
    assert assess(sweep(counts_of(STEPS), 32.5, more={36.0: more})).verdict == "PASS"
    found = assess(sweep(counts_of(STEPS), 32.5, more={31.0: more}))
    assert found.verdict == "FAIL"
    assert f"att 31: {words}" in found.reasons
    allowed = assess(sweep(counts_of(STEPS), 32.5, more={31.0: more}, max_slips=1, max_unaligned_ratio=0.01))
    assert allowed.verdict == "PASS"


def test_hysteresis_is_called_once_however_many_values_differ(sweep):
    up, down = [*range(30, 36)], [*range(35, 29, -1)]
    there = [(float(v), round(BITS * ber_at(v))) for v in up]
    back = [(float(v), round(BITS * ber_at(v + 0.3))) for v in down]
    remarks = [r for r in assess(sweep(there + back)).whole.remarks if "hysteresis" in r]
    assert len(remarks) == 1
    assert remarks[0].startswith("4 of 6 values, up against down, show hysteresis, most at 32: BER 1.91e-4")
    one = [(v, k) if v != 32 else (v, 2 * k) for v, k in there[::-1]]
    remarks = [r for r in assess(sweep(there + one)).whole.remarks if "hysteresis" in r]
    assert len(remarks) == 1
    assert remarks[0].startswith("32, up against down, shows hysteresis")


def test_one_difference_of_three_in_a_thousand_is_hysteresis_alone_and_chance_among_forty(sweep):
    def remarks(values: list[float]) -> list[str]:
        there = [(value, 400) for value in values]
        back = [(value, 488 if value == 30 else 400) for value in values[::-1]]
        found = assess(sweep(there + back, sensitivity=False))
        return [remark for remark in found.whole.remarks if "hysteresis" in remark]

    assert len(remarks([30.0])) == 1
    assert remarks([30 + k / 4 for k in range(40)]) == []


def test_a_point_that_the_requirement_names_and_nobody_measured_is_no_success(sweep):
    run = sweep(counts_of(STEPS), at={"att": 45.0})
    found = assess(run)
    assert found.verdict == "UNDECIDED"
    assert found.reasons == ["the requirement holds at att 45, which was not measured"]
    assert assess(replace(run, status="interrupted")).verdict is None  # it goes on
    assert assess(sweep(counts_of(STEPS), at={"att": 30.0}, accept_errors=9)).verdict in ("PASS", "FAIL")


def test_a_requirement_that_stands_for_no_point_is_said_to_judge_nothing(sweep):
    found = assess(sweep(counts_of(STEPS)))
    assert found.verdict is None
    assert "the requirement names no point and no sensitivity: nothing was judged" in found.whole.remarks
    for named in ({"at": {"att": 31.0}}, {"least": 32.5}):
        assert not any(
            "nothing was judged" in r for r in assess(sweep(counts_of(STEPS), **named)).whole.remarks
        )


def test_each_temperature_has_a_curve_of_its_own_whichever_axis_is_the_slow_one(sweep):
    run = sweep(counts_of(STEPS), 32.5)
    cold = counts_of(STEPS, lambda value: ber_at(value + 1.5))  # 1.5 dB deaf at -20 degrees
    again = sweep(cold, 32.5)
    points = [replace(p, values={"oven": 25.0, **p.values}) for p in run.points]
    points += [
        replace(p, index=p.index + 100, values={"oven": -20.0, **p.values}, seconds=p.seconds)
        for p in again.points
    ]
    axes = [{"instrument": "oven", "values": [25, -20]}, {"instrument": "att", "values": STEPS}]
    settings = {**run.settings, "sweep": {"axes": axes, "sensitivity_ber": 1e-3}}
    settings["instruments"] = {**settings["instruments"], "oven": {"quantity": "temperature", "unit": "C"}}
    found = assess(replace(run, points=tuple(points), settings=settings))
    values = {s["at"]["oven"]: s["value"] for s in found.more["sensitivities"]}
    assert values == {25.0: pytest.approx(CROSSING, abs=0.1), -20.0: pytest.approx(CROSSING - 1.5, abs=0.1)}
    assert found.verdict == "FAIL"
    sheet = sheet_of_assessment(found)
    assert [words.partition(":")[0] for words in sheet.sensitivities] == ["oven 25", "oven -20"]
