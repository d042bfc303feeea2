# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is promised to pip, colcon and rosdep, and that an installed copy does what it promises."""

import ast
import configparser
import importlib
import os
import re
import signal
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest
from test_layers import is_ros

import coord_planner

SOURCE = Path(__file__).parent.parent
EXECUTABLES = ("coord-planner", "planner_node", "simulator_node")
# Keys of rosdep's python.yaml by the name under which pip knows the library; PIP_ONLY have none there.
ROSDEP_KEYS = {
    "attrs": "python3-attrs", "casadi": "casadi-pip", "networkx": "python3-networkx", "numba": "python3-numba",
    "numpy": "python3-numpy", "pyyaml": "python3-yaml", "rich": "python3-rich", "rosbags": "python3-rosbags-pip",
    "scipy": "python3-scipy", "shapely": "python3-shapely", "typer": "python3-typer",
}
IMPORTED_AS = {"pyyaml": "yaml"}
PIP_ONLY = {"lz4", "mcap", "plotly", "zstandard"}
# Imported only where it is asked for, with a message that says how to install it; each an extra of its own.
EXTRAS = {"distributed": "cluster", "pyarrow": "parquet"}
OPTIONAL_ROS = {"ackermann_msgs": "ackermann_msgs", "tf2_ros": "tf2_ros_py"}


def setup_keywords() -> dict[str, ast.expr]:
    """Arguments of the call of setup(), unevaluated: setup.py acts when it is run."""
    for node in ast.walk(ast.parse((SOURCE / "setup.py").read_text(encoding="utf-8"))):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "setup":
            return {keyword.arg: keyword.value for keyword in node.keywords if keyword.arg}
    raise AssertionError("setup.py does not call setup()")


def required() -> set[str]:
    """Names in install_requires, lower case."""
    lines = ast.literal_eval(setup_keywords()["install_requires"])
    return {re.split(r"[<>=!~\[; ]", line)[0].lower() for line in lines}


def manifest() -> ElementTree.Element:
    return ElementTree.parse(SOURCE / "package.xml").getroot()


def depended() -> set[str]:
    return {element.text or "" for element in manifest().iter() if element.tag in ("depend", "exec_depend")}


def imported() -> set[str]:
    """Root names of all modules that the package and its launch files import from elsewhere."""
    roots = set()
    for file in [*(SOURCE / "coord_planner").rglob("*.py"), *(SOURCE / "launch").glob("*.py")]:
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Import):
                roots |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and not node.level and node.module:
                roots.add(node.module.split(".")[0])
    return roots - set(sys.stdlib_module_names) - {"coord_planner"}


def test_one_version_everywhere() -> None:
    in_setup = ast.literal_eval(setup_keywords()["version"])
    assert manifest().findtext("version") == in_setup == coord_planner.__version__


def test_libraries_are_declared_to_pip_and_to_rosdep() -> None:
    used = {root for root in imported() if not is_ros(root)}
    assert required() == set(ROSDEP_KEYS) | PIP_ONLY
    wanted = {IMPORTED_AS.get(name, name) for name in required()} | set(EXTRAS)
    assert used == wanted, "setup.py asks for exactly what is imported"
    keys = {key for key in depended() if key.startswith("python3-") or key.endswith("-pip")}
    assert keys == set(ROSDEP_KEYS.values())


def test_what_only_some_need_is_an_extra_and_loaded_late() -> None:
    extras = ast.literal_eval(setup_keywords()["extras_require"])
    for library, extra in EXTRAS.items():
        assert any(line.startswith(library) for line in extras[extra])
        assert any(line.startswith(library) for line in extras["test"]), "what the tests need, they bring"
    blocked = "; ".join(f"sys.modules[{library!r}] = None" for library in EXTRAS)
    program = f"import sys; {blocked}; import coord_planner.cli, coord_planner.trial.sweep.cluster"
    subprocess.run([sys.executable, "-c", program], check=True, timeout=60, cwd=SOURCE)


def test_ros_packages_are_declared() -> None:
    used = {OPTIONAL_ROS.get(root, root) for root in imported() if is_ros(root)}
    assert used <= depended(), f"package.xml lacks {', '.join(sorted(used - depended()))}"


def test_manifest_is_what_colcon_and_rosdep_expect() -> None:
    root = manifest()
    assert root.get("format") == "3"
    assert root.findtext("export/build_type") == "ament_python"
    assert root.findtext("license") == "Apache-2.0"
    assert (SOURCE / "resource" / "coord_planner").read_bytes() == b""
    settings = configparser.ConfigParser()
    settings.read(SOURCE / "setup.cfg")
    assert settings["install"]["install_scripts"] == settings["develop"]["script_dir"] == "$base/lib/coord_planner"


def test_every_source_file_states_copyright_and_licence() -> None:
    """As REP-2004, quality level 4, asks for."""
    folders = [SOURCE / name for name in ("coord_planner", "test", "launch")]
    for file in [SOURCE / "setup.py", *(file for folder in folders for file in folder.rglob("*.py"))]:
        head = file.read_text(encoding="utf-8")[:200]
        assert "# Copyright" in head and "# SPDX-License-Identifier: Apache-2.0" in head, file


@pytest.mark.parametrize("executable", EXECUTABLES)
def test_entry_points_lead_to_a_function(executable: str) -> None:
    entries = ast.literal_eval(setup_keywords()["entry_points"])["console_scripts"]
    module, function = dict(entry.split(" = ") for entry in entries)[executable].split(":")
    if module.startswith("coord_planner.ros"):
        pytest.importorskip("rclpy", reason="the nodes need ROS 2")
    assert callable(getattr(importlib.import_module(module), function))


# An installed copy: `make colcon` makes one and demands that it is found; `colcon test` in a workspace finds its own.


def find_installed() -> Path:
    """Where colcon installed the package, by the ament index; the test is skipped where it did not."""
    index = pytest.importorskip("ament_index_python", reason="looking for an installed copy needs ROS 2's index")
    try:
        found = Path(index.get_package_prefix("coord_planner"))
    except (LookupError, OSError):  # OSError: AMENT_PREFIX_PATH is not set
        if os.environ.get("REQUIRE_INSTALLED"):
            raise
        pytest.skip("no installed copy of coord_planner: build one with colcon and source it")
    assert Path(coord_planner.__file__).is_relative_to(found), "the index and Python find different copies"
    return found


@pytest.fixture
def prefix() -> Path:
    return find_installed()


def test_installed_files_are_in_place(prefix: Path) -> None:
    for name in EXECUTABLES:
        assert os.access(prefix / "lib/coord_planner" / name, os.X_OK), f"`ros2 run coord_planner {name}` finds nothing"
    share = prefix / "share" / "coord_planner"
    for kind in ("config/*.yaml", "launch/*.launch.py", "package.xml"):
        ours = sorted(path.relative_to(SOURCE) for path in SOURCE.glob(kind))
        assert ours == sorted(path.relative_to(share) for path in share.glob(kind)) != []


def test_installed_command_reads_the_installed_example(prefix: Path, tmp_path: Path) -> None:
    done = subprocess.run(
        [prefix / "lib/coord_planner/coord-planner", "check", "--quick",
         prefix / "share/coord_planner/config/solar_park.yaml"],
        cwd=tmp_path, capture_output=True, text=True, timeout=60, check=False,
    )
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize("executable", ["planner_node", "simulator_node"])
def test_installed_nodes_come_up_and_end_at_ctrl_c(prefix: Path, tmp_path: Path, executable: str) -> None:
    node = subprocess.Popen(
        [prefix / "lib/coord_planner" / executable, "--ros-args", "--params-file",
         prefix / "share/coord_planner/config/solar_park.yaml", "-r", "__ns:=/installed"],
        cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True,
    )
    try:
        assert heard_from(f"/installed/{executable.removesuffix('_node')}"), "it is not on the ROS graph after 30 s"
        node.send_signal(signal.SIGINT)
        output, _ = node.communicate(timeout=20)
        assert node.returncode == 0, output
    finally:
        node.kill()
        node.communicate()


def heard_from(name: str, patience: float = 30.0) -> bool:
    """Whether a node of this full name appears on the ROS graph in time."""
    import time

    import rclpy

    rclpy.init()
    try:
        listener = rclpy.create_node("listener")
        until = time.monotonic() + patience
        while time.monotonic() < until:
            known = {f"{namespace.rstrip('/')}/{node}" for node, namespace in listener.get_node_names_and_namespaces()}
            if name in known:
                return True
            time.sleep(0.1)
        return False
    finally:
        rclpy.shutdown()
