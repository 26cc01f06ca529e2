"""Every kind of error in a site or rule file says exactly what its gallery file says."""

from __future__ import annotations

from pathlib import Path

import pytest
from gallery import HERE, answer, inputs


@pytest.mark.parametrize("path", inputs(), ids=lambda path: f"{path.parent.name}-{path.stem}")
def test_error_reads_as_in_the_gallery(path: Path) -> None:
    expected = path.with_suffix(".txt").read_text(encoding="utf-8")

    assert answer(path) == expected


def test_gallery_holds_errors_only() -> None:
    assert len(inputs()) > 90
    assert [path.name for path in inputs() if answer(path) == "nothing is wrong\n"] == []


def test_each_text_belongs_to_an_input() -> None:
    assert sorted(path.with_suffix(".yaml") for path in HERE.glob("*/*.txt")) == inputs()


def test_no_secret_of_the_gallery_is_shown() -> None:
    texts = "".join(map(answer, inputs()))

    assert "hunter2" not in texts
    assert "token=abc" not in texts
