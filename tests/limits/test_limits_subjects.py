"""Which subjects a rule asks about: every form of `applies_to` by every form of `each`."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from drop_site import SmallSite

from monitor.limits.context import RuleContext
from monitor.limits.defaults import Defaults
from monitor.limits.rules import read_rules
from monitor.limits.subjects import members_of
from monitor.words import SubjectKind
from monitor.world import Rule, World

BOOKS = ("quay", "west", "east")


@pytest.fixture(scope="module")
def world(tmp_path_factory) -> World:
    """quay holds A (food, Irish, of issuer one), C (cash) and U, which no file describes; west holds A and B."""
    site = SmallSite(tmp_path_factory.mktemp("subjects") / "site")
    site.leave(
        "instruments.csv",
        [
            "instrument,currency,kind,sector,issuer,country,desk",
            "A,EUR,equity,food,one,IE,d1",
            "B,USD,fund,steel,two,US,",
            "C,EUR,cash,,,,",
        ],
    )
    site.positions("quay,A,1", "quay,C,2", "quay,U,3", "west,A,4", "west,B,5", "east,,")
    return site.world()


def one_rule(applies_to: str | None, each: str | None) -> Rule:
    context = RuleContext(BOOKS, (), ("desk",), "desk", Defaults())
    lines = ["rules:", "  - id: r", "    measure: {name: net}", "    limit: 1", "    unit: amount"]
    if applies_to:
        lines.append(f"    applies_to: {applies_to}")
    if each:
        lines.append(f"    each: {each}")
    (rule,) = read_rules([("r.yaml", "\n".join(lines).encode())], context)
    return rule


def asked(world: World, applies_to: str | None, each: str | None) -> dict[str, list[str]]:
    """Subject keys, and the positions of each as BOOK/INSTRUMENT."""
    members = members_of(one_rule(applies_to, each), world)
    names = [
        f"{BOOKS[book]}/{world.market.instruments[at].id}"
        for book, at in zip(world.holdings.book.tolist(), world.holdings.instrument.tolist(), strict=True)
    ]
    found: dict[str, list[str]] = {subject.key: [] for subject in members.subjects}
    for owner, position in zip(members.owner.tolist(), members.position.tolist(), strict=True):
        found[members.subjects[owner].key].append(names[position])
    assert members.owner.tolist() == sorted(members.owner.tolist())
    return found


EVERYTHING = ["quay/A", "quay/C", "quay/U", "west/A", "west/B"]
# A position that no file describes might be anything but in another book or of another name: U passes every tag.
CASES = {
    (None, None): {"firm": EVERYTHING},
    ("{book: any}", None): {"firm": EVERYTHING},
    ("{book: any, instrument: any}", None): {"firm": EVERYTHING},
    ("{book: quay}", None): {"book:quay": ["quay/A", "quay/C", "quay/U"]},
    ("{book: [quay]}", None): {"book:quay": ["quay/A", "quay/C", "quay/U"]},
    ("{book: quay, instrument: any}", None): {"book:quay": ["quay/A", "quay/C", "quay/U"]},
    ("{book: east}", None): {"book:east": []},
    ("{book: [west, quay]}", None): {"group:book=quay|west": EVERYTHING},
    ("{book: {not: quay}}", None): {"group:book=not quay": ["west/A", "west/B"]},
    ("{book: {not: [west, east]}}", None): {"book:quay": ["quay/A", "quay/C", "quay/U"]},
    ("{instrument: A}", None): {"group:instrument=A": ["quay/A", "west/A"]},
    ("{instrument: {not: [B, A]}}", None): {"group:instrument=not A|B": ["quay/C", "quay/U"]},
    ("{kind: equity}", None): {"group:kind=equity": ["quay/A", "quay/U", "west/A"]},
    ("{kind: {not: cash}}", None): {"group:kind=not cash": ["quay/A", "quay/U", "west/A", "west/B"]},
    ("{currency: USD}", None): {"group:currency=USD": ["quay/U", "west/B"]},
    ("{sector: any}", None): {"group:sector=any": ["quay/A", "quay/U", "west/A", "west/B"]},
    ("{sector: {not: food}}", None): {"group:sector=not food": ["quay/C", "quay/U", "west/B"]},
    ("{desk: d1}", None): {"group:desk=d1": ["quay/A", "quay/U", "west/A"]},
    ("{issuer: nobody}", None): {"group:issuer=nobody": ["quay/U"]},
    ("{kind: [fund, equity], book: west}", None): {"group:book=west; kind=equity|fund": ["west/A", "west/B"]},
    (None, "book"): {"book:quay": ["quay/A", "quay/C", "quay/U"], "book:west": ["west/A", "west/B"], "book:east": []},
    ("{instrument: any}", "book"): {
        "book:quay": ["quay/A", "quay/C", "quay/U"],
        "book:west": ["west/A", "west/B"],
        "book:east": [],
    },
    ("{book: [west, east]}", "book"): {"book:west": ["west/A", "west/B"], "book:east": []},
    ("{book: {not: west}}", "book"): {"book:quay": ["quay/A", "quay/C", "quay/U"], "book:east": []},
    ("{kind: equity}", "book"): {
        "group:kind=equity; book=quay": ["quay/A", "quay/U"],
        "group:kind=equity; book=west": ["west/A"],
        "group:kind=equity; book=east": [],
    },
    (None, "position"): {f"position:{name}": [name] for name in EVERYTHING},
    ("{book: west}", "position"): {"position:west/A": ["west/A"], "position:west/B": ["west/B"]},
    ("{kind: cash}", "position"): {"position:quay/C": ["quay/C"], "position:quay/U": ["quay/U"]},
    (None, "sector"): {"group:sector=food": ["quay/A", "west/A"], "group:sector=steel": ["west/B"]},
    (None, "country"): {"group:country=IE": ["quay/A", "west/A"], "group:country=US": ["west/B"]},
    (None, "currency"): {"group:currency=EUR": ["quay/A", "quay/C", "west/A"], "group:currency=USD": ["west/B"]},
    (None, "desk"): {"group:desk=d1": ["quay/A", "west/A"]},
    ("{book: quay}", "issuer"): {"group:book=quay; issuer=one": ["quay/A"]},
    ("{book: any, kind: equity}", "issuer"): {"group:kind=equity; issuer=one": ["quay/A", "west/A"]},
    ("{book: east}", "issuer"): {},
    (None, "nothing_has_it"): {},
}


@pytest.mark.parametrize(("applies_to", "each"), CASES)
def test_the_subjects_and_their_positions(world, applies_to, each):
    assert asked(world, applies_to, each) == CASES[applies_to, each]


def test_a_key_does_not_depend_on_the_order_in_the_rule_file(world):
    one = asked(world, "{sector: [steel, food], kind: [fund, equity]}", None)

    assert one == asked(world, "{kind: [equity, fund], sector: [food, steel]}", None)
    assert list(one) == ["group:kind=equity|fund; sector=food|steel"]


@pytest.mark.parametrize(
    ("applies_to", "each", "books"),
    [
        (None, None, {"firm": None}),
        ("{book: west}", None, {"book:west": "west"}),
        ("{book: west, kind: fund}", None, {"group:book=west; kind=fund": "west"}),
        ("{kind: fund}", None, {"group:kind=fund": None}),
        ("{book: west}", "issuer", {"group:book=west; issuer=one": "west", "group:book=west; issuer=two": "west"}),
        (None, "issuer", {"group:issuer=one": None, "group:issuer=two": None}),
        ("{kind: fund, book: west}", "book", {"group:kind=fund; book=west": "west"}),
    ],
)
def test_a_subject_lies_in_the_one_book_that_a_rule_names_or_reaches_across(world, applies_to, each, books):
    subjects = members_of(one_rule(applies_to, each), world).subjects

    assert {subject.key: subject.book for subject in subjects} == books


def test_the_kinds_of_subjects(world):
    kinds = {
        (None, None): SubjectKind.FIRM,
        ("{book: quay}", None): SubjectKind.BOOK,
        (None, "position"): SubjectKind.POSITION,
        (None, "issuer"): SubjectKind.GROUP,
    }
    for (applies_to, each), kind in kinds.items():
        assert {subject.kind for subject in members_of(one_rule(applies_to, each), world).subjects} == {kind}


def test_a_site_with_one_book_has_a_firm_and_a_book(world):
    firm = world.terms.firm
    small = replace(world, terms=replace(world.terms, firm=replace(firm, books=firm.books[:1])))
    held = world.holdings.book == 0
    small = replace(
        small,
        holdings=replace(
            world.holdings,
            book=world.holdings.book[held],
            instrument=world.holdings.instrument[held],
            quantity=world.holdings.quantity[held],
        ),
    )

    assert [subject.key for subject in members_of(one_rule(None, None), small).subjects] == ["firm"]
    assert [subject.key for subject in members_of(one_rule("{book: quay}", None), small).subjects] == ["book:quay"]
    assert [subject.book for subject in members_of(one_rule("{kind: equity}", None), small).subjects] == [None]


def test_sums_over_subjects(world):
    members = members_of(one_rule(None, "sector"), world)

    assert members.sum(world.holdings.quantity).tolist() == [5, 5]  # A in two books; B
    two = np.stack([world.holdings.quantity, -world.holdings.quantity], axis=1)
    assert members.sum(two).tolist() == [[5, -5], [5, -5]]
    assert [subject.key for subject in members.only([1]).subjects] == ["group:sector=steel"]
    assert members.only([1]).sum(world.holdings.quantity).tolist() == [5]
