"""history.sqlite is a cache: deleted, cut short or damaged anywhere, the answers are the same."""

from __future__ import annotations

import random
import sqlite3
from functools import cache as cache_of

import pytest
from drop_site import FRIDAY, WEEK, SmallSite, same

from monitor.feed import calendars
from monitor.feed.digest import digest_inputs
from monitor.words import DuskcheckError

FROM_LIBRARY = cache_of(calendars.from_library)
NAMES = [f"STOCK-{number:03d}" for number in range(40)]


@pytest.fixture(autouse=True)
def sessions_once(monkeypatch):
    """The sessions of a calendar take a second to work out: a damaged cache asks for them again and again."""
    monkeypatch.setattr(calendars, "from_library", FROM_LIBRARY)


@pytest.fixture(scope="module")
def site(tmp_path_factory) -> SmallSite:
    site = SmallSite(tmp_path_factory.mktemp("cache") / "site")
    site.leave("instruments.csv", ["instrument,currency", *(f"{name},EUR" for name in NAMES)])
    rows = [f"{day},{name},{at + 1}.5" for at, name in enumerate(NAMES) for day in WEEK[:3]]
    site.leave("history.csv", ["date,instrument,close", *rows])
    site.prices({name: (at + 2.25, at + 2.75) for at, name in enumerate(NAMES)}, WEEK[3:])
    site.rates({"EURUSD": (1.25,) * 5, "EURJPY": (160.0,) * 5})
    site.positions(*(f"quay,{name},1" for name in NAMES), "west,,", "east,,")
    return site


def cache(site: SmallSite):
    return site.folder / "state" / "history.sqlite"


def test_deleted_it_is_built_anew(site):
    world = site.world()
    cache(site).unlink()

    assert same(site.world(), world)


def test_deleted_while_open_it_is_built_anew(site):
    world = site.world()
    with site.state():
        cache(site).unlink()

    assert same(site.world(), world)


@pytest.mark.parametrize("data", [b"", b"not a database", b"\0" * 40_000])
def test_another_file_in_its_place_is_thrown_away(site, data):
    world = site.world()
    cache(site).write_bytes(data)

    assert same(site.world(), world)


@pytest.mark.parametrize("seed", range(12))
def test_damaged_anywhere_it_gives_the_same_answers(site, seed):
    """Bytes overwritten in one of its pages, which the sums find, or SQLite itself."""
    world = site.world()
    data = bytearray(cache(site).read_bytes())
    chance = random.Random(seed)
    for _ in range(1 + seed % 3):
        at = chance.randrange(100, len(data) - 64)
        data[at : at + 64] = chance.randbytes(64)
    cache(site).write_bytes(data)

    again = site.world()

    assert same(again, world)
    assert digest_inputs(again) == digest_inputs(world)


def test_cut_short_it_gives_the_same_answers(site):
    world = site.world()
    data = cache(site).read_bytes()
    for length in (len(data) // 2, len(data) // 3, 4096, 700):
        cache(site).write_bytes(data[:length])

        assert same(site.world(), world)


@pytest.mark.parametrize(
    "damage",
    [
        "UPDATE panel SET closes = zeroblob(length(closes))",
        "UPDATE panel SET days = zeroblob(length(days))",
        "UPDATE panel SET day = '2026-03-05' WHERE day = '2026-03-06'",
        "UPDATE names SET joined = replace(joined, 'STOCK-001', 'STOCK-999')",
        "UPDATE sessions SET days = substr(days, 1, length(days) - 8)",
        "UPDATE sessions SET ends = '2030-01-01'",
        "DELETE FROM names",
        "DROP TABLE panel",
        "PRAGMA user_version = 1",
    ],
)
def test_what_it_holds_is_believed_only_with_its_sum(site, damage):
    world = site.world()
    db = sqlite3.connect(cache(site), isolation_level=None)
    db.execute("DELETE FROM panel WHERE day = '2026-03-05'")
    db.execute(damage)
    db.close()

    assert same(site.world(), world)


def test_a_folder_in_its_place_is_told_plainly(tmp_path):
    site = SmallSite(tmp_path / "site")
    cache(site).unlink()
    cache(site).mkdir()

    with pytest.raises(DuskcheckError, match=r"history\.sqlite cannot be used"):
        site.world(FRIDAY)
