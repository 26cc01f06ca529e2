"""One evening after the other: when an excess opens, goes on and is cured, and what does neither."""

from __future__ import annotations

from dataclasses import replace

import pytest
from excess_made import FIRM, IN_QUAY, ISSUER, KELP, QUAY, day, evening, fold, held

from monitor.words import CuredBy, ExcessState, Side, Standing, Subject, SubjectKind, Unit


def test_the_first_evening_over_opens_it_with_its_figures() -> None:
    [excess] = fold([evening(day(0), held(90.0)), evening(day(1), held(130.0))])

    assert excess.id == "x1"
    assert (excess.state, excess.owner) == (ExcessState.OPEN, "m.osei")
    assert excess.opened_on == excess.last_on == excess.worst_on == day(1)
    assert excess.opened_value == excess.last_value == excess.worst_value == 130.0
    assert (excess.worst_distance, excess.level) == (30.0, 100.0)


def test_it_goes_on_and_keeps_its_worst_evening() -> None:
    [excess] = fold(evening(day(n), held(value)) for n, value in enumerate([110.0, 150.0, 120.0]))

    assert (excess.opened_on, excess.opened_value) == (day(0), 110.0)
    assert (excess.last_on, excess.last_value) == (day(2), 120.0)
    assert (excess.worst_on, excess.worst_value, excess.worst_distance) == (day(1), 150.0, 50.0)


@pytest.mark.parametrize("standing", [Standing.WITHIN, Standing.NEAR])
def test_a_figure_that_is_back_cures_it_and_a_later_one_opens_another(standing: Standing) -> None:
    back = held(99.0, standing=standing)
    first, second = fold([evening(day(0), held(110.0)), evening(day(1), back), evening(day(2), held(101.0))])

    assert (first.state, first.cured_on, first.cured_by) == (ExcessState.CURED, day(1), CuredBy.FIGURE)
    assert (first.cured_value, first.last_on) == (99.0, day(0))
    assert (second.id, second.opened_on, second.alive) == ("x2", day(2), True)


def test_an_unmeasured_evening_neither_cures_nor_counts_as_over() -> None:
    [excess] = fold([evening(day(0), held(110.0)), evening(day(1), held(None)), evening(day(2), held(111.0))])

    assert excess.alive
    assert (excess.opened_on, excess.last_on) == (day(0), day(2))


def test_an_unmeasured_evening_opens_nothing() -> None:
    assert fold([evening(day(0), held(None))]) == ()


def test_a_doubtful_answer_within_does_not_cure() -> None:
    doubtful = held(50.0, doubtful=True)

    [excess] = fold([evening(day(0), held(110.0)), evening(day(1), doubtful)])

    assert excess.alive
    assert excess.last_on == day(0)


def test_a_doubtful_answer_that_is_over_opens_and_goes_on() -> None:
    evenings = [evening(day(n), held(value, doubtful=True)) for n, value in enumerate([110.0, 140.0])]

    [excess] = fold(evenings)

    assert (excess.opened_on, excess.last_on, excess.worst_value) == (day(0), day(1), 140.0)


def test_a_doubtful_answer_within_opens_nothing() -> None:
    assert fold([evening(day(0), held(50.0, doubtful=True))]) == ()


def test_the_end_of_its_rule_cures_it_without_a_figure() -> None:
    ended = evening(day(1), rules=frozenset({"net"}))

    [excess] = fold([evening(day(0), held(110.0)), ended])

    assert (excess.cured_on, excess.cured_by, excess.cured_value) == (day(1), CuredBy.END_OF_RULE, None)


@pytest.mark.parametrize(
    ("subject", "evening_changes"),
    [
        (KELP, {}),
        (KELP, {"whole": frozenset()}),  # another position of the book cannot be valued: this one is gone all the same
        (QUAY, {}),
        (IN_QUAY, {}),
        (IN_QUAY, {"whole": frozenset({"quay"})}),
        (ISSUER, {}),
    ],
)
def test_a_subject_that_is_known_to_be_gone_ends_its_excess(subject: Subject, evening_changes: dict) -> None:
    [excess] = fold([evening(day(0), held(110.0, subject)), evening(day(1), **evening_changes)])

    assert (excess.cured_on, excess.cured_by) == (day(1), CuredBy.END_OF_SUBJECT)


@pytest.mark.parametrize(
    ("subject", "evening_changes"),
    [
        (KELP, {"known": frozenset({"east"})}),  # the positions of the book are missing, or its round is another
        (QUAY, {"known": frozenset({"east"})}),
        (IN_QUAY, {"whole": frozenset({"east", None})}),  # a position of the book that no file describes
        (ISSUER, {"whole": frozenset({"quay", "east"})}),  # a round that does not complete the date, or a book missing
        (FIRM, {"whole": frozenset({"quay"})}),
    ],
)
def test_a_subject_that_is_only_out_of_sight_does_not_end_its_excess(subject: Subject, evening_changes: dict) -> None:
    [excess] = fold([evening(day(0), held(110.0, subject)), evening(day(1), **evening_changes)])

    assert excess.alive


def test_a_book_that_left_the_site_ends_its_excesses_when_all_others_are_known() -> None:
    gone = {"site_books": frozenset({"east"}), "known": frozenset({"east"})}
    opened = [evening(day(0), held(110.0), held(120.0, KELP))]

    doubt = fold([*opened, evening(day(1), **gone, whole=frozenset({"east"}))])
    sure = fold([*opened, evening(day(1), **gone, whole=frozenset({"east", None}))])

    assert [excess.alive for excess in doubt] == [True, True]
    assert [excess.cured_by for excess in sure] == [CuredBy.END_OF_SUBJECT] * 2


def test_one_rule_and_subject_has_one_excess_whichever_side_it_is_over() -> None:
    below = held(5.0, standing=Standing.OVER, side=Side.BELOW, level=20.0, distance=15.0)

    [excess] = fold([evening(day(0), held(110.0)), evening(day(1), below)])

    assert (excess.side, excess.level, excess.last_value) == (Side.BELOW, 20.0, 5.0)
    assert (excess.opened_on, excess.worst_on, excess.worst_distance) == (day(0), day(1), 15.0)


def test_figures_in_another_unit_start_anew_and_the_clock_does_not() -> None:
    in_shares = held(0.3, limit=0.25, unit=Unit.OF_NAV, currency=None, owner="c.brannock")

    [excess] = fold([evening(day(0), held(110.0)), evening(day(1), in_shares)])

    assert excess.opened_on == day(0)
    assert (excess.unit, excess.currency, excess.owner) == (Unit.OF_NAV, None, "c.brannock")
    assert excess.opened_value == excess.worst_value == excess.last_value == 0.3
    assert (excess.worst_on, excess.level) == (day(1), 0.25)


def test_rules_and_subjects_are_told_apart() -> None:
    other = replace(held(110.0), rule="net")
    register = fold([evening(day(0), held(110.0), other, held(110.0, KELP)), evening(day(1), held(90.0), other)])

    assert [(excess.rule, excess.subject.kind, excess.alive) for excess in register] == [
        ("gross", SubjectKind.BOOK, False),
        ("net", SubjectKind.BOOK, True),
        ("gross", SubjectKind.POSITION, False),
    ]


def test_an_answer_over_without_a_figure_is_a_defect_that_is_said() -> None:
    with pytest.raises(ValueError, match="the answer of gross for book:quay is over without a figure"):
        fold([evening(day(0), held(None, standing=Standing.OVER))])
