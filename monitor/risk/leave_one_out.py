"""What a subject's figure would be without one of its positions: incremental risk.

Not a component: leaving out a whole position is no small change, and the differences do not add up to the figure.
Subjects hold pairs of `owner` and `position` as in `components`, and the answers are those of a method for the rows
P - x, one a pair: P the subject's scenario P&L (`group_pnl`), x the position's. Where a position is nearly all of P, or
positions cancel, P - x is as exact as the rounding of P, not of what is left.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from decimal import Decimal
from itertools import pairwise

import numpy as np

from monitor.risk.components import Integers, tail_weights
from monitor.risk.figures import Figures, Floats, Lack, screen
from monitor.risk.tail import Tail, root_of_time, tail_share

_BLOCK = 256


def without_each(whole: Floats, pnl: Floats, owner: Integers, position: Integers) -> Iterator[Floats]:
    """Each pair's scenarios of its subject without its position, P - x, in blocks of rows (up to 256, n), in order.

    whole: (subjects, n), P. pnl: (positions, n), x; what is left out may also be a group of positions.

    A position without a finite number spoils the rows of all pairs of its subjects, its own too.
    """
    for start in range(0, len(owner), _BLOCK):
        with np.errstate(all="ignore"):
            yield whole[owner[start : start + _BLOCK]] - pnl[position[start : start + _BLOCK]]


def leave_one_out_by(
    method: Callable[[Floats], Tail], whole: Floats, pnl: Floats, owner: Integers, position: Integers
) -> Tail:
    """The figures of any method, a function of a matrix of rows, without each position: `method(P - x)`, (pairs,).

    Also for the normal, whose variance without x is var(P) - 2 cov(x, P) + var(x): that sum reads the same rows and
    loses half of the digits where a position is nearly all of its subject.
    """
    tails = [method(block) for block in without_each(whole, pnl, owner, position)] or [method(pnl[:0])]

    def joined(name: str) -> Figures:
        figures = [getattr(tail, name) for tail in tails]
        return Figures(np.concatenate([one.value for one in figures]), np.concatenate([one.lack for one in figures]))

    return Tail(
        joined("value_at_risk"),
        joined("expected_shortfall"),
        exact_tail=tails[0].exact_tail,
        note=np.concatenate([tail.note for tail in tails]),
    )


def leave_one_out(
    whole: Floats, pnl: Floats, owner: Integers, position: Integers, confidence: Decimal, horizon_days: int = 1
) -> Tail:
    """`historical` of P - x for every pair, to the last digit, from the few days that can matter.

    With P ascending, k the rank of value at risk and M the largest |x| of the position, only days with
    P_d <= P_(k) + 2 M matter. Proof. On each of the k worst days of P, P_d - x_d <= P_(k) + M; so the kth smallest of
    P - x is at most P_(k) + M. On a day with P_d > P_(k) + 2 M, P_d - x_d >= P_d - M > P_(k) + M: it comes after
    k others, and value at risk and shortfall read no more than the k smallest. Rounding changes nothing: 2 M is exact;
    a double is above the rounded P_(k) + 2 M exactly when it is above the unrounded; and as rounding never turns two
    numbers round, on a day left out the rounded P_d - x_d is still no less than those on the k worst days of P. The
    days kept are a prefix of P's order, and the k worst days are always among them.

    whole: (subjects, n), P. pnl: (positions, n), x. Pairs are taken by the number of their days, those with few
    together. Figures (pairs,), NOT_FINITE where the row of the subject or of the position is not finite.
    """
    root = root_of_time(horizon_days)
    share = tail_share(confidence)
    together, lack_of_whole = screen(whole, least=1)
    n = together.shape[1]
    own, lack_of_own = screen(pnl, least=1)
    lack = np.where(lack_of_whole[owner] == Lack.NONE, lack_of_own[position], lack_of_whole[owner]).astype(np.int8)
    at_risk, shortfall = np.full(len(owner), np.nan), np.full(len(owner), np.nan)
    if n >= 1:
        weights, counted = tail_weights(share, n)
        rank = len(weights)
        with np.errstate(all="ignore"):
            order = np.argsort(together, axis=1, kind="stable")
            ascending = np.take_along_axis(together, order, axis=1)
            largest = np.maximum(own.max(axis=1), -own.min(axis=1))[position]
            bound = ascending[owner, rank - 1] + 2 * largest
            measured = np.flatnonzero(lack == Lack.NONE)
            days = _days_up_to(bound[measured], ascending, owner[measured])
            by_days = np.argsort(days, kind="stable")
            for start in range(0, len(measured), _BLOCK):
                block = by_days[start : start + _BLOCK]
                pairs = measured[block]
                count = int(days[block[-1]])
                whose, which = owner[pairs], position[pairs, np.newaxis]
                left = ascending[whose, :count] - own.take(which * n + order[whose, :count])
                worst = np.partition(left, rank - 1, axis=1)[:, :rank]
                worst.sort(axis=1)
                at_risk[pairs] = -worst[:, -1]
                shortfall[pairs] = np.maximum(-(worst * weights).sum(axis=1) / counted, -worst[:, -1])
    with np.errstate(all="ignore"):
        return Tail(
            Figures.of(at_risk * root, lack),
            Figures.of(shortfall * root, lack),
            exact_tail=share * n >= 1,
            note=np.zeros(len(owner), dtype=np.int8),
        )


def incremental(figures: Figures, without: Figures, owner: Integers) -> Figures:
    """Each subject's figure less its figure without the position, (pairs,); positive when the position adds risk.

    figures: of the subjects. without: of the pairs, from `leave_one_out` or `leave_one_out_by`, by the same method.
    Where the subject has no figure that reason stands, else the reason why there is none without the position.
    """
    lack = figures.lack[owner]
    lack = np.where(lack == Lack.NONE, without.lack, lack).astype(np.int8)
    with np.errstate(all="ignore"):
        return Figures.of(figures.value[owner] - without.value, lack)


def _days_up_to(bound: Floats, ascending: Floats, owner: Integers) -> Integers:
    """How many days of its subject lie at or below each pair's bound, (pairs,)."""
    days = np.empty(len(bound), dtype=np.int64)
    starts = np.flatnonzero(np.diff(owner, prepend=-1)).tolist()
    for start, end in pairwise([*starts, len(owner)]):
        days[start:end] = np.searchsorted(ascending[owner[start]], bound[start:end], side="right")
    return days
