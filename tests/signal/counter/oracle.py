"""An independent counter, slow and obviously right: dynamic programming bit by bit over the true places.

It shares nothing with the program: the expected sequence comes from a shift register run one bit at a time
(`made.py`), and it is told which places come in which order, but not where they change. It finds the changes
that leave the fewest mismatches, the earliest where several are equal.
"""

import numpy as np


def count(received, master, offsets):
    """Least mismatches and where the places change.

    Parameters
    ----------
    received
        Bits, 0 and 1.
    master
        The pattern's bits, far enough either way.
    offsets
        In order: (index of the master's bit expected for received bit 0, polarity turned).

    Returns
    -------
    (errors, cuts)
        Cut j is the first received bit at place j + 1.
    """
    best = [(0, ())] + [None] * (len(offsets) - 1)  # for each place that may hold now: mismatches, cuts
    for bit, value in enumerate(received):
        for j in range(1, len(offsets)):
            entered = (best[j - 1][0], (*best[j - 1][1], bit))
            # Staying means that the change lay earlier: it wins where both are equal.
            if best[j] is None or entered[0] < best[j][0]:
                best[j] = entered
        best = [
            (mismatches + (int(value) != int(master[index + bit]) ^ turned), cuts)
            for (mismatches, cuts), (index, turned) in zip(best, offsets, strict=True)
        ]
    for j in range(1, len(offsets)):  # a place may also begin where the stream has ended
        if best[j - 1][0] < best[j][0]:
            best[j] = (best[j - 1][0], (*best[j - 1][1], len(received)))
    return best[-1][0], list(best[-1][1])


def count_many(streams):
    """The same for many streams at once, side by side but still bit by bit.

    Parameters
    ----------
    streams
        Of (received, master, offsets) as `count` takes them.

    Returns
    -------
    list of (errors, cuts)
    """
    n = len(streams)
    ends = [len(received) for received, _, _ in streams]
    length = max(ends)
    places = max(len(offsets) for _, _, offsets in streams)
    wrong = np.zeros((length + 1, places, n), dtype=np.uint8)
    for s, (received, master, offsets) in enumerate(streams):
        for j, (index, turned) in enumerate(offsets):
            wrong[: ends[s], j, s] = received ^ master[index : index + ends[s]] ^ turned
    best = np.full((places, n), 1 << 29, dtype=np.int32)
    best[0] = 0
    entered = np.zeros((length + 1, places, n), dtype=np.bool_)  # the best way to be here came over just now
    for bit in range(length + 1):
        over = np.minimum.accumulate(best, axis=0)
        np.less(over, best, out=entered[bit])
        best = over + wrong[bit]
    return [
        (int(best[len(offsets) - 1, s]), _trace(entered[: ends[s] + 1, :, s], len(offsets) - 1))
        for s, (_, _, offsets) in enumerate(streams)
    ]


def _trace(entered, place):
    """Follow the best way back from the last place at the stream's end."""
    cuts, bit = [], len(entered) - 1
    while place:
        while not entered[bit, place]:
            bit -= 1
        cuts.append(bit)
        place -= 1
    return cuts[::-1]
