"""A room imports only rooms below it, and the light commands stay light."""

import ast
import json
import subprocess
import sys
from pathlib import Path

import pytest

import hedgesim

PACKAGE = Path(hedgesim.__file__).parent
# From the top to the bottom; rooms on one line do not import each other.
ORDER = [
    {"cli"},
    {"experiment"},
    {"report"},
    {"study"},
    {"engine"},
    {"tables"},
    {"paths"},
    {"schedules"},
    {"costs"},
    {"book"},
    {"market"},
    {"pricing"},
    {"kernels"},
]
LEVEL = {room: len(ORDER) - k for k, rooms in enumerate(ORDER) for room in rooms}
# Open to every room: what can go wrong, and the version.
EVERYWHERE = {"errors", "__version__"}


def room(path: Path) -> str:
    part = path.relative_to(PACKAGE).parts[0]
    return part.removesuffix(".py")


def imported_rooms(path: Path) -> set[str]:
    """Rooms that a module imports anywhere, lazily or for types included."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        names = []
        if isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            names = [f"{node.module}.{a.name}" for a in node.names] if node.module == "hedgesim" else [node.module]
        elif isinstance(node, ast.Import):
            names = [a.name for a in node.names]
        found |= {name.split(".")[1] for name in names if name.startswith("hedgesim.")}
    return found


MODULES = sorted(p for p in PACKAGE.rglob("*.py") if p.name != "__init__.py" or p.parent != PACKAGE)


@pytest.mark.parametrize("path", MODULES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_a_room_imports_only_rooms_below_it(path):
    here = room(path)
    assert here in LEVEL or here in EVERYWHERE
    for there in imported_rooms(path) - EVERYWHERE - {here}:
        assert LEVEL[there] < LEVEL[here], f"{here} imports {there}"


def test_kernels_import_only_math_numpy_and_the_compiler():
    allowed = {"math", "numpy", "numba", "llvmlite", "hedgesim", "typing", "decimal"}
    # The cache folder is chosen where the one decorator is defined.
    files = {"jit.py": {"hashlib", "os", "tempfile", "pathlib"}}
    for path in (PACKAGE / "kernels").glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            names = [node.module] if isinstance(node, ast.ImportFrom) and node.module else []
            names += [a.name for a in node.names] if isinstance(node, ast.Import) else []
            for name in names:
                assert name.split(".")[0] in allowed | files.get(path.name, set()), f"{path.name} imports {name}"


def test_importing_the_package_loads_nothing_heavy():
    code = "import hedgesim, sys, json; print(json.dumps(sorted(sys.modules)))"
    loaded = json.loads(subprocess.run([sys.executable, "-c", code], capture_output=True, check=True, text=True).stdout)
    assert not {"numpy", "numba", "pandas", "matplotlib", "scipy"} & set(loaded)


def test_no_module_is_longer_than_five_hundred_lines():
    long = {p.name: n for p in MODULES if (n := len(p.read_text().splitlines())) > 500}
    assert not long
