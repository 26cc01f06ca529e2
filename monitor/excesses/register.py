"""What the register holds of each excess."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

from monitor.words import CuredBy, ExcessState, Side, Subject, Unit


@dataclass(frozen=True)
class Excess:
    """One run of evenings on which a rule was over for a subject, from opening to cure.

    last_*: the newest evening on which it was over. worst_*: the evening with the largest distance. level: the limit
    it was last held against. Amounts are in `unit`, and in `currency` where the unit is an amount.
    """

    id: str
    rule: str
    subject: Subject
    side: Side
    unit: Unit
    currency: str | None
    owner: str | None
    state: ExcessState
    opened_on: date
    opened_value: float
    last_on: date
    last_value: float
    worst_on: date
    worst_value: float
    worst_distance: float
    level: float
    cured_on: date | None = None
    cured_by: CuredBy | None = None
    cured_value: float | None = None
    void_reason: str | None = None

    @property
    def alive(self) -> bool:
        return self.state in (ExcessState.OPEN, ExcessState.WAIVED)
