"""The page in Debian's chromium: it is styled, its charts are drawn, and its own policy blocks none of it."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest
from report_scene import evening

from monitor.report.charts import DARK, EXCEPTION, FORECAST
from monitor.report.draw import draw

CHROMIUM = shutil.which("chromium")
pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(CHROMIUM is None, reason="Debian's chromium is not installed (apt-get install chromium)"),
]
REFUSED = "Content Security Policy"
PAPER, PAPER_DARK = "#faf9f5", "#141922"


def shoot(tmp_path: Path, page: bytes, *options: str, width: int = 1280) -> tuple[np.ndarray, str]:
    """(height, width, 3) picture in 0..255, and what the browser logged."""
    source, picture = tmp_path / "page.html", tmp_path / "page.png"
    source.write_bytes(page)
    found = subprocess.run(
        [
            CHROMIUM or "",
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            "--no-first-run",
            "--disable-background-networking",
            "--hide-scrollbars",
            "--enable-logging=stderr",
            f"--user-data-dir={tmp_path / 'profile'}",
            f"--window-size={width},7000",
            f"--screenshot={picture}",
            *options,
            source.as_uri(),
        ],
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    from matplotlib.image import imread

    return np.rint(imread(picture)[:, :, :3] * 255).astype(int), found.stderr


def pixels(picture: np.ndarray, colour: str) -> int:
    wanted = [int(colour[place : place + 2], 16) for place in (1, 3, 5)]
    return int((picture == wanted).all(axis=2).sum())


def test_a_light_page_is_styled_and_drawn_without_a_complaint(tmp_path: Path) -> None:
    picture, log = shoot(tmp_path, draw(evening()))
    assert REFUSED not in log and "CONSOLE" not in log
    assert pixels(picture, PAPER) > picture[:, :, 0].size / 2
    charts = picture[4300:6000]
    assert pixels(charts, FORECAST) > 300 and pixels(charts, EXCEPTION) > 300


def test_a_dark_page_has_dark_charts(tmp_path: Path) -> None:
    picture, log = shoot(tmp_path, draw(evening()), "--blink-settings=preferredColorScheme=0")
    assert REFUSED not in log
    assert pixels(picture, PAPER_DARK) > picture[:, :, 0].size / 2
    charts = picture[4300:6000]
    assert pixels(charts, DARK[FORECAST]) > 300 and pixels(charts, FORECAST) == 0


def test_a_violation_would_be_seen(tmp_path: Path) -> None:
    page = draw(evening()).replace(b"</main>", b'<p style="color: red">x</p></main>')
    _, log = shoot(tmp_path, page)
    assert REFUSED in log
