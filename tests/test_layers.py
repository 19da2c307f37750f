"""The plan's arrows, held by parsing the imports of every module."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

import sweeprig

PACKAGE = Path(sweeprig.__file__).parent
GROUND = {"errors", "quantities", "holds", "plan", "roles", "laws", "exposures", "steady", "taps", "clock"}
VALUES = GROUND - {"clock"}

MAY_IMPORT: dict[str, set[str]] = {
    "errors": set(),
    "quantities": set(),
    "holds": {"quantities"},
    "plan": {"holds"},
    "roles": {"quantities"},
    "laws": set(),
    "exposures": {"holds"},
    "steady": {"holds", "plan"},
    "taps": {"holds", "plan", "quantities"},
    "clock": set(),
    "link": GROUND - {"laws", "exposures", "steady", "taps"},
    "dialects": VALUES,
    "job": VALUES,
    "schedule": VALUES,
    "characterise": VALUES,
    "logbook": VALUES,
    "simbench": GROUND - {"laws", "exposures", "steady", "taps"} | {"job"},
    "conduct": GROUND | {"link", "dialects", "job", "schedule", "logbook"},
    "report": VALUES | {"job", "characterise", "manual"},
    "manual": {"errors"},
    "opened": VALUES | {"job", "logbook", "characterise", "report"},
    "results": VALUES | {"job", "logbook", "characterise", "report", "opened"},
    "terminal": VALUES | {"conduct", "report"},
    "launch": GROUND | {"conduct", "job", "schedule", "logbook", "simbench"},
    "conformance": GROUND | {"link"},
    "testing": GROUND | {"job", "simbench", "launch", "opened", "conduct"},
    "cli": GROUND
    | {"conduct", "job", "schedule", "logbook", "opened", "report", "launch", "simbench", "manual", "link"}
    | {"characterise", "results", "terminal"},
}
"""Room → rooms it may import (itself always). A room that is missing here is a defect: decide its place first."""

PURE = {"schedule", "characterise"}
EFFECTS = {
    "time",
    "os",
    "socket",
    "serial",
    "threading",
    "subprocess",
    "sqlite3",
    "asyncio",
    "select",
    "multiprocessing",
}


def modules() -> list[Path]:
    return sorted(path for path in PACKAGE.rglob("*.py") if "configs" not in path.parts)


def room_of(path: Path) -> str:
    first = path.relative_to(PACKAGE).parts[0]
    return first.removesuffix(".py")


def imported(path: Path) -> set[str]:
    """Full names of everything a module imports, wherever in the file it does so."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            assert node.level == 0, f"{path}: relative import"
            names |= {f"{node.module}.{alias.name}" for alias in node.names} | {node.module}
    return names


@pytest.mark.parametrize("path", modules(), ids=lambda path: str(path.relative_to(PACKAGE)))
def test_no_arrow_runs_upward(path: Path) -> None:
    """A module imports only from the rooms that stand below its own."""
    room = room_of(path)
    rooms = {name.split(".")[1] for name in imported(path) if name.startswith("sweeprig.")}
    allowed = set(MAY_IMPORT) if room == "__init__" else MAY_IMPORT[room] | {room}
    assert rooms <= allowed, f"{room} imports {rooms - allowed}"


@pytest.mark.parametrize(
    "path", [p for p in modules() if room_of(p) in PURE], ids=lambda p: str(p.relative_to(PACKAGE))
)
def test_pure_rooms_have_no_effects(path: Path) -> None:
    """schedule and characterise import no clock, file, socket, thread or process."""
    tops = {name.partition(".")[0] for name in imported(path)}
    assert not tops & EFFECTS
    tree = ast.parse(path.read_text(encoding="utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert "open" not in called


def test_sweeprig_never_imports_the_drivers() -> None:
    """Adapters are found by entry points only."""
    users = [path for path in modules() if any(name.startswith("sweeprig_drivers") for name in imported(path))]
    assert users == []


def test_drivers_import_only_the_contract() -> None:
    """An adapter needs roles, quantities and errors, nothing else of sweeprig."""
    import sweeprig_drivers

    folder = Path(sweeprig_drivers.__file__).parent
    for path in folder.rglob("*.py"):
        rooms = {name.split(".")[1] for name in imported(path) if name.startswith("sweeprig.")}
        assert rooms <= {"roles", "quantities", "errors"}, path


def test_one_file_waits() -> None:
    """time.sleep stands in clock.py and nowhere else."""
    sleepers = [
        path.name
        for path in modules()
        if any(
            isinstance(node, ast.Attribute) and node.attr == "sleep"
            for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        )
    ]
    assert sleepers == ["clock.py"]


def test_the_checker_sees_a_forbidden_arrow(tmp_path: Path) -> None:
    """The parser finds imports inside functions too, so that a late import cannot hide an arrow."""
    module = tmp_path / "late.py"
    module.write_text("def f():\n    from sweeprig.simbench import build\n    return build\n", encoding="utf-8")
    assert "sweeprig.simbench" in imported(module)
