# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Changes of commands from node to node, and their transpose."""

from __future__ import annotations

import numpy as np


def changes(commands: np.ndarray) -> np.ndarray:
    """Change from the node before, with 0 before the first; commands at nodes 1 .. M, shape (N, M)."""
    found = commands.copy()
    found[:, 1:] -= commands[:, :-1]
    return found


def changes_back(forces: np.ndarray) -> np.ndarray:
    """The transpose of ``changes``, shape (N, M)."""
    found = forces.copy()
    found[:, :-1] -= forces[:, 1:]
    return found
