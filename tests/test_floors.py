"""The architecture: imports run downwards only, and each heavy library has its room."""

from __future__ import annotations

import ast
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[1] / "latticedip"
LONGEST_MODULE = 500

#: Floor of each room (a folder or a single module), ground floor first.
FLOORS = {
    "errors": 0,
    "units": 0,
    "kernels": 1,
    "checks": 1,
    "encode": 1,
    "particles": 1,
    "shapes": 1,
    "crystal": 2,
    "sums": 2,
    "ordering": 3,
    "probe": 3,
    "sample": 3,
    "files": 4,
    "physics": 5,
    "observables": 6,
    "analysis": 7,
    "study": 8,
    "report": 9,
    "ase": 9,
    "cli": 10,
    "__main__": 11,
}
#: Rooms (or single modules) in which a library may be imported.
ROOMS = {
    "numba": ("kernels",),
    "ase": ("crystal", "files", "ase"),
    "spglib": ("crystal", "files"),
    "gemmi": ("files",),
    "click": ("cli",),
    "matplotlib": ("report.plots",),
    "dask": ("study.batch",),
    "distributed": ("study.batch",),
}
#: Everything else that may be imported beside the standard library.
PLAIN = {"numpy", "scipy"}


def module_name(path: Path) -> str:
    parts = path.relative_to(PACKAGE).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


MODULES = {module_name(p): p for p in sorted(PACKAGE.rglob("*.py")) if p != PACKAGE / "__init__.py"}


def imports(path: Path) -> list[tuple[int, str, bool]]:
    """(line, dotted name, only for type checkers) of every import anywhere in a module."""
    tree = ast.parse(path.read_text(encoding="utf-8"))
    typing_only = {
        id(inner)
        for node in ast.walk(tree)
        if isinstance(node, ast.If) and ast.unparse(node.test) in ("TYPE_CHECKING", "typing.TYPE_CHECKING")
        for statement in node.body
        for inner in ast.walk(statement)
    }
    found = []
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found += [(node.lineno, alias.name, id(node) in typing_only) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path.name}:{node.lineno} imports relatively; name the package"
            base = node.module or ""
            names = [f"{base}.{alias.name}" for alias in node.names] if base == "latticedip" else [base]
            found += [(node.lineno, name, id(node) in typing_only) for name in names]
    return found


def room(dotted: str) -> str:
    return dotted.split(".")[0]


def is_within(module: str, rooms: tuple[str, ...]) -> bool:
    return any(module == r or module.startswith(r + ".") for r in rooms)


def test_every_module_has_a_floor():
    assert {room(name) for name in MODULES} - set(FLOORS) == set()


@pytest.mark.parametrize("name", MODULES)
def test_imports_never_climb(name):
    wrong = []
    for line, target, _ in imports(MODULES[name]):
        if target == "latticedip" or target.startswith("latticedip.__"):
            continue
        if target.startswith("latticedip."):
            inner = target.removeprefix("latticedip.")
            if room(inner) != room(name) and FLOORS[room(inner)] >= FLOORS[room(name)]:
                wrong.append(f"line {line}: {target}")
    assert not wrong, f"latticedip.{name} (floor {FLOORS[room(name)]}) imports from its own floor or above: {wrong}"


@pytest.mark.parametrize("name", MODULES)
def test_heavy_libraries_stay_in_their_rooms(name):
    wrong = []
    for line, target, typing_only in imports(MODULES[name]):
        library = target.split(".")[0]
        if library in ("latticedip", "__future__") or library in sys.stdlib_module_names or library in PLAIN:
            continue
        # Naming a type costs no import; only what runs is bound to a room.
        if not typing_only and not is_within(name, ROOMS.get(library, ())):
            wrong.append(f"line {line}: {target}")
    assert not wrong, f"latticedip.{name}: {wrong}"


@pytest.mark.parametrize("name", MODULES)
def test_modules_stay_short(name):
    assert len(MODULES[name].read_text(encoding="utf-8").splitlines()) <= LONGEST_MODULE


def test_the_check_itself_sees_a_climbing_import(tmp_path):
    path = tmp_path / "x.py"
    path.write_text("def f():\n    from latticedip.cli import main\n    import numba.core\n", encoding="utf-8")
    assert [target for _, target, _ in imports(path)] == ["latticedip.cli", "numba.core"]
