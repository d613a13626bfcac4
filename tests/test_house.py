"""Dependency runs one way: who may import whom, as DEVELOPERS.md says."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
INNER = {
    "calibration": ("calibration",),
    "tracker/follow": ("calibration", "tracker.follow"),
    "tracker/analysis": ("tracker.analysis",),
    "tracker/report": ("calibration.notice", "tracker.analysis.quantity", "tracker.progress", "tracker.report", "tracker.result"),
    "tracker/measure": ("calibration", "tracker.analysis", "tracker.clip", "tracker.defaults", "tracker.follow", "tracker.lensfile",
                        "tracker.measure", "tracker.progress", "tracker.result", "tracker.sheet"),
    "sample_clips": ("sample_clips",),
}  # fmt: skip
OURS = ("calibration", "tracker", "sample_clips", "tests")


def imports(path: Path) -> set[str]:
    """Modules of this project that a file imports."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            found.add(node.module)
    return {name for name in found if name.split(".")[0] in OURS}


@pytest.mark.parametrize("room", INNER)
def test_a_room_imports_only_what_it_may(room):
    files = sorted((ROOT / room).rglob("*.py"))
    assert files
    for path in files:
        for name in imports(path):
            allowed = any(name == ok or name.startswith(f"{ok}.") for ok in INNER[room])
            assert allowed, f"{path.relative_to(ROOT)} imports {name}"


def test_the_map_names_every_room():
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    for room in INNER:
        assert f"`{room}/`" in text
