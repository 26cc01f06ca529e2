"""The layers of DEVELOPERS.md: who may import whom."""

from __future__ import annotations

import ast
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

MONITOR = Path(__file__).parents[1] / "monitor"
# From the bottom. A room may import the rooms below its own layer; within a layer, what PEERS allows.
LAYERS = (
    {"words", "currencies", "monitor"},
    {"world", "facts", "reading"},
    {"results"},
    {"risk"},
    {"limits", "feed", "excesses", "ledger"},
    {"notices", "report"},
    {"site", "evenings", "settle", "state", "amend", "adoption", "news", "paging"}
    | {"replay", "backtest", "tracks", "evening"},
    {"run", "demonstration"},
    {"cli", "daemon"},
)
FREE_WITHIN = LAYERS[0], LAYERS[1], LAYERS[5], LAYERS[6], LAYERS[7], LAYERS[8]
# The site file's part about rounds is read with the rest of it.
EXCEPTIONS = {("site", "monitor.daemon.settings")}
CLOCKS = {"now", "utcnow", "today", "time", "time_ns", "localtime", "gmtime"}


def room_of(module: str) -> str:
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else "monitor"


def all_imports(file: Path) -> Iterator[str]:
    for node in ast.walk(ast.parse(file.read_text())):
        if isinstance(node, ast.ImportFrom):
            assert node.module and not node.level, f"{file}: a relative import, which these tests do not follow"
            if node.module == "monitor":
                yield from (f"monitor.{name.name}" if name.name != "__version__" else "monitor" for name in node.names)
            else:
                yield node.module
        elif isinstance(node, ast.Import):
            yield from (name.name for name in node.names)


def imports(file: Path) -> Iterator[str]:
    return (module for module in all_imports(file) if module.split(".")[0] == "monitor")


def layer_of(room: str) -> int:
    return next(at for at, rooms in enumerate(LAYERS) if room in rooms)


def against_the_layers(room: str, module: str) -> bool:
    other = room_of(module)
    if other == room or (room, module) in EXCEPTIONS:
        return False
    if other == "risk" and room != "limits":
        return True
    if layer_of(other) == layer_of(room):
        return LAYERS[layer_of(room)] not in FREE_WITHIN
    return layer_of(other) > layer_of(room)


def found() -> list[tuple[str, str, str]]:
    return [
        (str(file.relative_to(MONITOR)), file.relative_to(MONITOR).parts[0].removesuffix(".py"), module)
        for file in sorted(MONITOR.rglob("*.py"))
        if file.name != "__init__.py" or file.parent != MONITOR
        for module in imports(file)
    ]


def test_no_room_imports_against_the_layers():
    wrong = [f"{file} imports {module}" for file, room, module in found() if against_the_layers(room, module)]

    assert wrong == []


def test_risk_imports_nothing_of_ours():
    assert [(file, module) for file, room, module in found() if room == "risk" and room_of(module) != "risk"] == []


@pytest.mark.parametrize("rooms", ["words.py", "facts.py", "excesses/*.py"])
def test_what_the_record_rests_on_uses_the_standard_library_alone(rooms):
    files = list(MONITOR.glob(rooms))
    assert files
    for file in files:
        assert {module.split(".")[0] for module in all_imports(file)} <= {"monitor", *sys.stdlib_module_names}, file


@pytest.mark.parametrize(
    ("room", "module"),
    [
        ("feed", "monitor.limits.rules"),
        ("ledger", "monitor.feed.build"),
        ("excesses", "monitor.ledger.chain"),
        ("feed", "monitor.risk.normal"),
        ("report", "monitor.risk.normal"),
        ("risk", "monitor.world"),
        ("limits", "monitor.evening"),
        ("notices", "monitor.cli.check"),
        ("words", "monitor.world"),
    ],
)
def test_an_import_against_the_layers_is_seen(room, module):
    assert against_the_layers(room, module) or (room == "risk" and room_of(module) != "risk")


def test_no_clock_below_the_commands():
    """Time is an argument: only commands and the daemon ask what time it is."""
    for file in MONITOR.rglob("*.py"):
        room = file.relative_to(MONITOR).parts[0]
        if room in ("cli", "daemon"):
            continue
        calls = [node for node in ast.walk(ast.parse(file.read_text())) if isinstance(node, ast.Call)]

        assert not {call.func.attr for call in calls if isinstance(call.func, ast.Attribute)} & CLOCKS, file
