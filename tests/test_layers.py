"""The rules of the house: imports point one way, every module is tested, documented, and quiet."""

import ast
import doctest
import importlib
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).parents[1] / "forecaster"
TESTS = Path(__file__).parent

# A room may import the rooms of earlier rows, and its own modules; never a later row, and never
# another room of its own row.
ORDER = [
    {"errors"},
    {"datatypes"},
    {"settings"},
    {"serialize", "storage"},
    {"records", "waves"},
    {"learning"},
    {"forecasting"},
    {"wording"},
    {"plots"},
    {"__init__"},
    {"service"},
    {"cli"},
    {"__main__"},
]
RANK = {room: rank for rank, rooms in enumerate(ORDER) for room in rooms}

# the only places that may import these packages
CONFINED = {
    "matplotlib": {"plots"},
    "sklearn": {"learning"},
    "joblib": {"learning"},
    "click": {"cli"},
}

# what reads a file, or asks the system, when it is called
READERS = {
    "open", "read", "read_text", "read_bytes", "load", "loads", "loadtxt", "genfromtxt",
    "fromfile", "exists", "is_file", "is_dir", "stat", "iterdir", "glob", "rglob", "listdir",
    "getenv", "cwd", "getcwd", "home", "expanduser", "version", "files", "run", "Popen", "urlopen",
}  # fmt: skip


def module_name(path):
    """Dotted name below the package: ``waves.linear``, ``cli``, ``waves.__init__``."""
    return ".".join(path.relative_to(PACKAGE).with_suffix("").parts)


MODULES = {module_name(path): path for path in sorted(PACKAGE.rglob("*.py"))}
TREES = {name: ast.parse(path.read_text(encoding="utf-8")) for name, path in MODULES.items()}
CODE = [name for name in MODULES if not name.endswith(".__init__")]


def room(name):
    return name.split(".")[0]


def imported(name):
    """(line, dotted name) of everything that a module imports, at its top or inside functions."""
    for node in ast.walk(TREES[name]):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{name}, line {node.lineno}: import by the full name"
            yield from ((node.lineno, f"{node.module}.{alias.name}") for alias in node.names)


def own_imports(name):
    """(line, module of the package) pairs; the package itself is ``__init__``."""
    for line, full in imported(name):
        if full.split(".")[0] != "forecaster":
            continue
        inner = full.split(".")[1:]
        while inner and ".".join(inner) not in MODULES:
            inner = inner[:-1]  # the tail is a name inside a module
        yield line, ".".join(inner) or "__init__"


def test_the_walk_finds_the_package():
    assert {"errors", "datatypes", "waves.linear"} <= set(CODE)
    assert ("datatypes", "errors") in {(n, m) for n in CODE for _, m in own_imports(n)}


@pytest.mark.parametrize("name", MODULES)
def test_imports_point_one_way(name):
    assert room(name) in RANK, f"{name} has no place in ORDER"
    for line, other in own_imports(name):
        if room(other) == room(name) != other:
            continue
        assert RANK[room(other)] < RANK[room(name)], f"{name}, line {line} imports {other}"


def test_modules_of_one_room_do_not_import_each_other_in_a_circle():
    graph = {name: {other for _, other in own_imports(name)} for name in MODULES}
    while leaves := {name for name, others in graph.items() if not others & graph.keys()}:
        graph = {name: others for name, others in graph.items() if name not in leaves}
    assert not graph, f"in or above a circle: {sorted(graph)}"


@pytest.mark.parametrize("name", MODULES)
def test_packages_stay_where_they_belong(name):
    for line, full in imported(name):
        rooms = CONFINED.get(full.split(".")[0])
        assert rooms is None or room(name) in rooms, f"{name}, line {line} imports {full}"


@pytest.mark.parametrize("name", [n for n in CODE if n not in ("__init__", "__main__")])
def test_every_module_has_its_test(name):
    *folders, last = name.split(".")
    assert TESTS.joinpath(*folders, f"test_{last}.py").is_file()


@pytest.mark.parametrize("name", [n for n in MODULES if n.endswith(".__init__")])
def test_init_of_a_room_is_empty(name):
    assert MODULES[name].read_bytes() == b""


def public_definitions(node, prefix=""):
    """Public functions, classes and their public methods, not what is inside functions."""
    for child in node.body:
        if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            if child.name.startswith("_"):
                continue
            yield prefix + child.name, child
            if isinstance(child, ast.ClassDef):
                yield from public_definitions(child, f"{child.name}.")


@pytest.mark.parametrize("name", CODE)
def test_everything_public_has_a_docstring(name):
    assert ast.get_docstring(TREES[name]), f"{name} says nothing about itself"
    bare = [label for label, node in public_definitions(TREES[name]) if not ast.get_docstring(node)]
    assert not bare


def runs_at_import(node):
    """Nodes evaluated when the module is imported: all but the bodies of functions."""
    for child in ast.iter_child_nodes(node):
        if isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef):
            at_once = [*child.decorator_list, *child.args.defaults, *child.args.kw_defaults]
            for part in filter(None, at_once):
                yield part
                yield from runs_at_import(part)
        elif not isinstance(child, ast.Lambda):
            yield child
            yield from runs_at_import(child)


def reads(tree):
    """Lines on which importing `tree` would read a file or the environment."""
    for node in runs_at_import(tree):
        if isinstance(node, ast.Attribute) and node.attr == "environ":
            yield node.lineno
        if isinstance(node, ast.Call):
            called = node.func
            label = getattr(called, "attr", None) or getattr(called, "id", None)
            if label in READERS:
                yield node.lineno


@pytest.mark.parametrize("name", MODULES)
def test_nothing_is_read_at_import(name):
    assert not list(reads(TREES[name]))


@pytest.mark.parametrize(
    ("source", "found"),
    [
        ("x = open('a')", True),
        ("x = Path('a').read_text()", True),
        ("x = os.environ['A']", True),
        ("if True:\n    x = np.load('a')", True),
        ("class A:\n    x = os.getenv('A')", True),
        ("def f(x=open('a')): pass", True),
        ("@wrap(os.environ)\ndef f(): pass", True),
        ("def f():\n    return open('a')", False),
        ("class A:\n    def f(self):\n        return os.environ", False),
        ("f = lambda: open('a')", False),
        ("x = sorted([2, 1])", False),
    ],
)
def test_the_search_for_reading_at_import_finds_it(source, found):
    assert bool(list(reads(ast.parse(source)))) is found


def test_importing_the_package_brings_no_heavy_package():
    program = "import sys, forecaster; print(*{name.split('.')[0] for name in sys.modules})"
    run = subprocess.run(
        [sys.executable, "-c", program],
        capture_output=True, text=True, check=True, cwd=PACKAGE.parent,
    )  # fmt: skip
    heavy = {"scipy", "sklearn", "joblib", "matplotlib", "click", "pandas", "pyarrow"}
    assert not heavy & set(run.stdout.split())


@pytest.mark.parametrize("name", [n for n in CODE if n != "__main__"])
def test_examples_in_docstrings_give_what_they_show(name):
    dotted = "forecaster" if name == "__init__" else f"forecaster.{name}"
    result = doctest.testmod(importlib.import_module(dotted))
    assert result.failed == 0
