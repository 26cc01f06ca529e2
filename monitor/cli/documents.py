"""What commands print as JSON."""

from __future__ import annotations

from typing import Any

from monitor.evening import Checked
from monitor.excesses import store
from monitor.excesses.register import Excess
from monitor.paging import was_alive
from monitor.state import State
from monitor.words import ExcessState
from monitor.world import Answer


def evening_document(state: State, checked: Checked) -> dict[str, Any]:
    """One evening, as `check --json` prints it. seq, head: number and hash of its ledger entry."""
    evening, standings = checked.evening, checked.standings
    day = evening.recipe.date
    alive = {
        (excess.rule, excess.subject.key): excess for excess in store.load(state.index()) if was_alive(excess, day)
    }
    return {
        "site": state.site.settings.site,
        "business_date": str(day),
        "round": evening.recipe.round,
        "edition": evening.edition,
        "outcome": standings.outcome,
        "standings": [_standing(answer, alive.get((answer.rule, answer.subject.key))) for answer in standings.answers],
        "withheld": [],
        "unmeasured": [{"subject": gap.subject.key, "reason": gap.reason} for gap in standings.unmeasured],
        "uncovered": [subject.key for subject in standings.uncovered],
        "lacking": list(standings.lacking),
        "seq": evening.seq,
        "head": evening.hash,
    }


def _standing(answer: Answer, excess: Excess | None) -> dict[str, Any]:
    how = answer.how
    return {
        "rule": answer.rule,
        "subject": answer.subject.key,
        "measure": answer.measure,
        "value": answer.value,
        "unit": answer.unit,
        "currency": answer.currency,
        "near": answer.near,
        "limit": answer.limit,
        "limit_below": answer.limit_below,
        "distance": answer.distance,
        "utilisation": answer.utilisation,
        "standing": answer.standing,
        "low": answer.low,
        "high": answer.high,
        "unbounded": answer.unbounded,
        "n": answer.n,
        "reason": answer.reason,
        "marks": [{"mark": mark.kind, "note": mark.note} for mark in answer.marks],
        "excess": excess.id if excess else None,
        "waived": excess is not None and excess.state is ExcessState.WAIVED,
        "method": how.method,
        "confidence": None if how.confidence is None else str(how.confidence),
        "horizon_days": how.horizon_days,
        "window": how.window,
        "detail": how.detail,
    }


def excess_document(excess: Excess, day: int | None) -> dict[str, Any]:
    """One excess. day: its business day today, None once it is cured or void."""
    return {
        "excess": excess.id,
        "rule": excess.rule,
        "subject": excess.subject.key,
        "state": excess.state,
        "day": day,
        "opened_on": str(excess.opened_on),
        "opened_value": excess.opened_value,
        "last_on": str(excess.last_on),
        "last_value": excess.last_value,
        "worst_on": str(excess.worst_on),
        "worst_value": excess.worst_value,
        "worst_distance": excess.worst_distance,
        "level": excess.level,
        "side": excess.side,
        "unit": excess.unit,
        "currency": excess.currency,
        "owner": excess.owner,
        "cured_on": str(excess.cured_on) if excess.cured_on else None,
        "cured_by": excess.cured_by,
        "void_reason": excess.void_reason,
    }
