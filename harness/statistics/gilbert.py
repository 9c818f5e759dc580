"""The Gilbert-Elliott model: a channel that is good or bad by turns, fitted to error positions.

Each bit is an error with a probability that depends on a hidden state; the state changes from bit to bit
with fixed probabilities (Gilbert, "Capacity of a burst-noise channel", 1960; Elliott, 1963).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
MOST_ERRORS = 1_000  # a fit looks at no more than so many, from the first on: enough, and quick


@dataclass(frozen=True, slots=True)
class GilbertElliott:
    """A fitted model; probabilities are per bit."""

    enter: float  # from good to bad
    leave: float  # from bad to good
    ber_inside: float  # in the bad state
    ber_outside: float  # in the good state

    @property
    def mean_burst_bits(self) -> float:
        """Mean length of a stay in the bad state, bits."""
        return 1 / self.leave

    @property
    def ber(self) -> float:
        """Error ratio over both states."""
        share = self.enter / (self.enter + self.leave)
        return share * self.ber_inside + (1 - share) * self.ber_outside


def fit_gilbert_elliott(
    positions: NDArray[np.int64], bits: int, starts: NDArray[np.int64], ends: NDArray[np.int64]
) -> GilbertElliott | None:
    """Fit by maximum likelihood, exactly over all bits, with and without errors.

    Parameters
    ----------
    positions
        Shape (k,), bits, ascending; k >= 2.
    bits
        Bits compared.
    starts, ends
        First and last error of each error event, shape (events,): where the search begins.

    Returns
    -------
    GilbertElliott or None
        None with fewer than two errors.
    """
    from scipy.optimize import minimize  # only clustered runs need it, and it takes long to read

    if len(positions) < 2:
        return None
    if len(positions) > MOST_ERRORS:
        bits = int(positions[MOST_ERRORS])
        positions = positions[:MOST_ERRORS]
        seen = starts <= positions[-1]
        starts, ends = starts[seen], np.minimum(ends[seen], positions[-1])
    zeros = np.diff(positions, prepend=-1).astype(np.float64) - 1  # error-free bits before each error
    last = float(bits - 1 - positions[-1])

    def cost(logits: Array) -> float:
        enter, leave, inside, outside = 1 / (1 + np.exp(-logits))
        if enter + leave >= 1 or outside >= inside:
            return 1e12
        return -_log_likelihood(enter, leave, inside, outside, zeros, last)

    spans = ends - starts + 1
    leave = min(0.5, 1 / float(spans.mean()))
    enter = min(0.4, len(starts) / bits)
    inside = min(0.9, max(0.02, (len(positions) - len(starts)) / max(1.0, float((spans - 1).sum()))))
    begin = np.array([enter, leave, inside, max(enter * 1e-2, 1e-15)])
    best = minimize(
        cost,
        np.log(begin / (1 - begin)),
        method="Nelder-Mead",
        options={"xatol": 0.01, "fatol": 0.01, "maxfev": 400, "initial_simplex": _simplex(begin)},
    )
    values = [float(v) for v in 1 / (1 + np.exp(-best.x))]
    return GilbertElliott(*values)


def _simplex(begin: Array) -> Array:
    centre = np.log(begin / (1 - begin))
    return np.vstack([centre, centre + np.diag([0.7, 0.7, 0.7, 2.0])])


def _log_likelihood(
    enter: float, leave: float, inside: float, outside: float, zeros: Array, last: float
) -> float:
    """Log-likelihood of errors after so many error-free bits each, then `last` error-free bits.

    The product of 2x2 matrices is taken as a tree, so that numpy does whole levels at once. Powers of the
    error-free step come from its eigenvalues, whose distances from 1 are computed without cancellation:
    stretches of 1e15 bits keep their digits.
    """
    w11 = enter + outside - enter * outside
    w22 = leave + inside - leave * inside
    w12, w21 = enter * (1 - inside), leave * (1 - outside)  # 1 - step = [[w11, -w12], [-w21, w22]]
    determinant = enter * inside * (1 - outside) + outside * leave * (1 - inside) + outside * inside
    trace = w11 + w22
    root = math.sqrt(max(0.0, (w11 - w22) ** 2 + 4 * w12 * w21))
    far = (trace + root) / 2
    near = determinant / far
    if root <= 0 or far >= 1:
        return -1e12
    count = np.append(zeros, last)
    slow = count * math.log1p(-near)
    ratio = np.exp(count * (math.log1p(-far) - math.log1p(-near)))  # fast over slow eigenvalue's power
    # step^n = slow^n * P + fast^n * (1 - P), P = (far - W)/(far - near)
    p11, p12, p21, p22 = (far - w11) / root, w12 / root, w21 / root, (far - w22) / root
    m = np.empty((len(count), 2, 2))
    m[:, 0, 0] = p11 + ratio * (1 - p11)
    m[:, 0, 1] = p12 * (1 - ratio)
    m[:, 1, 0] = p21 * (1 - ratio)
    m[:, 1, 1] = p22 + ratio * (1 - p22)
    # The state changes, then the bit is sent: a bit's step is (transition) times (its chance in that state).
    error = np.array([[(1 - enter) * outside, enter * inside], [leave * outside, (1 - leave) * inside]])
    m[:-1] = m[:-1] @ error
    scale = float(slow.sum())
    while len(m) > 1:
        if len(m) % 2:
            m = np.concatenate([m, np.eye(2)[None]])
        m = m[0::2] @ m[1::2]
        top = m.max(axis=(1, 2))
        if top.min() <= 0:
            return -1e12
        m /= top[:, None, None]
        scale += float(np.log(top).sum())
    start = np.array([leave, enter]) / (enter + leave)
    return scale + math.log(max(float(start @ m[0] @ np.ones(2)), 1e-300))
