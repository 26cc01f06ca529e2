"""Within what relative difference a measure must agree when it is worked out again under other library versions."""

from __future__ import annotations

from monitor.risk.methods import ROUNDING, TOLERANCE
from monitor.world import How


def tolerance(how: How) -> float:
    """That of the method behind a figure; that of plain sums where there is none."""
    return TOLERANCE.get(how.method or "", ROUNDING)
