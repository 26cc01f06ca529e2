"""An evening worked out again, held against the record: to the last digit, within the tolerance of a method, or not."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from monitor import evenings, results
from monitor.limits.tolerance import tolerance
from monitor.replay import differences, replayed
from monitor.site import open_site
from monitor.state import open_state
from monitor.words import Standing
from monitor.world import How, Standings


@pytest.fixture(scope="module")
def recorded(first_evening: Path) -> Standings:
    with open_state(open_site(first_evening / "site.yaml")) as state:
        (evening,) = evenings.latest_of_all(state.index())
        found = replayed(state, evening)
        assert (found.exact, found.differences) == (True, ())
        return results.decode(state.archive.get(evening.results))


def with_first(standings: Standings, **changes) -> Standings:
    """The standings with something else in the first answer that has a figure."""
    at = next(at for at, own in enumerate(standings.answers) if own.value)
    answers = list(standings.answers)
    answers[at] = replace(answers[at], **changes)
    return replace(standings, answers=tuple(answers))


def first(standings: Standings):
    return next(own for own in standings.answers if own.value)


def test_each_method_has_the_tolerance_that_it_states():
    assert tolerance(How(method="historical")) == tolerance(How()) == 1e-9
    assert tolerance(How(method="student_t")) == tolerance(How(method="monte_carlo")) == 1e-6
    assert tolerance(How(method="garch")) == 1e-4


def test_a_figure_may_differ_by_the_tolerance_of_its_method_and_no_more(recorded):
    own = first(recorded)
    fitted = with_first(recorded, how=replace(own.how, method="student_t"))

    assert list(differences(fitted, with_first(fitted, value=own.value * (1 + 9e-7)))) == []
    (said,) = differences(fitted, with_first(fitted, value=own.value * (1 + 2e-6)))
    assert said.startswith(f"{own.rule}, {own.subject.name}: {own.value} on record, ")
    plain = with_first(recorded, how=replace(own.how, method="historical"))
    assert list(differences(plain, with_first(plain, value=own.value * (1 + 9e-7))))


def test_standings_must_be_equal(recorded):
    other = Standing.OVER if first(recorded).standing is not Standing.OVER else Standing.WITHIN

    (said,) = differences(recorded, with_first(recorded, standing=other))

    assert said.endswith(f"{first(recorded).standing} on record, {other} again")


def test_bounds_count_only_where_the_record_has_them(recorded):
    bounded = with_first(recorded, low=1.0, high=None)

    assert list(differences(bounded, with_first(bounded, high=3.0))) == []
    assert [said.split(": ")[1] for said in differences(bounded, with_first(bounded, low=2.0))] == [
        "low bound 1.0 on record, 2.0 again"
    ]


def test_figures_of_books_gaps_and_questions_are_compared(recorded):
    book = recorded.books[0]
    lighter = replace(recorded, books=(replace(book, net=book.net + 1.0), *recorded.books[1:]))
    rounded = replace(recorded, books=(replace(book, net=book.net + 1e-10 * book.gross), *recorded.books[1:]))
    shorter = replace(recorded, answers=recorded.answers[1:])

    assert len(list(differences(recorded, lighter))) == 1
    assert list(differences(recorded, rounded)) == []
    assert [said.rsplit(": ", 1)[1] for said in differences(recorded, shorter)] == ["asked in one of the two only"]
    assert list(differences(recorded, replace(recorded, lacking=("prices",)))) == ["lacking: not the same"]
