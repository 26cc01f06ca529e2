"""The evening on real prices: S&P 500 closes of 1999 to 2018, as the package arch carries them (arch.data.sp500).

One unit of the index is held, so that its exposure is its close and its VaR, as a share, is that of its returns.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from datetime import date
from functools import cache
from pathlib import Path

import numpy as np
import pytest

FIRST, LAST = date(2008, 6, 30), date(2009, 6, 29)
SITE = """\
site: One index
base_currency: USD
calendar: XNYS
books:
  - {id: index, name: The index, currency: USD, calendar: XNYS}
channels:
  - {id: tray, kind: folder, path: tray}
"""
RULES = """\
rules:
  - id: var-250
    applies_to: {book: index}
    measure: {name: value_at_risk, method: historical, confidence: 0.99, horizon_days: 1, window: 250}
    limit: 40
    unit: amount
  - id: var-500
    applies_to: {book: index}
    measure: {name: value_at_risk, method: historical, confidence: 0.99, horizon_days: 1, window: 500}
    limit: 60
    unit: amount
  - id: es-250
    applies_to: {book: index}
    measure: {name: expected_shortfall, method: historical, confidence: 0.99, horizon_days: 1, window: 250}
    limit: 1000
    unit: amount
  - id: es-500
    applies_to: {book: index}
    measure: {name: expected_shortfall, method: historical, confidence: 0.99, horizon_days: 1, window: 500}
    limit: 1000
    unit: amount
  - id: day
    applies_to: {book: index}
    measure: {name: day_loss}
    limit: 1000
    unit: amount
"""
# The sessions of July 2008 to June 2009 whose loss passed the forecast of the evening before, and their number for the
# shorter window: worked out from the same closes beforehand, apart from this program, by its stated convention (99 %,
# log returns, the day itself not in its window, the 5th worst of 500 and the 3rd of 250, a loss strictly larger).
EXCEPTIONS_500 = """
2008-09-04 2008-09-09 2008-09-15 2008-09-17 2008-09-22 2008-09-29 2008-10-02 2008-10-06 2008-10-07 2008-10-09
2008-10-15 2008-10-22 2008-11-19 2008-11-20 2008-12-01
""".split()
EXCEPTIONS_250 = 10


@cache
def closes() -> tuple[list[date], np.ndarray]:
    from arch.data import sp500

    prices = sp500.load()["Adj Close"]
    return [stamp.date() for stamp in prices.index], prices.to_numpy(dtype=np.float64)


def write_site(folder: Path) -> Path:
    days, prices = closes()
    drop = folder / "drop"
    (folder / "rules").mkdir()
    drop.mkdir()
    (folder / "site.yaml").write_text(SITE)
    (folder / "rules" / "index.yaml").write_text(RULES)
    (drop / "instruments.csv").write_text("instrument,currency,kind,calendar\nSPX,USD,fund,XNYS\n")
    history = [f"{day},SPX,{price!r}" for day, price in zip(days, prices.tolist(), strict=True) if day < FIRST]
    (drop / "history.csv").write_text("\n".join(["date,instrument,close", *history, ""]))
    for day, price in zip(days, prices.tolist(), strict=True):
        if FIRST <= day <= date(2009, 6, 30):
            (drop / f"prices_{day}.csv").write_text(f"instrument,close\nSPX,{price!r}\n")
        if date(2008, 6, 27) <= day <= date(2009, 6, 30):
            (drop / f"positions_{day}.csv").write_text("book,instrument,quantity\nindex,SPX,1\n")
    return folder / "site.yaml"


def run(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "from monitor.cli import main; main()", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, env=os.environ | {"NO_COLOR": "1"}, check=False)


@pytest.fixture(scope="module")
def evenings(tmp_path_factory: pytest.TempPathFactory) -> dict[date, dict[str, dict[str, object]]]:
    site = write_site(tmp_path_factory.mktemp("sp500"))

    ended = run("check", "--site", site, "--from", FIRST, "--to", LAST, "--json")

    assert ended.returncode == 3, ended.stderr  # the limit on VaR is passed on some evenings
    documents = [json.loads(line) for line in ended.stdout.splitlines()]
    return {
        date.fromisoformat(document["business_date"]): {row["rule"]: row for row in document["standings"]}
        for document in documents
    }


def expected(window: int, day: date) -> tuple[float, float, float]:
    """VaR and ES forecast on a day for the next session, and that session's loss, of one unit held.

    Straight from the closes, without the program: the window's P&L ascending, the k-th of it with k = window / 100.
    """
    days, prices = closes()
    at = days.index(day)
    log_returns = np.diff(np.log(prices[at - window : at + 1]))
    pnl = sorted(prices[at] * (np.exp(log_returns) - 1))
    tail, whole = window / 100, window // 100
    rank = -(-window // 100)
    shortfall = -(sum(pnl[:whole]) + (tail - whole) * pnl[whole]) / tail
    return -pnl[rank - 1], shortfall, prices[at] - prices[at + 1]


def test_every_session_of_the_year_is_an_evening(evenings):
    days, _ = closes()

    assert list(evenings) == [day for day in days if FIRST <= day <= LAST]


@pytest.mark.parametrize("window", [250, 500])
def test_var_and_es_of_each_evening_equal_an_independent_calculation(evenings, window):
    for day, rows in evenings.items():
        value_at_risk, shortfall, _ = expected(window, day)

        assert rows[f"var-{window}"]["n"] == window
        assert rows[f"var-{window}"]["value"] == pytest.approx(value_at_risk, rel=1e-9)
        assert rows[f"es-{window}"]["value"] == pytest.approx(shortfall, rel=1e-9)


def passed(evenings, window: int) -> list[date]:
    """The sessions whose loss was strictly larger than the VaR told on the evening before."""
    days, _ = closes()
    return [
        days[days.index(day) + 1]
        for day, rows in evenings.items()
        if expected(window, day)[2] > rows[f"var-{window}"]["value"]
    ]


def test_the_sessions_whose_loss_passed_the_forecast_are_those_counted_from_the_closes(evenings):
    assert [str(day) for day in passed(evenings, 500)] == EXCEPTIONS_500
    assert len(passed(evenings, 250)) == EXCEPTIONS_250


def test_the_loss_of_the_day_is_that_of_the_closes(evenings):
    days, prices = closes()
    for day, rows in evenings.items():
        at = days.index(day)

        assert rows["day"]["value"] == pytest.approx(prices[at - 1] - prices[at], rel=1e-9)
