"""Is B worse than A? Exact tests on two counts, and the ratio of their error ratios with bounds.

Given the total of both counts, the number that fell on B is binomial, with a chance that depends on the
ratio alone (Przyborowski and Wilenski, Biometrika 31, 1940). For bits this is exact where errors are rare;
where they are not it errs on the side of not accusing.
"""

from __future__ import annotations

from dataclasses import dataclass

from scipy.special import betainc

from harness.statistics.bounds import clopper_pearson, lower_bound, upper_bound
from harness.statistics.notation import multiple


@dataclass(frozen=True, slots=True)
class Comparison:
    """B against A; a ratio over 1 means that B has more errors per bit (or errored seconds per second)."""

    confidence: float
    p_value: float  # chance of B looking at least so much worse, were both the same
    p_value_better: float  # the same the other way round
    worse: bool  # at this confidence, one-sided
    better: bool
    ratio: float | None  # None: A has none
    lower: float  # two-sided bounds on the ratio
    upper: float | None  # None: unbounded
    lower_one_sided: float  # 1 or more where B is worse
    upper_one_sided: float | None
    words: str


def compare_counts(
    errors_a: int, bits_a: int, errors_b: int, bits_b: int, confidence: float = 0.95
) -> Comparison:
    """Compare two bit error ratios from independent errors.

    Parameters
    ----------
    errors_a, bits_a, errors_b, bits_b
        Counts, in bits; up to 1e18.
    confidence
        Of the two-sided bounds, and of "worse" and "better", each one-sided.

    Raises
    ------
    ValueError
        If a count is negative, exceeds its bits, or there are no bits.

    Examples
    --------
    >>> compare_counts(10, 10**6, 30, 10**6).worse
    True
    """
    _check(errors_a, bits_a, errors_b, bits_b, confidence, "bits")
    share = bits_b / (bits_a + bits_b)
    total = errors_a + errors_b
    p_worse = float(betainc(errors_b, errors_a + 1, share)) if errors_b else 1.0
    p_better = float(betainc(errors_a, errors_b + 1, bits_a / (bits_a + bits_b))) if errors_a else 1.0
    return _compared("BER", (errors_a, bits_a), (errors_b, bits_b), total, (p_worse, p_better), confidence)


def compare_seconds(
    errored_a: int, seconds_a: int, errored_b: int, seconds_b: int, confidence: float = 0.95
) -> Comparison:
    """Compare two errored second ratios (or any shares of trials that need not be small).

    The test is Fisher's exact one (1934), seconds taken as independent; the bounds on the ratio are those of
    rare events, wider than need be where many seconds are errored.

    Raises
    ------
    ValueError
        As `compare_counts`.
    """
    from scipy.stats import hypergeom

    _check(errored_a, seconds_a, errored_b, seconds_b, confidence, "seconds")
    total, seconds = errored_a + errored_b, seconds_a + seconds_b
    p_worse = float(hypergeom.sf(errored_b - 1, seconds, total, seconds_b))
    p_better = float(hypergeom.sf(errored_a - 1, seconds, total, seconds_a))
    return _compared(
        "errored second ratio",
        (errored_a, seconds_a),
        (errored_b, seconds_b),
        total,
        (min(1.0, p_worse), min(1.0, p_better)),
        confidence,
    )


def _check(hits_a: int, of_a: int, hits_b: int, of_b: int, confidence: float, what: str) -> None:
    if not 0 < confidence < 1:
        raise ValueError("the confidence lies between 0 and 1")
    for hits, of in ((hits_a, of_a), (hits_b, of_b)):
        if of < 1:
            raise ValueError(f"without {what} there is nothing to compare")
        if not 0 <= hits <= of:
            raise ValueError(f"a count lies between 0 and its {what}")


def _compared(
    label: str,
    a: tuple[int, int],
    b: tuple[int, int],
    total: int,
    p_values: tuple[float, float],
    confidence: float,
) -> Comparison:
    (hits_a, of_a), (hits_b, of_b) = a, b
    scale = of_a / of_b
    both_b, both_a = clopper_pearson(hits_b, total, confidence), clopper_pearson(hits_a, total, confidence)
    worse, better = (p <= 1 - confidence for p in p_values)
    ratio = (hits_b * of_a) / (hits_a * of_b) if hits_a else None
    lower = _odds(both_b.lower, both_a.upper, scale) or 0.0
    upper = _odds(both_b.upper, both_a.lower, scale)
    return Comparison(
        confidence=confidence,
        p_value=p_values[0],
        p_value_better=p_values[1],
        worse=worse,
        better=better,
        ratio=ratio,
        lower=lower,
        upper=upper,
        lower_one_sided=_odds(
            lower_bound(hits_b, total, confidence), upper_bound(hits_a, total, confidence), scale
        )
        or 0.0,
        upper_one_sided=_odds(
            upper_bound(hits_b, total, confidence), lower_bound(hits_a, total, confidence), scale
        ),
        words=_words(label, worse, better, p_values, ratio, lower, upper, confidence),
    )


def _odds(share_b: float, share_a: float, scale: float) -> float | None:
    """Ratio that belongs to a share of the total; A's own bound is 1 - share without its cancellation."""
    return share_b / share_a * scale if share_a > 0 else None


def _words(
    label: str,
    worse: bool,
    better: bool,
    p_values: tuple[float, float],
    ratio: float | None,
    lower: float,
    upper: float | None,
    confidence: float,
) -> str:
    level = f"{confidence * 100:g} %"
    bounds = f"{multiple(lower)} to {'any' if upper is None else multiple(upper)}"
    times = (
        f"the ratio of the two lies at {bounds} ({level})"
        if ratio is None
        else f"its {label} is {multiple(ratio)} times A's, {bounds} ({level})"
    )
    if worse or better:
        verdict = "worse" if worse else "better"
        return f"B is {verdict} than A: {times}; so much by chance alone ({_chance(p_values[0 if worse else 1])})."
    return (
        f"No difference shown: {times}; B as bad as this or worse by chance alone ({_chance(p_values[0])})."
    )


def _chance(p_value: float) -> str:
    return "p under 1e-12" if p_value < 1e-12 else f"p = {p_value:.2g}"
