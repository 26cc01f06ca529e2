"""Any order of evenings, new editions and late evenings gives the register of their latest editions in date order."""

from __future__ import annotations

from dataclasses import replace

from excess_made import FIRM, ISSUER, KELP, QUAY, Record, day, evening, fold, held, plain
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule

from monitor.excesses.step import Evening, Held
from monitor.settle import Settled

SUBJECTS = (FIRM, QUAY, KELP, ISSUER)


@st.composite
def answers(draw: st.DrawFn) -> tuple[Held, ...]:
    """Of two rules for each subject: no answer, unmeasured, within or over; some doubtful or in another currency."""
    made = []
    for subject in SUBJECTS:
        for name in ("gross", "net"):
            value = draw(st.sampled_from(["absent", None, 80.0, 99.0, 101.0, 120.0, 150.0]))
            if value == "absent":
                continue
            limit = draw(st.sampled_from([100.0, 100.0, 110.0]))
            answer = replace(held(value, subject, limit), rule=name)
            answer = replace(answer, doubtful=answer.doubtful or draw(st.integers(0, 4)) == 0)
            made.append(replace(answer, currency=draw(st.sampled_from(["EUR", "EUR", "EUR", "USD"]))))
    return tuple(made)


@st.composite
def any_evening(draw: st.DrawFn, number: int) -> Evening:
    known = draw(st.sampled_from([{"quay", "east"}, {"quay", "east"}, {"east"}]))
    whole = draw(st.sampled_from([{"quay", "east", None}, {"quay", "east", None}, {"quay"}, set()]))
    rules = draw(st.sampled_from([{"gross", "net"}, {"gross", "net"}, {"gross"}]))
    given = tuple(answer for answer in draw(answers()) if answer.rule in rules)
    return evening(day(number), *given, rules=frozenset(rules), known=frozenset(known), whole=frozenset(whole))


class Register(RuleBasedStateMachine):
    """Dates are even numbers when they come in order, so that there is room for late ones between them."""

    @initialize()
    def begin(self) -> None:
        self.record = Record()
        self.next = 0
        self.settled: Settled | None = None

    @rule(data=st.data())
    def next_evening(self, data: st.DataObject) -> None:
        self.settled = self.record.settle(data.draw(any_evening(self.next)))
        self.next += 2

    @precondition(lambda self: self.next > 0)
    @rule(data=st.data())
    def new_edition_or_late_evening(self, data: st.DataObject) -> None:
        number = data.draw(st.integers(-1, self.next - 2))
        self.settled = self.record.settle(data.draw(any_evening(number)))

    @precondition(lambda self: self.next > 0)
    @rule(data=st.data())
    def same_again(self, data: st.DataObject) -> None:
        chosen = data.draw(st.sampled_from(sorted(self.record.latest)))
        assert self.record.settle(self.record.latest[chosen]).facts == ()

    @invariant()
    def is_the_fold_of_the_latest_editions(self) -> None:
        in_order = [self.record.latest[on] for on in sorted(self.record.latest)]
        assert plain(self.record.register()) == plain(fold(in_order))

    @invariant()
    def no_id_is_lost_or_used_again(self) -> None:
        assert (
            [excess.id for excess in self.record.register()] == self.record.ids == list(dict.fromkeys(self.record.ids))
        )

    @invariant()
    def no_two_alive_are_about_the_same(self) -> None:
        about = [(excess.rule, excess.subject.key) for excess in self.record.alive()]
        assert len(about) == len(set(about))

    @invariant()
    def whoever_goes_by_what_was_told_knows_which_are_alive(self) -> None:
        alive = {excess.id for excess in self.record.alive()}
        assert self.record.believed == alive
        if self.settled is not None:
            assert {excess.id for excess in self.settled.alive} == alive
            assert set(self.settled.alive) == set(self.record.alive())

    @invariant()
    def every_figure_is_over_by_what_it_says(self) -> None:
        for excess in self.record.register():
            assert excess.worst_distance > 0
            assert excess.opened_on <= excess.worst_on <= excess.last_on <= (excess.cured_on or excess.last_on)


Register.TestCase.settings = settings(max_examples=40, stateful_step_count=20, deadline=None)
TestRegister = Register.TestCase
