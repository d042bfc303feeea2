# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where a command leaves its results: made and looked at before a long run, not after it."""

from __future__ import annotations

import os
from pathlib import Path

from ..errors import SettingsError


def prepare_folder(folder: Path, option: str) -> None:
    """Make a folder; SettingsError when that cannot be done or nothing can be written into it."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        reason = "" if os.access(folder, os.W_OK | os.X_OK) else "no permission"
    except OSError as error:
        reason = error.strerror or str(error)
    if reason:
        raise SettingsError(f"nothing can be written into {folder} ({reason})", key=option,
                            allowed="a folder that can be written to")


def prepare_file(file: Path, option: str) -> None:
    """Make the folder of a file; SettingsError when the file could not be written there."""
    prepare_folder(file.parent, option)
    if file.is_dir():
        raise SettingsError(f"{file} is a folder", key=option, allowed="a file")


def prepare_bag(folder: Path, option: str) -> None:
    """See that a recording can be made as a new folder; SettingsError otherwise: none is ever written over."""
    if folder.exists():
        raise SettingsError(f"{folder} is there already, and a recording is never written over", key=option,
                            allowed="a folder that does not exist yet")
    prepare_folder(folder.parent, option)
