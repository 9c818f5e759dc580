"""Do errors come in bursts? What that does to the bounds, and what the bursts look like.

Bounds on BER assume independent errors. When errors cluster, the count says less than it seems to: the
bounds from error events (`bursts`) stand beside the others then.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from harness.statistics.bursts import (
    FEWEST_EVENTS,
    EventBounds,
    event_gap_bits,
    event_sizes,
    event_starts,
    fay_feuer,
)
from harness.statistics.dispersion import (
    dispersion_test,
    drift_test,
    gap_test,
    neighbouring_gaps_test,
    paired_blocks_test,
)
from harness.statistics.gilbert import GilbertElliott, fit_gilbert_elliott

SEED = 9_107  # any fixed number: the same record gives the same figures


@dataclass(frozen=True, slots=True)
class Clustering:
    """What error positions say about their independence."""

    clustered: bool
    dispersion: float  # index over equal blocks; 1 where errors are independent
    blocks: int
    p_value: float  # the smaller of dispersion's and the gaps', doubled: two tests share the risk
    dispersion_p_value: float
    gap_p_value: float
    trend: bool  # the BER drifts: not by itself clustering
    trend_p_value: float
    errors: int
    bits: int
    events: int
    event_gap_bits: int
    largest_event: int  # errors
    bounds: EventBounds | None  # on BER, from events; None under ten events
    too_few_events: bool  # clustered, with fewer than ten events: nothing can be stated
    mean_burst_bits: float | None  # Gilbert-Elliott; None where errors do not cluster
    ber_inside: float | None
    ber_outside: float | None
    words: str


def assess_clustering(
    positions: NDArray[np.int64],
    bits: int,
    share: float = 0.01,
    confidence: float = 0.95,
    *,
    gap_bits: int | None = None,
    seed: int = SEED,
) -> Clustering:
    """Say whether errors cluster, and what follows.

    Dispersion over blocks and short gaps are tested, each at half of `share`. Where the rate of error events
    drifts, bursts are called only if they show within the drift as well (neighbouring blocks, neighbouring
    gaps): a slow change of BER alone leaves the count's bounds as they are.

    Parameters
    ----------
    positions
        Shape (k,), indices of *compared* bits, ascending, each once. Where positions were kept up to a limit
        only, give the bits up to the last one kept.
    bits
        Bits compared.
    share
        Highest share of runs with independent errors that may be called clustered.
    confidence
        Of the event bounds, two-sided.
    gap_bits
        Rule for events fixed beforehand; None finds the gap from the positions.
    seed
        Of the simulations.

    Raises
    ------
    ValueError
        If positions do not ascend within the bits.
    """
    positions = np.ascontiguousarray(positions, dtype=np.int64)
    _check(positions, bits, share, confidence)
    spread = dispersion_test(positions, bits, seed)
    gap_p, _ = gap_test(positions, bits)
    p_value = min(1.0, 2 * min(spread.p_value, gap_p))
    gap = gap_bits if gap_bits is not None else event_gap_bits(positions, bits)
    sizes, starts = event_sizes(positions, gap), event_starts(positions, gap)
    trend_p = drift_test(starts, bits, seed + 1)
    trend = trend_p <= share
    clustered = p_value <= share
    if clustered and trend:
        clustered = (
            2 * min(paired_blocks_test(positions, bits, seed + 2), neighbouring_gaps_test(positions)) <= share
        )
    model = _model(positions, bits, sizes, starts) if clustered else None
    bounds = fay_feuer(sizes, bits, confidence) if len(sizes) else None
    few = clustered and len(sizes) < FEWEST_EVENTS
    return Clustering(
        clustered=clustered,
        dispersion=spread.index,
        blocks=spread.blocks,
        p_value=p_value,
        dispersion_p_value=spread.p_value,
        gap_p_value=gap_p,
        trend=trend,
        trend_p_value=trend_p,
        errors=len(positions),
        bits=bits,
        events=len(sizes),
        event_gap_bits=gap,
        largest_event=int(sizes.max()) if len(sizes) else 0,
        bounds=bounds,
        too_few_events=few,
        mean_burst_bits=model.mean_burst_bits if model else None,
        ber_inside=model.ber_inside if model else None,
        ber_outside=model.ber_outside if model else None,
        words=_words(clustered, trend, starts, sizes, bits, model, few),
    )


def _check(positions: NDArray[np.int64], bits: int, share: float, confidence: float) -> None:
    if bits < 0 or not 0 < share < 1 or not 0 < confidence < 1:
        raise ValueError("bits are not negative; share and confidence lie between 0 and 1")
    if len(positions) and (positions[0] < 0 or positions[-1] >= bits or np.any(np.diff(positions) <= 0)):
        raise ValueError("error positions ascend, each once, within the bits compared")


def _model(
    positions: NDArray[np.int64], bits: int, sizes: NDArray[np.int64], starts: NDArray[np.int64]
) -> GilbertElliott | None:
    ends = positions[np.cumsum(sizes) - 1]
    return fit_gilbert_elliott(positions, bits, starts, ends)


def _words(
    clustered: bool,
    trend: bool,
    starts: NDArray[np.int64],
    sizes: NDArray[np.int64],
    bits: int,
    model: GilbertElliott | None,
    few: bool,
) -> str:
    """One or two sentences for screen and report."""
    errors, events = int(sizes.sum()), len(sizes)
    if errors < 2:
        return "Fewer than two errors: nothing can be said about bursts."
    said: list[str] = []
    if clustered:
        said.append(
            f"Errors come in bursts: {errors} errors in {events} events, the largest of {int(sizes.max())}."
        )
        if model:
            said.append(
                f"A burst lasts {model.mean_burst_bits:.3g} bits on average, with a BER of "
                f"{model.ber_inside:.2g} inside and {model.ber_outside:.1e} outside."
            )
        said.append(
            f"Fewer than {FEWEST_EVENTS} events: too few to bound the BER."
            if few
            else "Bounds that take errors as independent are too narrow; those from events hold."
        )
    else:
        said.append("Errors fall as independent ones do." if not trend else "No bursts beside a drift.")
    if trend:
        said.append(f"The BER drifts: it {_direction(starts, bits)} over the run.")
    return " ".join(said)


def _direction(starts: NDArray[np.int64], bits: int) -> str:
    late = int(np.count_nonzero(starts >= bits // 2))
    early = len(starts) - late
    if abs(late - early) <= 3 * (late + early) ** 0.5:
        return "comes and goes"
    return "rises" if late > early else "falls"
