"""The gallery: one file for each kind of error beside the exact text that a user reads.

`python tests/errors/gallery.py` writes the texts anew; read what changed before committing it.
"""

from __future__ import annotations

from pathlib import Path

from monitor.limits.rules import read_rules
from monitor.site import read_site
from monitor.words import WrongUse

HERE = Path(__file__).parent
SITE = b"""\
site: Saltmere Trust
base_currency: EUR
books:
  - {id: north-quay, calendar: XDUB}
  - {id: far-east, currency: JPY, calendar: XTKS}
people:
  - {id: m.osei, name: M. Osei}
channels:
  - {id: tray, kind: folder, path: tray}
tell: {risk-desk: {people: [m.osei], channels: [tray]}}
"""


def inputs() -> list[Path]:
    return sorted(HERE.glob("*/*.yaml"))


def answer(path: Path) -> str:
    """What reading the file says: its findings, one a line, or that nothing is wrong."""
    try:
        if path.parent.name == "site":
            read_site("site.yaml", path.read_bytes())
        else:
            read_rules([("rules.yaml", path.read_bytes())], read_site("site.yaml", SITE).rule_context())
    except WrongUse as error:
        return f"{error}\n"
    return "nothing is wrong\n"


if __name__ == "__main__":
    for each in inputs():
        each.with_suffix(".txt").write_text(answer(each), encoding="utf-8")
