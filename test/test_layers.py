# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The order of the rooms: each imports only from rooms above it, and only ros/ knows ROS."""

import ast
import subprocess
import sys
import textwrap
from collections.abc import Iterator
from pathlib import Path

import pytest

import coord_planner

PACKAGE = Path(coord_planner.__file__).parent
ORDER = ["errors", "core", "config", "trial", "record", "ros", "commands", "cli"]
CORE_LIBRARIES = {"attrs", "casadi", "networkx", "numba", "numpy", "scipy", "shapely"}
# Clocks, randomness, files, processes and prints: what core/ must be handed instead of fetching it.
NOT_IN_CORE = {
    "asyncio", "builtins", "datetime", "glob", "io", "logging", "multiprocessing", "os", "pathlib", "random", "secrets",
    "shutil", "signal", "socket", "subprocess", "sys", "tempfile", "time", "uuid",
}
CALLS_NOT_IN_CORE = {"print", "open", "input", "exec", "eval", "__import__"}


def is_ros(module: str) -> bool:
    """Whether a module belongs to ROS: its client library or a message package (REP-0144 suffixes)."""
    root = module.split(".")[0]
    return root in {"rclpy", "tf2_ros", "ament_index_python", "launch", "launch_ros"} or root.endswith(
        ("_msgs", "_srvs", "_interfaces")
    )


def modules() -> list[tuple[str, Path]]:
    """(dotted name below the package, file) of every module."""
    found = []
    for file in sorted(PACKAGE.rglob("*.py")):
        parts = list(file.relative_to(PACKAGE).with_suffix("").parts)
        found.append((".".join(parts[:-1] if parts[-1] == "__init__" else parts), file))
    return found


def imports(name: str, file: Path) -> Iterator[tuple[str, bool]]:
    """(absolute module, whether it is imported when this module is loaded) for each import of a module.

    ``from . import x`` counts as an import of ``x``: it may be a module.
    """
    here = ["coord_planner", *name.split(".")] if name else ["coord_planner"]
    if file.name != "__init__.py":
        here.pop()
    tree = ast.parse(file.read_text(encoding="utf-8"))
    lazy = {
        node
        for function in ast.walk(tree)
        if isinstance(function, (ast.FunctionDef, ast.AsyncFunctionDef))
        for node in ast.walk(function)
    }
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node not in lazy) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = here[: len(here) - node.level + 1] if node.level else []
            source = ".".join([*base, *(node.module or "").split(".")]).strip(".")
            if source == "coord_planner":
                yield from ((f"{source}.{alias.name}", node not in lazy) for alias in node.names)
            else:
                yield source, node not in lazy


def room(module: str) -> str:
    """The room of a dotted name below the package; "" for the package itself."""
    return module.split(".")[0]


EVERY_MODULE = pytest.mark.parametrize(
    ("name", "file"), modules(), ids=lambda value: value if isinstance(value, str) else ""
)


@EVERY_MODULE
def test_every_module_stands_in_a_known_room(name: str, file: Path) -> None:
    assert name == "" or room(name) in ORDER, f"{file} is in no room; the rooms are {', '.join(ORDER)}"


@EVERY_MODULE
def test_imports_go_upwards_only(name: str, file: Path) -> None:
    for module, _ in imports(name, file):
        if not module.startswith("coord_planner."):
            continue
        source = room(module.removeprefix("coord_planner."))
        if source in ORDER:
            assert name, f"coord_planner/__init__.py imports {module}; it must load without any room"
            assert ORDER.index(source) <= ORDER.index(room(name)), f"{file} imports {module}, which lies below it"


@EVERY_MODULE
def test_ros_stays_in_its_room(name: str, file: Path) -> None:
    for module, at_load in imports(name, file):
        if room(name) != "ros":
            assert not is_ros(module), f"{file} imports {module}; only ros/ may"
        if room(name) != "ros" and at_load:
            assert not module.startswith("coord_planner.ros"), f"{file} imports {module} when it is loaded"


@pytest.mark.parametrize(
    ("name", "file"), [found for found in modules() if room(found[0]) in ("core", "errors")],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_core_is_pure(name: str, file: Path) -> None:
    for module, _ in imports(name, file):
        root = module.split(".")[0]
        assert root not in NOT_IN_CORE, f"{file} imports {module}; time, randomness and files are passed in"
        if root != "coord_planner" and root not in sys.stdlib_module_names:
            assert root in CORE_LIBRARIES, f"{file} imports {module}; allowed: {', '.join(sorted(CORE_LIBRARIES))}"
        assert not module.startswith("numpy.random"), f"{file} imports {module}; a generator or a seed is passed in"
    for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            assert node.func.id not in CALLS_NOT_IN_CORE, f"{file}:{node.lineno} calls {node.func.id}"
        assert not draws_unseeded(node), f"{file}:{node.lineno} draws numbers that nobody passed in"


def draws_unseeded(node: ast.AST) -> bool:
    """Whether a node uses numpy's global generator, or makes one without a seed."""
    if isinstance(node, ast.Call):
        return ast.unparse(node.func) in ("np.random.default_rng", "numpy.random.default_rng") and not node.args
    if isinstance(node, ast.Attribute) and ast.unparse(node.value) in ("np.random", "numpy.random"):
        return node.attr not in ("Generator", "default_rng")
    return False


def test_all_but_ros_loads_where_ros_is_not_installed() -> None:
    program = textwrap.dedent("""
        import importlib, importlib.abc, pkgutil, sys
        sys.path.insert(0, sys.argv[1])
        from test_layers import is_ros

        class Blocked(importlib.abc.MetaPathFinder):
            def find_spec(self, name, path=None, target=None):
                if is_ros(name):
                    raise ModuleNotFoundError(f"{name} is blocked")

        sys.meta_path.insert(0, Blocked())
        import coord_planner

        for found in pkgutil.walk_packages(coord_planner.__path__, "coord_planner.", onerror=print):
            if not found.name.startswith("coord_planner.ros"):
                importlib.import_module(found.name)
                print(found.name)
    """)
    command = [sys.executable, "-c", program, str(Path(__file__).parent)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    expected = {f"coord_planner.{name}" for name, _ in modules() if name and room(name) != "ros"}
    assert set(done.stdout.split()) == expected
