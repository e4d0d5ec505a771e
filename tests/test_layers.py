"""Imports run one way through the house, lazy imports included."""

import ast
from pathlib import Path

import pytest

SOURCE = Path(__file__).parents[1] / "src" / "elbowroom"
ORDER = ["base", "geometry", "kernels", "system", "radiation", "store", "job", "cli"]
MODULES = sorted(p for p in SOURCE.rglob("*.py") if p.parent != SOURCE)


def imported_packages(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            names = [node.module or ""]
        elif isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        else:
            continue
        found |= {name.split(".")[1] for name in names if name.startswith("elbowroom.")}
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(SOURCE)))
def test_layers__imports_go_down_only(path):
    package = path.relative_to(SOURCE).parts[0]
    assert package in ORDER, f"{package} has no place in the order"
    allowed = set(ORDER[: ORDER.index(package) + 1])
    if package == "store":
        allowed = {"base", "store"}
    assert imported_packages(path) <= allowed


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(SOURCE)))
def test_layers__modules_stay_readable(path):
    assert len(path.read_text().splitlines()) <= 600


def test_layers__only_the_command_line_writes_to_the_screen():
    for path in MODULES:
        if path.relative_to(SOURCE).parts[0] == "cli":
            continue
        calls = [n for n in ast.walk(ast.parse(path.read_text())) if isinstance(n, ast.Call)]
        assert not any(isinstance(c.func, ast.Name) and c.func.id == "print" for c in calls), path
