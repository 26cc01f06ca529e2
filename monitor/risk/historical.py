"""Historical simulation."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from decimal import Decimal
from fractions import Fraction

import numpy as np

from monitor.risk.figures import Figures, Floats, screen
from monitor.risk.tail import Tail, root_of_time, tail_share

_BLOCK = 256
_PIECE = 256  # numpy finds the smallest of so few at once, several times faster for each than those of a longer row


def historical(pnl: Floats, confidence: Decimal, horizon_days: int = 1) -> Tail:
    """Value at risk and expected shortfall of equally weighted scenarios.

    pnl: (subjects, n), n >= 1. With P ascending and m = (1 - confidence) n, exactly:
    value at risk = -P_(k), k = ceil(m), the convention of Hull (RMFI, ch. 13);
    expected shortfall = -(P_(1) + ... + P_(j) + (m - j) P_(j+1)) / m, j = floor(m) (Acerbi and Tasche 2002, "On the
    coherence of expected shortfall"), or -P_(1) with exact_tail False when m < 1.
    Beyond one day both grow with the square root of the horizon: too little where days are positively autocorrelated,
    too much where negatively, and too much far out in the tail where single days are fat-tailed, whose sums thin out.

    Holds for both: positive homogeneity, translation (by one day's sure gain), monotonicity in the scenarios and in
    the confidence, value at risk <= shortfall, no dependence on the order of scenarios, a row alone = the row in a
    block to the last bit. Sub-additive is the shortfall alone.
    """
    return historical_at(pnl, [confidence], horizon_days)[0]


def historical_at(pnl: Floats, confidences: Sequence[Decimal], horizon_days: int = 1) -> tuple[Tail, ...]:
    """`historical` at several confidences, one tail for each, for little more than the price of the lowest."""
    shares = [tail_share(confidence) for confidence in confidences]
    root = root_of_time(horizon_days)
    scenarios, lack = screen(pnl, least=1)
    subjects, n = scenarios.shape
    if n < 1 or not shares:
        nothing = Figures.of(np.zeros(subjects), lack)
        return tuple(Tail(nothing, nothing, exact_tail=False, note=np.zeros_like(lack)) for _ in shares)
    counted = [max(share * n, Fraction(1)) for share in shares]
    ranks = [math.ceil(many) for many in counted]
    weights = [
        np.array([float(min(many - place, 1)) for place in range(rank)])
        for many, rank in zip(counted, ranks, strict=True)
    ]
    value_at_risk, shortfall = np.empty((2, len(shares), subjects))
    with np.errstate(all="ignore"):
        for rows, worst in _worst(scenarios, max(ranks)):
            for level, rank in enumerate(ranks):
                value_at_risk[level, rows] = -worst[:, rank - 1]
                shortfall[level, rows] = -(worst[:, :rank] * weights[level]).sum(axis=1) / float(counted[level])
        # The mean of equal losses can round to just below them; the shortfall is never below the value at risk.
        np.maximum(shortfall, value_at_risk, out=shortfall)
        return tuple(
            Tail(
                Figures.of(value_at_risk[level] * root, lack),
                Figures.of(shortfall[level] * root, lack),
                exact_tail=share * n >= 1,
                note=np.zeros_like(lack),
            )
            for level, share in enumerate(shares)
        )


def _worst(scenarios: Floats, rank: int) -> Iterator[tuple[slice, Floats]]:
    """Some rows at a time, the `rank` smallest of each, ascending: (rows, rank), until the next are asked for."""
    subjects, n = scenarios.shape
    pieces = math.ceil(n / _PIECE) if 4 * rank <= _PIECE else 1
    # One memory for all blocks: fresh memory costs more than the arithmetic.
    room, room_for_found = np.empty((min(_BLOCK, subjects), n)), np.empty((min(_BLOCK, subjects), pieces * rank))
    for start in range(0, subjects, _BLOCK):
        rows = slice(start, start + _BLOCK)
        block = room[: len(scenarios[rows])]
        block[:] = scenarios[rows]
        # Whatever is among the smallest of the row is among the smallest of its piece.
        found = room_for_found[: len(block)]
        for at, piece in enumerate(np.array_split(block, pieces, axis=1)):
            piece.partition(rank - 1, axis=1)
            found[:, at * rank : (at + 1) * rank] = piece[:, :rank]
        found.sort(axis=1)
        yield rows, found[:, :rank]
