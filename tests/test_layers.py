"""The house has one direction: a module imports only from its own room and from rooms above it."""

import ast
import re
from collections.abc import Iterator
from dataclasses import dataclass
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "labkit"

# From the top down; a line is one room or a few that share a floor.
FLOORS = [
    {"errors", "checks", "text", "memory", "files", "cards"},
    {"sources"},
    {"randomness"},
    {"sharing"},
    {"compiled"},
    {"fleet"},
    {"traces"},
    {"survey"},
    {"policies"},
    {"trials"},
    {"engine"},
    {"stationary"},
    {"placing", "serving", "replaying"},
    {"plans"},
    {"analysis"},
    {"provisioning"},
    {"records"},
    {"figures"},
    {"explorer"},
    {"studies"},
    {"reports"},
    {"commands"},
    {"cli", "__main__"},
]
FLOOR_OF = {room: floor for floor, rooms in enumerate(FLOORS) for room in rooms}


def module_name(path: Path, package: Path) -> str:
    parts = path.relative_to(package.parent).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


@dataclass
class Import:
    line: int
    module: str
    names: set[str]
    at_once: bool  # done when the module is imported, not later in a function nor for types only


def walk(node: ast.AST, at_once: bool = True) -> Iterator[tuple[ast.AST, bool]]:
    for child in ast.iter_child_nodes(node):
        later = isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
        for_types = isinstance(child, ast.If) and ast.unparse(child.test).endswith("TYPE_CHECKING")
        inside = at_once and not later and not for_types
        yield child, inside
        yield from walk(child, inside)


def imports_of(source: str) -> list[Import]:
    """Return every import of the package in `source`, wherever it stands."""
    found = []
    for node, at_once in walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [Import(node.lineno, alias.name, set(), at_once) for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            found.append(Import(node.lineno, module, {alias.name for alias in node.names}, at_once))
        elif isinstance(node, ast.Call) and ast.unparse(node.func).endswith("import_module"):
            texts = [a.value for a in node.args if isinstance(a, ast.Constant) and isinstance(a.value, str)]
            found += [Import(node.lineno, text, set(), at_once) for text in texts]
    return [item for item in found if item.module.split(".")[0] in {"labkit", ""}]


def fault_of(item: Import, room: str | None) -> str | None:
    if room is None:
        return "labkit/__init__.py imports nothing of labkit before it is asked"
    if item.module == "labkit" and item.names == {"__version__"}:
        return None
    if item.module.startswith(".") or item.module == "labkit":
        return f"{item.module!r}: name the module in full, as in: from labkit.fleet.model import Fleet"
    above = item.module.split(".")[1]
    if above not in FLOOR_OF:
        return f"{item.module!r} is in no room of the house"
    if FLOOR_OF[above] > FLOOR_OF[room]:
        return f"{room} imports from {above}, which is below it in the house"
    return None


def faults_of(package: Path) -> list[str]:
    """Every import in `package` that breaks the order, as 'file:line: sentence'."""
    faults = []
    needs: dict[str, set[str]] = {}
    for path in sorted(package.rglob("*.py")):
        name = module_name(path, package)
        room = name.split(".")[1] if "." in name else None
        where = path.relative_to(package.parent)
        needs[name] = set()
        if room and room not in FLOOR_OF:
            faults.append(f"{where}:1: {room!r} is no room of the house; add it to FLOORS at its place")
            continue
        for item in imports_of(path.read_text(encoding="utf-8")):
            fault = fault_of(item, room)
            if fault:
                faults.append(f"{where}:{item.line}: {fault}")
            elif item.at_once:
                needs[name] |= {item.module} | {f"{item.module}.{taken}" for taken in item.names}
    try:
        TopologicalSorter({name: needed & needs.keys() - {name} for name, needed in needs.items()}).prepare()
    except CycleError as error:
        faults.append(f"modules import each other in a ring: {' <- '.join(error.args[1])}")
    return faults


def test_every_import_points_up():
    assert faults_of(PACKAGE) == []


def test_every_module_is_seen():
    assert {"errors", "checks", "randomness"} <= {path.stem for path in PACKAGE.rglob("*.py")}


def house(tmp_path: Path, **modules: str) -> Path:
    """Make a small package; a double underscore in a name stands for a folder."""
    package = tmp_path / "labkit"
    for name, source in {"": "", "fleet": "", "engine": "", **modules}.items():
        parts = name.split("__")
        folder = parts[0] in {"fleet", "engine", ""} and len(parts) == 1
        path = package / name / "__init__.py" if folder else package.joinpath(*parts).with_suffix(".py")
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(source)
    return package


def test_a_sound_house_passes(tmp_path):
    package = house(
        tmp_path,
        checks="from labkit.errors import InputError",
        errors="import math",
        fleet__model="from labkit import __version__\nfrom labkit.checks import check_whole\nimport math",
        fleet="from labkit.fleet.model import Fleet",
        engine__placement="import labkit.fleet.model",
        engine__a="from labkit.engine.b import x",
        engine__b="if TYPE_CHECKING:\n    import labkit.engine.a\ndef f():\n    import labkit.engine.a",
    )
    assert faults_of(package) == []


@pytest.mark.parametrize(
    ("modules", "fault"),
    [
        ({"fleet__model": "from labkit.engine.placement import place"}, "fleet imports from engine"),
        ({"fleet__model": "def f():\n    import labkit.engine.placement"}, r"model.py:2: fleet imports from"),
        ({"fleet__model": "import_module('labkit.cli')"}, "fleet imports from cli"),
        ({"errors": "from labkit.randomness import child"}, "errors imports from randomness"),
        ({"engine__placement": "import labkit as lk"}, "name the module in full"),
        ({"engine__placement": "from labkit import place"}, "name the module in full"),
        ({"engine__placement": "from . import loop"}, "name the module in full"),
        ({"engine__placement": "from ..fleet import model"}, "name the module in full"),
        ({"engine__placement": "import labkit.cellar"}, "in no room"),
        ({"cellar": ""}, "'cellar' is no room"),
        ({"": "from labkit.fleet.model import Fleet"}, "imports nothing of labkit"),
        (
            {"fleet__a": "from labkit.fleet.b import x", "fleet__b": "from labkit.fleet import a"},
            "import each other in a ring",
        ),
    ],
)
def test_a_breach_is_named(tmp_path, modules, fault):
    faults = faults_of(house(tmp_path, **modules))
    assert len(faults) == 1
    assert re.search(fault, faults[0])
