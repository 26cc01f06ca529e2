"""A ledger made by the first version can be read for ever, and its facts give the very bytes that were stored."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
import rfc8785

from monitor import facts
from monitor.facts import ClockOdd
from monitor.ledger.chain import Ledger
from monitor.ledger.links import Head
from monitor.ledger.verify import verify

GOLDEN = Path(__file__).parent / "golden"


@pytest.fixture
def golden(tmp_path: Path) -> Path:
    return Path(shutil.copy(GOLDEN / "ledger.sqlite", tmp_path))


def head() -> Head:
    seq, sha = (GOLDEN / "head.txt").read_text(encoding="ascii").split()
    return Head(int(seq), sha)


def test_it_verifies_against_its_head(golden):
    report = verify(golden, head=head())

    assert report.problems == ()
    assert report.head == head()
    assert not any("does not know" in note for note in report.notes)


def test_every_entry_is_decoded_and_encodes_to_the_stored_bytes(golden):
    read = 0
    with Ledger.open(golden) as ledger:
        for entry in ledger.entries():
            fact = entry.fact
            stored = ledger.raw(entry.seq)
            if fact.V == 1:  # a fact that was lifted to a newer version is written differently today
                again = {
                    "seq": entry.seq,
                    "at": entry.at,
                    "kind": fact.KIND,
                    "v": fact.V,
                    "body": facts.encode(fact),
                    "prev": entry.prev,
                }
                assert rfc8785.dumps(again) == stored
            read += 1

    assert read == head().seq


def test_numbers_come_back_in_the_type_of_their_field(golden):
    with Ledger.open(golden) as ledger:
        kept = {entry.fact.excess: entry.fact for entry in ledger.entries() if entry.fact.KIND == "excess.opened"}
        odd = [entry.fact for entry in ledger.entries() if isinstance(entry.fact, ClockOdd)]

    assert (kept["x-3"].value, kept["x-3"].level, kept["x-3"].distance) == (1e20, 1e21, 5e-324)
    assert isinstance(kept["x-3"].value, float)
    assert isinstance(kept["x-1"].level, float)
    assert [fact.seconds for fact in odd] == [2.123]
