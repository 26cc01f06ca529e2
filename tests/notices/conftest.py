"""An invented evening of Saltmere Trust, as it is handed over to be told."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import date

import pytest
from notices_scene import BOOKS, EVENING, HASH, NEAR, REFUSED, RULES, WITHIN, make_answer, make_excess, single_name

from monitor.notices.news import EveningNews
from monitor.words import CuredBy, ExcessState, Mark, MarkKind, Recipe, Standing, Subject, SubjectKind
from monitor.world import Standings, Unmeasured


@pytest.fixture
def evening() -> Callable[..., EveningNews]:
    """Makes the news of a quiet evening with whatever a test changes."""

    def make(**changes: object) -> EveningNews:
        news = EveningNews(
            site="Saltmere Trust",
            recipe=Recipe(EVENING, "europe", EVENING, EVENING, EVENING, "ef" * 32, 1200),
            edition=1,
            seq=1234,
            hash=HASH,
            standings=Standings((WITHIN,), BOOKS, (), (), ()),
            rules=RULES,
            opened=(),
            cured=(),
            on_record=frozenset(),
            voided=(),
            told={},
            alive={},
            aged_on=EVENING,
            refused=(),
            before={"within": 1, "near": 0, "over": 0, "unmeasured": 0},
            nightly="risk-desk",
            page="2026-03-04_europe.html",
        )
        return replace(news, **changes)

    return make


@pytest.fixture
def bad_evening(evening: Callable[..., EveningNews]) -> EveningNews:
    """Something of everything: two openings, a cure, a void, an old excess, missing and refused data, doubts."""
    opened = ((make_excess(), make_answer(marks=(Mark(MarkKind.CARRIED, "the price of QUAYLINE is of 2026-03-02"),))),)
    weighty = single_name("HARBOUR", 0.1032)
    unmeasured = make_answer(
        rule="single-name",
        subject=Subject("position:far-east/KITE", SubjectKind.POSITION, "far-east"),
        standing=Standing.UNMEASURED,
        value=None,
        distance=None,
        utilisation=None,
        reason="no price of KITE on or before 2026-03-04",
    )
    cured = make_excess(
        id="x-0005",
        state=ExcessState.CURED,
        opened_on=date(2026, 2, 25),
        cured_on=EVENING,
        cured_by=CuredBy.FIGURE,
        worst_on=date(2026, 2, 26),
        worst_value=1_420_000.0,
        worst_distance=170_000.0,
    )
    void = make_excess(
        id="x-0004",
        state=ExcessState.VOID,
        opened_on=date(2026, 3, 3),
        worst_on=date(2026, 3, 3),
        void_reason="the positions of 2026-03-03 were corrected",
    )
    old = replace(weighty[0], id="x-0002", opened_on=date(2026, 2, 24), state=ExcessState.WAIVED)
    return evening(
        standings=Standings(
            (opened[0][1], weighty[1], NEAR, WITHIN, unmeasured),
            BOOKS,
            (Unmeasured(unmeasured.subject, "no price of KITE on or before 2026-03-04"),),
            (Subject("position:far-east/LANTERN", SubjectKind.POSITION, "far-east"),),
            ("fx_2026-03-04.csv did not come by 19:00",),
        ),
        opened=opened,
        cured=((cured, WITHIN),),
        on_record=frozenset({cured.id}),
        voided=(void,),
        told={void.id: ("board",)},
        alive={opened[0][0]: 1, old: 7},
        refused=(REFUSED,),
    )
