"""Pages as files: their names, and how they get into the folder. The ledger can give them again at any time."""

from __future__ import annotations

import os
import re
import tempfile
from collections.abc import Iterable
from datetime import date
from pathlib import Path

from monitor.report.draw import draw, draw_index
from monitor.report.page import Listed, Page
from monitor.words import WrongUse

INDEX_NAME = "index.html"


def page_name(day: date, round_id: str, edition: int) -> str:
    """The name of an evening's file: `2026-03-12_europe_1.html`. Raises WrongUse for a round that no file can bear."""
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9._-]*", round_id):
        raise WrongUse(
            f"the round {round_id!r} cannot be part of a page's file name; "
            "give it an id of letters, digits, hyphens, dots and underscores"
        )
    return f"{day.isoformat()}_{round_id}_{edition}.html"


def write(pages_dir: Path, page: Page) -> Path:
    """Draw an evening into the folder, which is made when missing; a reader sees the old file or the whole new one."""
    name = page_name(page.recipe.date, page.recipe.round, page.edition)
    return _put(pages_dir / name, draw(page))


def write_index(pages_dir: Path, site: str, evenings: Iterable[Listed]) -> Path:
    """Draw the list of evenings into the folder, in place of the one before."""
    return _put(pages_dir / INDEX_NAME, draw_index(site, evenings))


def _put(path: Path, content: bytes) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=".", suffix=".part")
    part = Path(name)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fchmod(file.fileno(), 0o644)
            os.fsync(file.fileno())
        part.replace(path)
    except BaseException:
        part.unlink(missing_ok=True)
        raise
    return path
