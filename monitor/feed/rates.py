"""What one unit of each currency is worth in the base currency: direct, inverse or crossed from the pairs given."""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Sequence

import numpy as np

from monitor.world import Floats, Integers


def chains(pairs: Sequence[str], base: str) -> Mapping[str, tuple[tuple[int, int], ...]]:
    """For each currency that the pairs connect with the base, the shortest chain of (pair, exponent) to multiply.

    The pair XXXYYY says how much YYY one XXX costs: exponent +1 leads from XXX to YYY, -1 back. Among chains of one
    length the first by the pairs' alphabetical order is taken, so that the choice does not depend on the file.
    """
    found: dict[str, tuple[tuple[int, int], ...]] = {base: ()}
    queue = deque([base])
    order = sorted(range(len(pairs)), key=lambda at: pairs[at])
    while queue:
        target = queue.popleft()
        for at in order:
            quoted, priced = pairs[at][:3], pairs[at][3:]
            for source, end, exponent in ((quoted, priced, 1), (priced, quoted, -1)):
                if end == target and source not in found:
                    found[source] = ((at, exponent), *found[target])
                    queue.append(source)
    return found


def worth(
    rates: Floats, rate_days: Integers, pairs: Sequence[str], currencies: Sequence[str], base: str
) -> tuple[Floats, Integers]:
    """Worth of one unit of each currency in the base, from rates (days, pairs) to (currencies, days).

    The second array says from which day each figure comes: a crossed rate is as old as the oldest rate of its chain.
    NaN and day 0 where no chain of pairs leads to the base or a rate of the chain is not known.
    """
    known = chains(pairs, base)
    values = np.full((len(currencies), len(rates)), np.nan)
    days = np.zeros((len(currencies), len(rates)), dtype=np.int64)
    for row, currency in enumerate(currencies):
        if currency not in known:
            continue
        values[row] = 1.0
        days[row] = np.iinfo(np.int64).max
        for at, exponent in known[currency]:
            values[row] *= rates[:, at] ** exponent
            days[row] = np.minimum(days[row], rate_days[:, at])
    return values, days
