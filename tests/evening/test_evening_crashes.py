"""Whatever cuts a check off, the next one goes on by itself and the record comes out as if nothing had happened."""

from __future__ import annotations

import os
import shutil
import signal
import sqlite3
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from evening_scene import (
    EVENINGS,
    FIRST,
    SECOND,
    THIRD,
    Commands,
    Ended,
    account,
    command,
    environment,
    evening_of,
    leave_files,
    write_site,
)

# A run has some 80 to 190 steps, and each costs three runs. Every nth is tried; with DUSKCHECK_EVERY_STEP=1 all are.
ALL_STEPS = "DUSKCHECK_EVERY_STEP" in os.environ
Scenario = Callable[[Commands, Path], list[str | Path]]


def very_first(duskcheck: Commands, site: Path) -> list[str | Path]:
    """The first check of all, of an evening that opens an excess. The calendar is known, for loading it takes long."""
    history = site.parent / "state" / "history.sqlite"
    kept = history.read_bytes()
    for part in ("state", "pages", "tray"):
        shutil.rmtree(site.parent / part)
    history.parent.mkdir()
    history.write_bytes(kept)
    with sqlite3.connect(history) as connection:
        tables = connection.execute("SELECT name FROM sqlite_schema WHERE type = 'table' AND name <> 'sessions'")
        for (table,) in tables.fetchall():
            connection.execute(f"DELETE FROM {table}")
    connection.close()
    leave_files(site, FIRST, big=True)
    return [evening_of(FIRST), "check"]


def ordinary(duskcheck: Commands, site: Path) -> list[str | Path]:
    leave_files(site, SECOND, big=True)
    return [evening_of(SECOND), "check"]


def correction(duskcheck: Commands, site: Path) -> list[str | Path]:
    """The first evening again on other positions, after a later one: its excess should never have opened."""
    leave_files(site, FIRST, big=True)
    assert duskcheck(evening_of(FIRST, "21:00"), "check", "--site", site).code == 3
    leave_files(site, SECOND)
    assert duskcheck(evening_of(SECOND), "check", "--site", site).code == 0
    leave_files(site, FIRST)
    return [evening_of(SECOND, "21:00"), "check", "--date", str(FIRST)]


def long_past(duskcheck: Commands, site: Path) -> list[str | Path]:
    """Evenings that are told in one summary."""
    for day in (SECOND, THIRD):
        leave_files(site, day, big=day == SECOND)
    return [evening_of(EVENINGS[12]), "check", "--from", str(SECOND), "--to", str(THIRD)]


@pytest.mark.parametrize(("scenario", "stride"), [(very_first, 19), (ordinary, 9), (correction, 11), (long_past, 23)])
def test_a_check_killed_at_any_step_is_made_up_for_by_the_next(
    duskcheck: Commands, site: Path, copy: Callable[[Path], Path], scenario: Scenario, stride: int
):
    arguments = scenario(duskcheck, site)
    undisturbed = copy(site)
    ended = duskcheck(*arguments, "--site", undisturbed)
    expected = account(undisturbed)
    assert expected["problems"] == () and {state for *_, state in expected["notices"]} == {"sent"}
    killed = 0
    for step in steps(1 if ALL_STEPS else stride):
        cut_off = copy(site)
        if duskcheck(*arguments, "--site", cut_off, kill=step).code != -signal.SIGKILL:
            break
        killed += 1

        again = duskcheck(*arguments, "--site", cut_off)

        assert (again.code, again.stderr) == (ended.code, ""), f"killed at step {step}"
        assert account(cut_off) == expected, f"killed at step {step}"

    assert killed > 3


def steps(stride: int) -> Iterator[int]:
    at = 1
    while True:
        yield at
        at += stride


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of its own of 4 MB."""
    place = tmp_path / "disk"
    place.mkdir()
    mounted = subprocess.run(["mount", "-t", "tmpfs", "-o", "size=4m", "none", place], capture_output=True, check=False)
    if mounted.returncode:
        pytest.skip("only root can mount a small disk")
    yield place
    subprocess.run(["umount", place], check=True)


def test_on_a_full_disk_a_check_says_so_in_one_line_and_the_next_goes_on(
    duskcheck: Commands, site: Path, copy: Callable[[Path], Path], small_disk: Path
):
    leave_files(site, SECOND, big=True)
    undisturbed = copy(site)
    duskcheck(evening_of(SECOND), "check", "--site", undisturbed)
    expected = account(undisturbed)
    stopped = 0
    for kilobytes in range(0, 120, 20):
        folder = small_disk / "site"
        shutil.rmtree(folder, ignore_errors=True)
        on_disk = Path(shutil.copytree(site.parent, folder)) / "site.yaml"
        fill = small_disk / "fill"
        fill.write_bytes(bytes(os.statvfs(small_disk).f_bavail * 4096 - kilobytes * 1024))

        ended = duskcheck(evening_of(SECOND), "check", "--site", on_disk)

        fill.unlink()
        if ended.code == 1:
            assert_one_clear_line(ended)
            assert "Check the disk's free space" in ended.stderr
            stopped += 1
        again = duskcheck(evening_of(SECOND), "check", "--site", on_disk)
        assert (again.code, again.stderr) == (3, "")
        assert account(on_disk) == expected

    assert stopped > 2


@pytest.mark.parametrize("bytes_at_most", [1000, 30_000, 60_000])
def test_a_first_check_without_room_for_its_files_says_so_and_the_next_goes_on(
    duskcheck: Commands, tmp_path: Path, bytes_at_most: int
):
    site = write_site(tmp_path / "site")
    leave_files(site, FIRST)

    ended = duskcheck(evening_of(FIRST), "check", "--site", site, bytes_at_most=bytes_at_most)

    assert ended.code == 1
    assert_one_clear_line(ended)
    again = duskcheck(evening_of(FIRST), "check", "--site", site)
    assert (again.code, again.stderr) == (0, "")
    assert account(site)["problems"] == ()


def test_two_checks_at_once_end_well_and_record_the_evening_once(site: Path):
    leave_files(site, SECOND, big=True)
    both = [
        subprocess.Popen(
            command(evening_of(SECOND), "check", "--site", site),
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            env=environment(),
        )
        for _ in range(2)
    ]

    said = [one.communicate(timeout=60) for one in both]

    assert [one.returncode for one in both] == [3, 3]
    assert [errors for _, errors in said] == ["", ""]
    told = account(site)
    assert told["entries"]["evening.checked"] == 2  # the first evening's and this one's
    assert told["entries"]["excess.opened"] == 1
    assert told["entries"]["notice.queued"] == told["entries"]["notice.sent"]


def test_pages_that_a_crash_lost_are_drawn_by_the_next_check(duskcheck: Commands, site: Path):
    leave_files(site, SECOND)
    duskcheck(evening_of(SECOND), "check", "--site", site)
    pages = site.parent / "pages"
    drawn = {path.name: path.read_bytes() for path in pages.glob("2*.html")}
    shutil.rmtree(pages)

    duskcheck(evening_of(SECOND), "check", "--site", site)

    assert set(drawn) == {path.name for path in pages.glob("2*.html")}
    assert (pages / "index.html").exists()


def assert_one_clear_line(ended: Ended) -> None:
    assert len(ended.stderr.splitlines()) == 1, ended.stderr
    assert "defect" not in ended.stderr and "Traceback" not in ended.stderr
