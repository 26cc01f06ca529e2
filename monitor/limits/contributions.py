"""What a subject contributes to the value at risk, or the expected shortfall, of the book or firm that it lies in."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from monitor.limits.measured import Measured, Parameters
from monitor.limits.slices import Slice
from monitor.limits.wholes import whole_of
from monitor.limits.windowed import WORST_FOR_MEAN, WORST_FOR_QUANTILE, how_of, short_mark, tail_call, tail_notes
from monitor.risk.components import marginal as marginal_of
from monitor.risk.figures import LACK_TEXT, Lack
from monitor.risk.methods import incremental_tail, measure_tail, tail_components
from monitor.words import Mark, MarkKind, Unit
from monitor.world import Floats, Integers

NOT_SCALED = 1e-9  # a factor so near to 1 is rounding


def component(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """What the subject's positions contribute to the value at risk (or shortfall) of their book, or of the firm.

    Exposure x marginal: by Euler's principle the components of all positions add up to the figure of the book (Tasche
    1999). Amount; negative where the positions hedge the others.
    """
    measured = _blank(part, parameters)
    for places, positions, rows in _by_whole(part, parameters, measured):
        made = tail_components(rows, tail_call(parameters), parameters["of"])
        _note(measured, places, rows, parameters)
        lack, factor = Lack(int(made.lack[0])), float(made.factor[0])
        values = np.zeros(len(part.exposure))
        values[positions] = made.component
        measured.value[places] = part.members.sum(values)[places]
        for at in places:
            if lack is not Lack.NONE:
                measured.leave_out(at, LACK_TEXT[lack])
            if abs(factor - 1.0) > NOT_SCALED:
                note = (
                    f"shared out by a smoothed quantile (Harrell and Davis), times {factor:.3f} to add up to the figure"
                )
                measured.mark(at, [Mark(MarkKind.METHOD, note)])
    return measured


def marginal(part: Slice, parameters: Parameters, unit: Unit) -> Measured:
    """What the book's (or firm's) figure changes by for one more unit of exposure: component / net exposure.

    Ratio; negative where more of the subject would hedge the book.
    """
    measured = component(part, parameters, unit)
    measured.amount = False
    reasons = measured.reasons.copy()
    measured.fill(np.arange(part.size), marginal_of(measured.value, np.asarray(part.members.sum(part.exposure))))
    measured.reasons = [first or second for first, second in zip(reasons, measured.reasons, strict=True)]
    return measured


def incremental(part: Slice, parameters: Parameters, _unit: Unit) -> Measured:
    """The value at risk (or shortfall) of the book, or of the firm, less what it would be without the subject. Amount.

    Negative where the book would risk more without it. These differences do not add up to the figure of the book.
    """
    measured = _blank(part, parameters)
    scenarios = part.members.sum(part.scenarios(parameters["window"]).pnl)
    for places, _, rows in _by_whole(part, parameters, measured):
        own = scenarios[places, scenarios.shape[1] - rows.shape[1] :]
        figures = incremental_tail(rows.sum(axis=0), own, tail_call(parameters), parameters["of"])
        _note(measured, places, rows, parameters)
        measured.fill(np.array(places, dtype=np.int64), figures)
    return measured


def _note(measured: Measured, places: list[int], rows: Floats, parameters: Parameters) -> None:
    """Mark subjects where the figure of their book is not made as the rule asks."""
    inexact = WORST_FOR_MEAN if parameters["of"] == "expected_shortfall" else WORST_FOR_QUANTILE
    for text in tail_notes(measure_tail(rows.sum(axis=0)[np.newaxis, :], tail_call(parameters)), inexact).values():
        for at in places:
            measured.mark(at, [Mark(MarkKind.METHOD, text)])


def _blank(part: Slice, parameters: Parameters) -> Measured:
    """No figure yet for any subject."""
    nothing, n = np.full(part.size, np.nan), np.zeros(part.size, dtype=np.int64)
    return Measured(nothing, [None] * part.size, amount=True, n=n, how=how_of(parameters))


def _by_whole(part: Slice, parameters: Parameters, measured: Measured) -> Iterator[tuple[list[int], Integers, Floats]]:
    """The subjects by the book, or the firm, that they lie in: their places, its positions and their scenario P&L.

    Subjects whose book cannot be measured are left out, with its reason.
    """
    window = parameters["window"]
    books: dict[str | None, list[int]] = {}
    for at, subject in enumerate(part.members.subjects):
        books.setdefault(None if part.of_firm else subject.book, []).append(at)
    for book, places in books.items():
        whole = whole_of(part, book)
        used = whole.sessions_used(window)
        n, positions = int(used[0]), whole.members.position
        troubles = whole.window_troubles(window, used) | whole.exposure_troubles()
        missing = [reason for name, reason in part.world.holdings.missing.items() if book in (None, name)]
        reason = next(iter([*missing, *troubles.values()]), None)
        for at in places:
            if measured.n is not None:
                measured.n[at] = n
            if n < window:
                measured.mark(at, [short_mark(n, window)])
            if reason is not None:
                measured.leave_out(at, reason)
        if reason is None:
            pnl = whole.scenarios(window).pnl
            yield places, positions, pnl[positions, pnl.shape[1] - n :]
