# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where the example sites lie that come with the package."""

from __future__ import annotations

import os
import sys
from collections.abc import Mapping
from pathlib import Path

from ..errors import SettingsError

_PACKAGE = "coord_planner"


def example(name: str, environ: Mapping[str, str] = os.environ) -> Path:
    """An example file by its name, e.g. ``solar_park.yaml``.

    Looked for where ROS 2 has its packages, then where pip puts data files, then in the source tree.
    SettingsError when it is in none of these.
    """
    prefixes = [Path(entry) for entry in environ.get("AMENT_PREFIX_PATH", "").split(os.pathsep) if entry]
    folders = [prefix / "share" / _PACKAGE / "config" for prefix in (*prefixes, Path(sys.prefix))]
    folders.append(Path(__file__).resolve().parents[2] / "config")
    for folder in folders:
        if (folder / name).is_file():
            return folder / name
    raise SettingsError("this example is not installed", file=name,
                        allowed="a parameter file of your own, or the package installed with its examples")
