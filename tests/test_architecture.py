"""The order of the rooms, held as data: imports point back along the flow and enter other rooms by their door only."""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "bigsvd"
ROOMS = (
    *("errors", "units", "randomness", "machine", "source", "adapt", "prepare", "plan", "sweep", "solve", "certify"),
    *("factors", "journal", "drive", "rank", "use", "report", "demo", "api", "cli"),
)
# The package's own door stands after all rooms, since it hands out what the api offers; nothing inside may use it.
LAST = len(ROOMS)
# plan is arithmetic: it neither holds a library that opens files nor opens one by itself.
OPENING_MODULES = ("h5py", "zarr", "zarrs", "hdf5plugin", "dask", "mmap", "io", "tempfile", "shutil", "subprocess")
OPENING_CALLS = (
    *("open", "fdopen", "memmap", "fromfile", "load", "loadtxt", "genfromtxt", "read_text", "read_bytes"),
    *(
        "write_text",
        "write_bytes",
        "mkdir",
        "unlink",
        "iterdir",
        "scandir",
        "listdir",
        "glob",
        "rglob",
        "stat",
        "exists",
    ),
)
# What must not be paid for by `bigsvd --help` and `import bigsvd`.
HEAVY = (
    *("dask", "distributed", "h5py", "hdf5plugin", "imagecodecs", "zarr", "zarrs", "zstandard", "scipy", "rich"),
    *("pandas", "xarray", "sklearn"),
)


def room_of(file: Path, package: Path) -> str:
    """Name of the room a file belongs to; empty for the package's own door."""
    first = file.relative_to(package).parts[0].removesuffix(".py")
    return "" if first in ("__init__", "__main__") else first


def imports(file: Path, package: Path) -> Iterator[tuple[int, list[str]]]:
    """Line and dotted parts below the package of everything of ours that a file imports, wherever in the file."""
    inside = file.relative_to(package).parts
    for node in ast.walk(ast.parse(file.read_text())):
        if isinstance(node, ast.Import):
            for alias in node.names:
                parts = alias.name.split(".")
                if parts[0] == package.name:
                    yield node.lineno, parts[1:]
        elif isinstance(node, ast.ImportFrom):
            if node.level:
                base = list(inside[: len(inside) - node.level]) + (node.module or "").split(".")
                base = [part for part in base if part]
            elif (node.module or "").split(".")[0] == package.name:
                base = (node.module or "").split(".")[1:]
            else:
                continue
            for alias in node.names:
                yield node.lineno, [*base, alias.name]


def offered(door: Path) -> set[str]:
    """Names that a room's door binds."""
    names: set[str] = set()
    for node in ast.walk(ast.parse(door.read_text())):
        if isinstance(node, (ast.Import, ast.ImportFrom)):
            names |= {(alias.asname or alias.name).split(".")[0] for alias in node.names}
        elif isinstance(node, (ast.FunctionDef, ast.ClassDef)):
            names.add(node.name)
        elif isinstance(node, ast.Assign):
            names |= {target.id for target in node.targets if isinstance(target, ast.Name)}
    return names


def behind_the_door(parts: list[str], package: Path) -> bool:
    """Whether an import of `parts` reaches a file of another room past its door."""
    room = package / parts[0]
    if len(parts) == 1 or not room.is_dir():
        return False
    if len(parts) > 2:
        return True
    is_file = (room / f"{parts[1]}.py").exists() or (room / parts[1]).is_dir()
    return is_file and parts[1] not in offered(room / "__init__.py")


def violations(package: Path, rooms: tuple[str, ...] = ROOMS) -> list[str]:
    """Every import that points forward, reaches behind a door, or comes from or goes to a room that has no place."""
    found = []
    for file in sorted(package.rglob("*.py")):
        own = room_of(file, package)
        where = file.relative_to(package.parent).as_posix()
        if own and own not in rooms:
            found.append(f"{where}: {own} has no place in the order of the rooms")
            continue
        place = rooms.index(own) if own else LAST
        for line, parts in imports(file, package):
            target = parts[0] if parts and parts[0] in rooms else ""
            if own and target == own:
                continue
            if place < (rooms.index(target) if target else LAST):
                found.append(f"{where}:{line}: {own} imports {target or 'the package'}, which comes later")
            elif target and behind_the_door(parts, package):
                found.append(f"{where}:{line}: reaches behind the door of {target}: {'.'.join(parts)}")
    return found


def openings(folder: Path) -> list[str]:
    """Every import and call by which the files of a room could open something."""
    found = []
    for file in sorted(folder.rglob("*.py")):
        for node in ast.walk(ast.parse(file.read_text())):
            names: list[str] = []
            if isinstance(node, ast.Import):
                names = [alias.name for alias in node.names]
            elif isinstance(node, ast.ImportFrom) and not node.level:
                names = [node.module or ""]
            elif isinstance(node, ast.Call):
                name = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
                if name in OPENING_CALLS:
                    found.append(f"{file.name}:{node.lineno}: calls {name}()")
            found += [f"{file.name}:{node.lineno}: imports {n}" for n in names if n.split(".")[0] in OPENING_MODULES]
    return found


# ----------------------------------------------------------------------------------------------------- the program
def test_imports_point_back_along_the_flow_and_stop_at_doors() -> None:
    assert not (found := violations(PACKAGE)), "\n".join(found)


def test_every_room_has_a_door_that_says_what_it_is() -> None:
    for room in sorted(path for path in PACKAGE.iterdir() if path.is_dir() and path.name in ROOMS):
        door = room / "__init__.py"
        assert door.exists(), f"{room.name} has no door"
        assert ast.get_docstring(ast.parse(door.read_text())), f"{room.name}/__init__.py says nothing"


def test_certify_imports_nothing_from_solve() -> None:
    for file in (PACKAGE / "certify").rglob("*.py"):
        assert not [line for line, parts in imports(file, PACKAGE) if "solve" in parts], file.name


def test_plan_opens_nothing() -> None:
    assert not (found := openings(PACKAGE / "plan")), "\n".join(found)


@pytest.mark.parametrize("module", ["bigsvd", "bigsvd.cli"])
def test_importing_loads_no_heavy_library(module: str) -> None:
    code = f"import sys, {module}; print(*sorted({{name.split('.')[0] for name in sys.modules}} & {set(HEAVY)!r}))"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    assert not loaded, f"import {module} loads {loaded}"


# --------------------------------------------------------------------------------------- the checks see what is wrong
def planted(tmp_path: Path, files: dict[str, str]) -> list[str]:
    """Violations in a small package that holds one extra line in each named file."""
    package = tmp_path / "bigsvd"
    for room in ("source", "solve", "certify", "api"):
        (package / room).mkdir(parents=True)
        (package / room / "__init__.py").write_text(f'"""{room}."""\n')
    (package / "source" / "file.py").write_text("")
    (package / "source" / "__init__.py").write_text("from bigsvd.source.start import start\nspec = 1\n")
    (package / "source" / "start.py").write_text("def start(): ...\n")
    (package / "__init__.py").write_text("from bigsvd.api import decompose\n")
    for name, text in files.items():
        (package / name).parent.mkdir(parents=True, exist_ok=True)
        (package / name).write_text(text)
    return violations(package)


@pytest.mark.parametrize(
    "text",
    [
        *("from bigsvd.certify import bound", "import bigsvd.certify", "from bigsvd import certify"),
        *("from ..certify import bound", "from .. import certify", "def late():\n    from bigsvd.api import decompose"),
        *("import bigsvd", "from bigsvd import decompose", "if TYPE_CHECKING:\n    from bigsvd.certify import bound"),
    ],
)
def test_an_import_that_points_forward_is_seen(text: str, tmp_path: Path) -> None:
    found = planted(tmp_path, {"solve/krylov.py": text})
    assert len(found) == 1
    assert "which comes later" in found[0]


@pytest.mark.parametrize(
    "text",
    [
        *("from bigsvd.source.file import rows", "import bigsvd.source.file", "from bigsvd.source import file"),
        *("from ..source.file import rows", "from bigsvd.source import start, file"),
    ],
)
def test_an_import_behind_a_door_is_seen(text: str, tmp_path: Path) -> None:
    found = planted(tmp_path, {"solve/krylov.py": text})
    assert len(found) == 1
    assert "behind the door of source" in found[0]


def test_a_room_without_a_place_is_seen(tmp_path: Path) -> None:
    assert "has no place" in planted(tmp_path, {"util.py": "x = 1"})[0]


def test_imports_by_the_door_and_within_a_room_are_right(tmp_path: Path) -> None:
    lines = ["from bigsvd.source import spec, start", "import bigsvd.source", "from bigsvd.solve.grow import grow"]
    text = "\n".join([*lines, "from . import grow"])
    assert not planted(tmp_path, {"solve/krylov.py": text, "solve/grow.py": "import numpy\n"})


@pytest.mark.parametrize(
    ("text", "seen"),
    [
        *(("import h5py", "h5py"), ("from zarr.storage import LocalStore", "zarr"), ("open('x')", "open()")),
        *(("def size(path):\n    return path.read_text()", "read_text()"), ("np.memmap('x')", "memmap()")),
    ],
)
def test_a_plan_that_opens_something_is_seen(text: str, seen: str, tmp_path: Path) -> None:
    (tmp_path / "plan.py").write_text(text)
    assert [line for line in openings(tmp_path) if seen in line]
