# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The tick solver's kernels, loaded before anything is timed by them, and people told when that takes long."""

from __future__ import annotations

import threading
from collections.abc import Callable

from ..core.fast import engine

_PATIENCE = 2.0  # seconds; loading takes one


def load_kernels(tell: Callable[[str], None]) -> None:
    """Load or compile them; at once where that was done before. ``tell`` may be called in another thread."""
    compiling = threading.Timer(
        _PATIENCE, tell, ["compiling the tick solver, once for this machine and user: half a minute"]
    )
    compiling.daemon = True
    compiling.start()
    try:
        missing = engine.kernels() is None
    finally:
        compiling.cancel()
    if missing:
        tell(engine.told())
