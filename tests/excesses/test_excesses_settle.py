"""New editions and late evenings: what is recorded, and who hears of it."""

from __future__ import annotations

from collections.abc import Sequence

import pytest
from excess_made import Record, day, evening, fold, held, plain

from monitor.excesses.step import compare
from monitor.facts import ExcessOpened
from monitor.words import CuredBy, ExcessState


def recorded(values: Sequence[float | None], skipped: Sequence[int] = ()) -> Record:
    """One evening a day, with the book's gross exposure of each; limit 100."""
    record = Record()
    for number, value in enumerate(values):
        if number not in skipped:
            record.settle(evening(day(number), held(value)))
    return record


def sound(record: Record) -> bool:
    """Whether the table, the fold of the latest editions and what was told agree."""
    in_order = [record.latest[on] for on in sorted(record.latest)]
    return (
        plain(record.register()) == plain(fold(in_order))
        and {excess.id for excess in record.alive()} == record.believed
    )


def test_the_table_folded_from_entries_is_the_register_in_memory() -> None:
    record = recorded([110.0, 130.0, None, 120.0, 90.0, 115.0])

    assert [excess.id for excess in record.register()] == ["e1", "e2"]
    assert sound(record)


def test_a_correction_that_removes_the_opening_makes_it_void_and_tells() -> None:
    record = recorded([90.0, 110.0])

    settled = record.settle(evening(day(1), held(80.0)))

    [void] = settled.voided
    assert (void.id, void.state) == ("e1", ExcessState.VOID)
    assert void.void_reason == f"the check of {day(1)} shows that it was not over"
    assert record.void() == (void,)
    assert sound(record)


def test_a_void_excess_keeps_its_id_for_ever_when_the_opening_comes_back() -> None:
    record = recorded([110.0])
    record.settle(evening(day(0), held(80.0)))

    settled = record.settle(evening(day(0), held(120.0)))

    assert [excess.id for excess in settled.opened] == ["e2"]
    assert [(excess.id, excess.alive) for excess in record.register()] == [("e1", False), ("e2", True)]
    assert sound(record)


def test_an_opening_moved_earlier_keeps_the_excess_with_its_first_figure() -> None:
    record = recorded([90.0, 110.0, 120.0])

    settled = record.settle(evening(day(0), held(105.0)))

    [excess] = record.register()
    assert (excess.id, excess.opened_on, excess.opened_value) == ("e1", day(0), 105.0)
    assert (settled.opened, settled.cured, settled.voided) == ((), (), ())
    assert sound(record)


def test_an_opening_moved_later_keeps_the_excess() -> None:
    record = recorded([110.0, 130.0, 120.0])

    record.settle(evening(day(0), held(90.0)))

    [excess] = record.register()
    assert (excess.id, excess.opened_on, excess.opened_value) == ("e1", day(1), 130.0)
    assert sound(record)


@pytest.mark.parametrize(("corrected", "cured_on"), [({2: 130.0}, 3), ({1: 90.0}, 1)])
def test_a_cure_moves_later_or_earlier_and_is_told_again(corrected: dict[int, float], cured_on: int) -> None:
    record = recorded([110.0, 120.0, 90.0, 80.0])
    [(number, value)] = corrected.items()

    settled = record.settle(evening(day(number), held(value)))

    [excess] = settled.cured
    assert (excess.id, excess.cured_on, excess.cured_by) == ("e1", day(cured_on), CuredBy.FIGURE)
    assert record.register() == (excess,)
    assert sound(record)


def test_another_figure_on_the_evening_of_the_cure_is_recorded_and_not_told() -> None:
    record = recorded([110.0, 90.0])

    settled = record.settle(evening(day(1), held(85.0)))

    [excess] = record.register()
    assert excess.cured_value == 85.0
    assert settled.cured == ()
    assert sound(record)


def test_another_figure_within_a_cured_run_is_recorded_and_not_told() -> None:
    record = recorded([110.0, 120.0, 90.0])

    settled = record.settle(evening(day(1), held(150.0)))

    [excess] = record.register()
    assert (excess.worst_value, excess.cured_on, excess.cured_value) == (150.0, day(2), 90.0)
    assert settled.cured == ()
    assert sound(record)


def test_a_cure_that_is_taken_back_is_told() -> None:
    record = recorded([110.0, 90.0])

    settled = record.settle(evening(day(1), held(115.0)))

    assert [excess.id for excess in settled.reopened] == ["e1"]
    assert [excess.id for excess in record.alive()] == ["e1"]
    assert (record.alive()[0].cured_on, record.alive()[0].cured_by) == (None, None)
    assert sound(record)


def test_a_correction_splits_a_run_and_the_second_part_is_an_excess_of_its_own() -> None:
    record = recorded([110.0, 120.0, 130.0, 140.0])

    settled = record.settle(evening(day(1), held(90.0)))

    first, second = record.register()
    assert (first.id, first.cured_on) == ("e1", day(1))
    assert (second.id, second.opened_on, second.last_on, second.alive) == ("e2", day(2), day(3), True)
    assert [excess.id for excess in settled.opened] == ["e2"]
    assert [excess.id for excess in settled.cured] == ["e1"]
    assert sound(record)


def test_a_correction_joins_two_runs_and_the_void_one_says_of_which_it_is_a_part() -> None:
    record = recorded([110.0, 90.0, 120.0])

    settled = record.settle(evening(day(1), held(115.0)))

    first, second = record.register()
    assert (first.id, first.opened_on, first.last_on, first.alive) == ("e1", day(0), day(2), True)
    assert second.void_reason == (
        f"the check of {day(1)} shows that it was over before too: it is a part of e1, opened on {day(0)}"
    )
    assert [excess.id for excess in settled.reopened] == ["e1"]
    assert sound(record)


def test_runs_that_only_touch_on_the_evening_of_a_cure_stay_two() -> None:
    record = recorded([110.0, 120.0, 90.0, 130.0])
    record.settle(evening(day(0), held(90.0)))
    record.settle(evening(day(1), held(90.0)))

    settled = record.settle(evening(day(2), held(140.0)))

    assert [(excess.id, excess.state) for excess in record.register()] == [
        ("e1", ExcessState.VOID),
        ("e2", ExcessState.OPEN),
    ]
    assert record.alive()[0].opened_on == day(2)
    assert settled.voided == ()
    assert sound(record)


def test_a_late_evening_is_put_in_its_place() -> None:
    record = recorded([110.0, 999.0, 120.0, 90.0], skipped=[1])

    settled = record.settle(evening(day(1), held(90.0)))

    first, second = record.register()
    assert (first.cured_on, second.opened_on, second.cured_on) == (day(1), day(2), day(3))
    assert [excess.id for excess in settled.cured] == ["e1", "e2"]
    assert sound(record)


def test_a_late_evening_over_among_evenings_within_opens_and_cures_at_once() -> None:
    record = recorded([90.0, 999.0, 80.0], skipped=[1])

    settled = record.settle(evening(day(1), held(130.0)))

    [excess] = settled.cured
    assert (excess.opened_on, excess.cured_on, excess.cured_value) == (day(1), day(2), 80.0)
    assert settled.alive == ()
    assert sound(record)


def test_the_second_part_of_a_split_run_opened_under_the_limit_of_its_first_evening() -> None:
    record = Record()
    for number, (value, limit) in enumerate([(110.0, 100.0), (112.0, 100.0), (115.0, 100.0), (150.0, 140.0)]):
        record.settle(evening(day(number), held(value, limit=limit)))

    settled = record.settle(evening(day(1), held(90.0)))

    [opened] = [fact for fact in settled.facts if isinstance(fact, ExcessOpened)]
    assert (opened.day, opened.value, opened.level, opened.distance) == (day(2), 115.0, 100.0, 15.0)
    assert (record.alive()[0].worst_distance, record.alive()[0].level) == (15.0, 140.0)
    assert sound(record)


def test_a_check_again_without_a_change_of_standings_records_nothing() -> None:
    record = recorded([110.0, None, 120.0, 90.0, 130.0])

    for number in range(5):
        assert record.settle(record.latest[day(number)]).facts == ()
    assert sound(record)


def test_an_edition_in_another_unit_is_recorded() -> None:
    record = recorded([110.0, 120.0])

    record.settle(evening(day(1), held(130.0, currency="USD", owner="c.brannock")))

    [excess] = record.register()
    assert (excess.currency, excess.owner, excess.opened_value) == ("USD", "c.brannock", 130.0)
    assert sound(record)


def test_an_excess_that_its_rule_ended_on_the_evening_it_opened_stays_the_same_excess() -> None:
    """Two rounds of one date with other rules in force: the fold sees an opening and a cure on one date."""
    register = fold([evening(day(0), held(110.0)), evening(day(0), rules=frozenset())])
    assert (register[0].opened_on, register[0].cured_on) == (day(0), day(0))

    found = compare(register, register)
    assert (found.opened, found.changed, found.cured, found.voided) == ((), (), (), ())
