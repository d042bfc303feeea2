# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Installs coord_planner: with pip beside any Python, with colcon into a ROS 2 workspace."""

import os
from glob import glob

from setuptools import find_packages, setup
from setuptools.command.develop import develop
from setuptools.command.install import install

PACKAGE = "coord_planner"

# setup.cfg puts the commands where `ros2 run` looks, which is right in a workspace. But pip, when it calls `setup.py
# install` (up to 23.0, as in Debian 12) or `setup.py develop` (up to 25.2), must put them on the PATH.
CALLED_BY_PIP = "PIP_BUILD_TRACKER" in os.environ


class Install(install):
    """Puts commands on the PATH for pip."""

    def finalize_options(self):
        if CALLED_BY_PIP:
            self.install_scripts = None
        super().finalize_options()


class Develop(develop):
    """Puts commands on the PATH for pip."""

    def finalize_options(self):
        if CALLED_BY_PIP:
            self.script_dir = None
        super().finalize_options()


setup(
    name=PACKAGE,
    version="0.1.0",
    description="Coordinated motion planning for several ground robots that turn together",
    license="Apache-2.0",
    maintainer="coord_planner maintainers",
    maintainer_email="maintainers@example.com",
    packages=find_packages(include=[PACKAGE, f"{PACKAGE}.*"]),
    package_data={PACKAGE: ["record/*.css", "record/*.html", "record/*.js"]},
    data_files=[
        ("share/ament_index/resource_index/packages", [f"resource/{PACKAGE}"]),
        (f"share/{PACKAGE}", ["package.xml"]),
        (f"share/{PACKAGE}/config", sorted(glob("config/*.yaml"))),
        (f"share/{PACKAGE}/launch", sorted(glob("launch/*.launch.py"))),
    ],
    python_requires=">=3.10",
    # Lower ends are what Ubuntu 24.04 ships, where it ships the library at all.
    install_requires=[
        "attrs>=23.2",
        "casadi>=3.7",  # 3.6 keeps the interpreter's lock while it solves
        "lz4>=4.0",
        "mcap>=1.2",  # reads recordings that break off, with lz4 and zstandard
        "networkx>=2.8",
        "numba>=0.59",  # compiles the tick solver; what runs without it, runs slower
        "numpy>=1.26",
        "plotly>=5.15",
        "pyyaml>=6.0",
        "rich>=13.7",
        "rosbags>=0.11",
        "scipy>=1.11",
        "shapely>=2.0",
        "typer>=0.9,<0.29",  # 0.29 wants pydantic 2; other programs of Ubuntu 24.04 need its 1.10
        "zstandard>=0.22",
    ],
    extras_require={
        "cluster": ["distributed>=2023.12"],  # sweep --cluster
        "parquet": ["pyarrow>=14.0"],  # sweep --results parquet
        # ROS 2 Jazzy as wheels, for machines without ROS 2 of their own. Never beside another ROS release.
        "ros": [
            "ros-jazzy-diagnostic-msgs==5.3.6",
            "ros-jazzy-nav-msgs==5.3.6",
            "ros-jazzy-rclpy==7.1.6",
            "ros-jazzy-rmw-fastrtps-cpp==8.4.3",
            "ros-jazzy-std-srvs==5.3.6",
            "ros-jazzy-visualization-msgs==5.3.6",
        ],
        "test": [
            "colcon-common-extensions>=0.3",
            "distributed>=2023.12",
            "easydubins>=1.3",
            "hypothesis>=6.98",
            "mypy==2.4.*",  # checkers learn new rules with every release: pinned, so that only we break our build
            "pyarrow>=14.0",
            "pytest>=7.4",
            "pytest-xdist>=3.4",
            "rsplan>=1.0",
            "ruff==0.17.*",
            "selenium>=4.20",  # drives Chromium, where chromium and chromium-driver are installed
            "setuptools<80",  # colcon calls setup.py in ways that 80 dropped
            "types-PyYAML>=6.0",
        ],
    },
    entry_points={
        "console_scripts": [
            "coord-planner = coord_planner.cli:main",
            "planner_node = coord_planner.ros.planner_node:main",
            "simulator_node = coord_planner.ros.simulator_node:main",
        ],
    },
    cmdclass={"install": Install, "develop": Develop},
    zip_safe=False,
)
