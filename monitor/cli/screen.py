"""What commands print for a person."""

from __future__ import annotations

from collections.abc import Sequence

from rich.console import Console
from rich.table import Table

from monitor.evening import Checked
from monitor.feed.lacking import listed
from monitor.notices import figures
from monitor.report.headline import by_urgency, headline
from monitor.report.pages import page_name
from monitor.report.tables import unmeasured
from monitor.state import State
from monitor.words import Outcome, Standing
from monitor.world import Answer

SHOWN = 20


def print_evening(state: State, checked: Checked, outcomes: Sequence[Outcome]) -> None:
    """The last evening of a run: its outcome in a sentence, what is not within, and where to look further."""
    console = Console(highlight=False, markup=False, emoji=False)  # names from files are not markup
    evening, standings = checked.evening, checked.standings
    recipe = evening.recipe
    rules = {rule.id: rule for rule in state.terms(recipe.rules).rules}
    if len(outcomes) > 1:
        told = ", ".join(f"{outcomes.count(each)} {each.value}" for each in Outcome if each in outcomes)
        console.print(f"{len(outcomes)} evenings checked: {told}. The last of them:")
    edition = "" if evening.edition == 1 else f", edition {evening.edition}"
    console.print(f"{state.site.settings.site}, {recipe.date}, round {recipe.round}{edition}")
    console.print(headline(standings, rules))
    worth_telling = [answer for answer in by_urgency(standings.answers) if answer.standing is not Standing.WITHIN]
    if worth_telling:
        console.print(_table(worth_telling[:SHOWN]))
    if len(worth_telling) > SHOWN:
        console.print(f"and {len(worth_telling) - SHOWN} more: see the page")
    for cause in standings.lacking:
        console.print(f"lacking: {cause}")
    gaps = unmeasured(standings)
    for gap in gaps[:SHOWN]:
        console.print(f"not measured: {listed(gap.subjects)}: {gap.reason}")
    if len(gaps) > SHOWN:
        console.print(f"and {len(gaps) - SHOWN} more reasons: see the page")
    page = state.site.pages / page_name(recipe.date, recipe.round, evening.edition)
    console.print(f"page: {page}", soft_wrap=True)
    said = "recorded as" if checked.new else "nothing new since it was recorded as"
    console.print(f"{said} entry {evening.seq}, hash {evening.hash}", soft_wrap=True)


def _table(answers: Sequence[Answer]) -> Table:
    table = Table(box=None, pad_edge=False)
    for heading in ("standing", "rule", "subject"):
        table.add_column(heading)
    for heading in ("value", "limit", "used"):
        table.add_column(heading, justify="right")
    for answer in answers:
        table.add_row(
            answer.standing.value,
            answer.rule,
            answer.subject.name,
            figures.value_of(answer) if answer.value is not None else (answer.reason or ""),
            figures.limit_of(answer),
            figures.utilisation(answer.utilisation) if answer.utilisation is not None else "",
        )
    return table
