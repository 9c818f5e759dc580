"""The curve of a sweep: likelihood against slow integration, and how often the bounds hold the truth."""

import math

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import ndtr
from scipy.stats import binom

from harness.statistics.curve import CurvePoint, fit_curve, likelihood_drop
from harness.statistics.curve_model import Counts, Shape, log_likelihood, telling_points

TARGET = 1e-6


def textbook(y):
    return ndtr(-math.sqrt(2) * 10 ** (np.asarray(y, dtype=float) / 20))


def exponential(y):
    return 0.5 * np.exp(-(10 ** (np.asarray(y, dtype=float) / 10)))


def dropping_out(y):
    """The textbook's, but the link is lost above a BER of 0.05."""
    ber = textbook(y)
    return np.where(ber > 0.05, 0.5, ber)


def levelling_off(y):
    """With a floor so low that it is seldom worth fitting."""
    return textbook(y) + 2e-9


FAMILY = {"textbook": textbook}
OTHERS = {"exponential": exponential, "dropping out": dropping_out, "levelling off": levelling_off}


def sweep(rng, curve, *, scatter_db=0.0, step=0.5, errors=100, bits=10**9, turned=50.0):
    """Attenuations from good to bad, each measured until so many errors or bits."""
    quality = np.arange(3.0, 14.0, step) + rng.uniform(0, step)
    ber = curve(quality + scatter_db * rng.standard_normal(len(quality)))
    points = []
    for y, p in zip(quality.tolist(), np.atleast_1d(ber).tolist(), strict=True):
        n = int(min(math.ceil(errors / p), bits))
        lost = p > 0.45
        points.append(
            CurvePoint(turned - y, 0 if lost else n, 0 if lost else int(rng.binomial(n, p)), aligned=not lost)
        )
    return points


def truth(curve, turned=50.0):
    return turned - brentq(lambda y: math.log(float(curve(y)) / TARGET), 6, 13.4)


def holds(fit, value):
    return (fit.lower is None or fit.lower <= value) and (fit.upper is None or fit.upper >= value)


RUNS = 40


@pytest.fixture(scope="module", params=[0.0, 0.1])
def scattered(request):
    """The scatter, and 40 fits of the textbook's curve with it."""
    rng = np.random.default_rng(1)
    return request.param, [
        fit_curve(sweep(rng, textbook, scatter_db=request.param), TARGET) for _ in range(RUNS)
    ]


def test_bounds_hold_the_sensitivity(scattered):
    """At a true 0.95, 31 of 40 or fewer come once in 1e4; bounds so wide that they say nothing fail too."""
    scatter_db, fits = scattered
    assert sum(holds(fit, truth(textbook)) for fit in fits) >= 32
    assert np.median([fit.upper - fit.lower for fit in fits]) < (0.3 if scatter_db else 0.15)
    found = np.mean([fit.scatter_db for fit in fits])
    assert 0.04 < found < 0.13 if scatter_db else found < 0.02


def test_a_true_curve_is_seldom_accused_and_seldom_given_a_floor(scattered):
    """Goodness at a true 1 %: 4 of 40 or more once in 1 000. Floor at about 2 %: 5 or more once in 1 000."""
    _, fits = scattered
    assert all(fit.goodness is not None for fit in fits)
    assert sum(fit.goodness < 0.01 for fit in fits) < 4
    assert sum(fit.floor > 0 for fit in fits) < 5


@pytest.mark.campaign
@pytest.mark.parametrize("scatter_db", [0.0, 0.1])
@pytest.mark.parametrize("name", [*FAMILY, *OTHERS])
@pytest.mark.parametrize(("step", "errors", "bits"), [(0.75, 100, 10**9), (0.5, 10**9, 10**8)])
def test_campaign_bounds_hold_the_sensitivity(scatter_db, name, step, errors, bits):
    """1 000 sweeps: the family's own in at least 930, others in at least 900."""
    rng = np.random.default_rng(2)
    curve = (FAMILY | OTHERS)[name]
    value = truth(curve)
    held = unbounded = 0
    for _ in range(1_000):
        fit = fit_curve(sweep(rng, curve, scatter_db=scatter_db, step=step, errors=errors, bits=bits), TARGET)
        held += holds(fit, value)
        unbounded += fit.lower is None or fit.upper is None
    print(f"{name}, step {step}, {bits:g} bits, scatter {scatter_db}: held {held}, unbounded {unbounded}")
    assert held >= (930 if name in FAMILY else 900)
    assert unbounded <= 20


@pytest.mark.parametrize("name", list(OTHERS))
def test_bounds_hold_for_other_families(name):
    """At a true 0.93, 10 of 16 or fewer come once in 1 500."""
    rng = np.random.default_rng(3)
    value = truth(OTHERS[name])
    held = sum(holds(fit_curve(sweep(rng, OTHERS[name], scatter_db=0.1), TARGET), value) for _ in range(16))
    assert held >= 11


SHAPES = [
    Shape(10.5, 1.0, 0.1, anchor_ber=TARGET),
    Shape(10.4, 1.2, 0.3, 2e-7, TARGET),
    Shape(0.1, 1.1, 0.2, 1e-8),
    Shape(10.4, 1.0, 0.1, anchor_ber=TARGET, bend=0.02),
    Shape(10.53, 1.0, 0.001, anchor_ber=TARGET),
]


@pytest.fixture
def counts():
    rng = np.random.default_rng(0)
    level = np.arange(6.0, 13.0, 0.5)
    errors = rng.binomial(10**7, textbook(level + 0.1 * rng.standard_normal(len(level))))
    assert errors.min() == 0  # points without errors are among them
    return Counts(level, np.full(len(level), 1e7), errors.astype(float), np.array([3.0, 9.0]), 1e-5)


@pytest.mark.parametrize("shape", SHAPES)
def test_likelihood_is_the_binomial_averaged_over_the_level_error(shape, counts):
    """The integral over the error by 20 001 equal steps to nine scatters, point by point."""
    error = np.linspace(-9, 9, 20_001)
    total = 0.0
    for y, n, k in zip(counts.level, counts.bits, counts.errors, strict=True):
        log_l = binom.logpmf(k, n, shape.ber(y + shape.scatter_db * error)) - binom.logpmf(k, n, k / n)
        log_l = log_l - error**2 / 2
        top = log_l.max()
        total += top + math.log(np.exp(log_l - top).sum() * (error[1] - error[0]) / math.sqrt(2 * math.pi))
    alone = Counts(counts.level, counts.bits, counts.errors, np.array([]), counts.worse_ber)
    assert log_likelihood(alone, shape)[0] == pytest.approx(total, abs=0.01)


@pytest.mark.parametrize("shape", SHAPES)
def test_gradient_is_the_slope_of_the_likelihood(shape, counts):
    def moved(i, by):
        values = [shape.anchor, math.log(shape.stretch), shape.scatter_db, shape.floor, shape.bend]
        values[i] += by
        new = Shape(values[0], math.exp(values[1]), values[2], values[3], shape.anchor_ber, values[4])
        return log_likelihood(counts, new)[0]

    # Points that say only "worse" take no notice of the bend; the floor's slope is tried where there is one.
    gradient = log_likelihood(counts, shape)[1]
    for i, by in enumerate((1e-5, 1e-5, 1e-5, 1e-11, 1e-6)):
        if i == 3 and not shape.floor:
            continue
        slope = (moved(i, by) - moved(i, -by)) / (2 * by)
        assert gradient[i] == pytest.approx(slope, rel=2e-3, abs=0.02)


def test_a_point_without_errors_bounds_the_good_side_and_a_lost_one_the_bad_side():
    points = [CurvePoint(40, 10**8, 0), CurvePoint(41, 10**8, 0), CurvePoint(42, 0, 0, aligned=False)]
    fit = fit_curve(points, TARGET)
    assert fit.rising is True
    assert fit.only_worse == (2,)
    assert fit.fitted
    # With one point only beyond the target and none that counted errors, the scatter is open: at least
    # the point itself, and the lost one, lie within the bounds or the side has none.
    assert fit.lower is None or fit.lower < 41.5
    assert fit.upper is None or fit.upper > 41


def test_direction_is_found_and_turns_the_answer_over():
    rng = np.random.default_rng(5)
    points = sweep(rng, textbook)
    rising = fit_curve(points, TARGET)
    falling = fit_curve([CurvePoint(-p.x, p.bits, p.errors, p.aligned) for p in points], TARGET)
    assert (rising.rising, falling.rising) == (True, False)
    assert falling.value == pytest.approx(-rising.value, abs=1e-9)
    assert (falling.lower, falling.upper) == pytest.approx((-rising.upper, -rising.lower), abs=1e-9)
    assert fit_curve(points, TARGET, rising=True) == rising
    assert rising.bracket[0] > rising.value > rising.bracket[1]


def test_points_that_do_not_differ_tell_no_direction():
    fit = fit_curve([CurvePoint(1, 10**6, 0), CurvePoint(2, 10**6, 0)], TARGET)
    assert (fit.rising, fit.value, fit.lower, fit.upper, fit.fitted) == (None, None, None, None, False)
    assert "direction" in fit.words
    assert fit_curve([], TARGET).rising is None


def test_no_errors_anywhere_give_no_sensitivity():
    fit = fit_curve([CurvePoint(x, 10**9, 0) for x in range(5)], TARGET, rising=True)
    assert (fit.value, fit.fitted) == (None, False)
    assert fit.lower is None or fit.upper is None


def test_one_value_gives_no_curve():
    fit = fit_curve([CurvePoint(30, 10**7, 50), CurvePoint(30, 10**7, 60)], TARGET, rising=True)
    assert (fit.value, fit.fitted, fit.lower, fit.upper) == (None, False, None, 30)
    assert "one value" in fit.words


def test_a_floor_over_the_target_leaves_no_sensitivity():
    rng = np.random.default_rng(6)
    fit = fit_curve(sweep(rng, lambda y: textbook(y) + 3e-6), TARGET)
    assert fit.floor == pytest.approx(3e-6, rel=0.2)
    assert (fit.value, fit.lower, fit.upper) == (None, None, None)
    assert "levels off" in fit.words


def test_a_floor_under_the_target_is_found_and_the_bounds_hold():
    rng = np.random.default_rng(7)

    def curve(y):
        return textbook(y) + 2e-7

    fits = [fit_curve(sweep(rng, curve), TARGET) for _ in range(12)]
    assert np.median([fit.floor for fit in fits]) == pytest.approx(2e-7, rel=0.15)
    assert sum(holds(fit, truth(curve)) for fit in fits) >= 9  # at 0.95, 8 or fewer once in 400


def test_points_of_no_curve_are_said_to_be_none_and_bracketed():
    """A staircase: the same BER over three decibels, then a cliff, then flat again."""
    stairs = [3e-5, 2.9e-5, 3.1e-5, 2.8e-5, 3e-5, 1e-7, 0.9e-7, 1.1e-7, 1e-7, 0.9e-7, 1e-7]
    points = [CurvePoint(40 - i, 10**10, round(p * 10**10)) for i, p in enumerate(stairs)]
    fit = fit_curve(points, TARGET)
    assert fit.goodness is not None
    assert fit.goodness < 0.01 or fit.floor > 0
    assert (fit.lower, fit.upper) == (35, 36) or fit.floor > 0
    bumpy = [3e-5, 1e-5, 2e-5, 4e-7, 3e-6, 2e-8, 3e-7, 1e-6, 1e-9, 1e-7]
    points = [CurvePoint(40 - i, 10**11, round(p * 10**11)) for i, p in enumerate(bumpy)]
    fit = fit_curve(points, TARGET)
    assert fit.scatter_db > 0.3 if fit.fitted else fit.goodness < 0.01


def test_points_far_over_the_target_only_say_that_they_are_worse():
    rng = np.random.default_rng(10)
    points = sweep(rng, textbook)
    fit = fit_curve(points, TARGET)
    far = {i for i, p in enumerate(points) if not p.aligned or p.errors / p.bits > 2e-4}
    assert far <= set(fit.only_worse)
    assert set(fit.used) | set(fit.only_worse) == set(range(len(points)))
    changed = [
        CurvePoint(p.x, p.bits, min(p.bits, 2 * p.errors)) if i in far else p for i, p in enumerate(points)
    ]
    assert fit_curve(changed, TARGET) == fit


def test_the_curve_itself_can_be_drawn():
    fit = fit_curve(sweep(np.random.default_rng(11), textbook), TARGET)
    assert fit.ber(fit.value) == pytest.approx(TARGET, rel=1e-6)
    assert fit.ber(fit.value + 1) > TARGET > fit.ber(fit.value - 1)
    assert fit.stretch == pytest.approx(1, abs=0.1)
    assert fit.x0 == pytest.approx(50, abs=1)


def test_drop_is_students_and_nears_the_chi_square():
    """Normal errors: (m/2) ln(1 + t^2/(m-2)); t of 3 degrees at 97.5 % is 3.1824."""
    assert likelihood_drop(5, 0.95) == pytest.approx(2.5 * math.log1p(3.1824**2 / 3), rel=1e-4)
    assert likelihood_drop(10_000, 0.95) == pytest.approx(1.9207, rel=1e-3)
    assert likelihood_drop(0, 0.95) == likelihood_drop(3, 0.95) > likelihood_drop(4, 0.95)


def test_telling_points_are_those_that_fix_their_level(counts):
    """At 1e7 bits the textbook curve falls e^2 to e^3-fold a dB: some 25 errors and more tell, floors do not."""
    shape = Shape(10.53, 1.0, 0.0, anchor_ber=TARGET)
    expected = 1e7 * textbook(counts.level)
    telling = telling_points(counts, shape)
    assert np.count_nonzero(expected > 60) <= telling <= np.count_nonzero(expected > 8)
    floored = Shape(0.0, 1.0, 0.0, floor=1e-5)
    assert telling_points(counts, floored) < telling


@pytest.mark.parametrize(
    ("points", "target"),
    [
        ([CurvePoint(math.nan, 10, 0)], TARGET),
        ([CurvePoint(1, 10, 11)], TARGET),
        ([CurvePoint(1, 10, -1)], TARGET),
        ([], 0.0),
        ([], 0.2),
        ([], math.nan),
    ],
)
def test_points_and_targets_that_are_none_are_refused(points, target):
    with pytest.raises(ValueError, match=r"target|finite|between"):
        fit_curve(points, target)
