"""Draws pages. Style is the only thing that a page may load beside its own images, and it is named by its hash."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Iterable
from functools import cache
from importlib.resources import files
from itertools import groupby

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from monitor.notices.story import CAUTIONS
from monitor.report import rows
from monitor.report.comparison import comparisons
from monitor.report.headline import ORDER, headline
from monitor.report.page import Listed, Page
from monitor.report.tables import book_rows, excess_rows, unmeasured
from monitor.report.told import moves, said


def draw(page: Page) -> bytes:
    """The evening as one self-contained HTML page in UTF-8. The same page gives the same bytes."""
    standings = page.standings
    text = (
        _environment()
        .get_template("page.html")
        .render(
            page=page,
            headline=headline(standings, page.rules),
            counts=[(standing, standings.counts()[standing.value]) for standing in ORDER],
            strip=rows.strip(standings),
            unplaced=sum(answer.utilisation is None for answer in standings.answers),
            strip_width=rows.STRIP_WIDTH,
            bar_width=rows.BAR_WIDTH,
            said=said(page),
            moves=moves(page),
            groups=rows.groups(page),
            excesses=excess_rows(page),
            comparisons=comparisons(page.series, standings.books),
            books=book_rows(standings.books),
            unmeasured=unmeasured(standings),
            cautions=CAUTIONS,
        )
    )
    return text.encode()


def draw_index(site: str, evenings: Iterable[Listed]) -> bytes:
    """The list of evenings, newest first, month by month."""
    ordered = sorted(evenings, key=lambda row: (row.date, row.round, row.edition), reverse=True)
    months = [(month, list(found)) for month, found in groupby(ordered, key=lambda row: f"{row.date:%Y-%m}")]
    text = _environment().get_template("index.html").render(site=site, months=months, order=ORDER)
    return text.encode()


@cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("monitor.report", "."),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    style = files("monitor.report").joinpath("page.css").read_text(encoding="utf-8")
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode("ascii")
    # The style is ours and holds no data; escaping it would change the text that the hash names.
    environment.globals["style"] = Markup(style)
    environment.globals["policy"] = (
        f"default-src 'none'; style-src 'sha256-{digest}'; img-src data:; base-uri 'none'; form-action 'none'"
    )
    return environment
