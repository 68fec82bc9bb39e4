"""The house stands as drawn: imports, lazy ones included, point down only and never in a circle."""

import ast
import subprocess
import sys
from graphlib import CycleError, TopologicalSorter
from pathlib import Path

import pytest

import restore

PACKAGE = Path(restore.__file__).parent
# from the roof down; a room may use those below it, rooms of one floor do not use each other
FLOORS = [
    {"commands"},
    {"scenario"},
    {"report"},
    {"pictures"},
    {"motion", "fitting"},
    {"outlines"},
    {"history"},
    {"files"},
    {"geometry"},
    {"findings", "errors"},
]
FLOOR = {room: height for height, rooms in enumerate(reversed(FLOORS)) for room in rooms}
DOORS = {"restore", "restore.__main__"}


def name_of(path):
    """The dotted name of a module."""
    parts = ["restore", *path.relative_to(PACKAGE).with_suffix("").parts]
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


MODULES = {name_of(path): path for path in sorted(PACKAGE.rglob("*.py"))}


def room_of(module):
    return module.split(".")[1]


def tree_of(module):
    return ast.parse(MODULES[module].read_text(encoding="utf-8"))


def is_for_type_checkers(node):
    return isinstance(node, ast.If) and ast.unparse(node.test) == "TYPE_CHECKING"


def imports(node, type_checking=True):
    """Every module of this package that is imported under a node, in functions too."""
    for child in ast.iter_child_nodes(node):
        if is_for_type_checkers(child) and not type_checking:
            continue
        if isinstance(child, ast.Import):
            yield from (alias.name for alias in child.names if alias.name.partition(".")[0] == "restore")
        elif isinstance(child, ast.ImportFrom):
            assert child.level == 0, "imports name the whole path"
            base = child.module or ""
            if base.partition(".")[0] == "restore":
                yield from (
                    f"{base}.{alias.name}" if f"{base}.{alias.name}" in MODULES else base
                    for alias in child.names
                )
        else:
            yield from imports(child, type_checking)


def test_lazy_imports_are_seen():
    """Imports inside functions count, and those for type checkers only are told apart."""
    code = """
if TYPE_CHECKING:
    from restore.history.store import History
def task():
    import restore.files.toml
    if True:
        from restore.motion import sites, ages
"""
    lazy = ["restore.files.toml", "restore.motion.sites", "restore.motion.ages"]
    assert list(imports(ast.parse(code))) == ["restore.history.store", *lazy]
    assert list(imports(ast.parse(code), type_checking=False)) == lazy


def test_every_room_is_in_the_plan():
    """A file or folder of the package stands on one of the floors."""
    rooms = {room_of(module) for module in MODULES if module not in DOORS}
    assert rooms <= set(FLOOR)
    assert len(MODULES) > 40


@pytest.mark.parametrize("module", sorted(set(MODULES) - DOORS))
def test_arrows_point_down(module):
    """A module imports from its own room and from lower floors, whether at its top or where needed."""
    for other in imports(tree_of(module)):
        assert other in MODULES, f"{module} imports {other}"
        assert other not in DOORS, f"{module} goes in by the front door"
        here, there = room_of(module), room_of(other)
        types_only = (here, there) == ("errors", "findings")
        assert here == there or FLOOR[there] < FLOOR[here] or types_only, f"{module} imports {other}"


def test_errors_know_findings_by_type_only():
    """The lowest floor has no arrows at run time."""
    for module in ("restore.errors", "restore.findings"):
        assert list(imports(tree_of(module), type_checking=False)) == []


def test_the_geometry_touches_no_files_and_no_frames():
    """Geometry is arithmetic: it imports neither xarray nor pandas, and opens and prints nothing."""
    for module, path in MODULES.items():
        if module not in DOORS and room_of(module) == "geometry":
            names = {node.id for node in ast.walk(tree_of(module)) if isinstance(node, ast.Name)}
            assert names.isdisjoint({"open", "print"}), path
            text = path.read_text(encoding="utf-8")
            assert "import xarray" not in text
            assert "import pandas" not in text


def test_no_import_goes_in_a_circle():
    """Modules can be put in an order in which each needs only earlier ones, lazy imports included."""
    graph = {module: set(imports(tree_of(module), type_checking=False)) for module in MODULES}
    try:
        order = list(TopologicalSorter(graph).static_order())
    except CycleError as exc:
        pytest.fail(" -> ".join(exc.args[1]))
    assert set(order) == set(MODULES)


def test_names_are_only_imported_by_text_at_the_doors():
    """Imports that no tree shows stand in the two places that load names lazily."""
    hidden = {
        module
        for module in MODULES
        for node in ast.walk(tree_of(module))
        if isinstance(node, ast.Call)
        and ast.unparse(node.func).rpartition(".")[2] in {"import_module", "__import__", "exec", "eval"}
    }
    assert hidden <= {"restore", "restore.commands"}


ALONE = """\
import importlib, sys
for name in sys.argv[1:]:
    for loaded in [m for m in sys.modules if m.partition(".")[0] == "restore"]:
        del sys.modules[loaded]
    importlib.import_module(name)
    print(name)
"""


def test_every_module_imports_alone():
    """Any module can be the first one that is imported."""
    names = sorted(set(MODULES) - {"restore.__main__"})
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", ALONE, *names], capture_output=True, text=True, timeout=300, check=False
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == names
