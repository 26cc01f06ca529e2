"""Small sites on disk, each beginning with calendars that were loaded once."""

from __future__ import annotations

from pathlib import Path

import pytest
from excess_site import FIRST, ROUNDS, Small, copied, make

from monitor.run import open_for_checking
from monitor.site import open_site


@pytest.fixture(scope="session")
def template(tmp_path_factory: pytest.TempPathFactory) -> Small:
    """A site without a ledger entry, whose cache holds the sessions of Dublin and Tokyo."""
    small = make(tmp_path_factory.mktemp("small") / "site")
    with open_for_checking(open_site(small.file)) as state:
        for name in ("XDUB", "XTKS"):
            state.history.sessions(name, until=FIRST)
    return small


@pytest.fixture
def small(template: Small, tmp_path: Path) -> Small:
    """All books in one round."""
    return copied(template, tmp_path / "site")


@pytest.fixture
def two_rounds(template: Small, tmp_path: Path) -> Small:
    """East in a round of its own before Quay's, which completes the date."""
    return copied(template, tmp_path / "site", ROUNDS)
