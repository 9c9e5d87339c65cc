"""The rooms of the house import only what they may."""

from __future__ import annotations

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
MAY_IMPORT = {
    "network": {"network"},
    "lp": {"lp", "network"},
    "heuristics": {"heuristics", "network"},
    "legworth": {"legworth", "lp", "heuristics", "network"},
}
FORBIDDEN = {
    "lp": {"click", "rich", "pathlib", "time", "datetime"},
    "heuristics": {"click", "rich", "pathlib", "time", "pulp", "highspy"},
    "network": {"click", "rich", "time", "pulp", "highspy", "clarabel"},
}


def imported(path: Path) -> set[str]:
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            found.add((node.module or "").split(".")[0])
    return found


@pytest.mark.parametrize("room", sorted(MAY_IMPORT))
def test_room_imports_only_what_it_may(room: str) -> None:
    modules = sorted((ROOT / room).rglob("*.py"))
    assert modules
    for module in modules:
        names = imported(module)
        assert names & set(MAY_IMPORT) <= MAY_IMPORT[room], module
        assert not names & FORBIDDEN.get(room, set()), module
