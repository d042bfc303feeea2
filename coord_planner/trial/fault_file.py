# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A fault file (YAML): what goes wrong in a rehearsal, and when."""

from __future__ import annotations

from pathlib import Path

from ..config.complaints import Complaints, Source, nearest
from ..core.graph import NeighbourGraph
from .faults import Fault
from .sweep.document import read_document
from .sweep.faults import fault_list

_WHAT = "a fault file (YAML) with `faults:`, a list of {kind, robot or edge, from_s, to_s, value}"


def load_faults(path: str | Path, graph: NeighbourGraph) -> tuple[Fault, ...]:
    """The faults of a file.

    Args:
        graph: of the fleet that they strike.

    Raises:
        SettingsError: all that is wrong, each with its file, line, key, value and what is allowed.
    """
    held, lines = read_document(path, _WHAT)
    complaints = Complaints(Source(str(path), lines))
    for key in held:
        if key != "faults":
            complaints.add(f"it is not a known key{nearest(str(key), ['faults'])}", str(key), _WHAT)
    if "faults" not in held:
        complaints.add("it has to be given", "faults", _WHAT)
        complaints.raise_any()
    found = fault_list(held["faults"], graph, complaints)
    complaints.raise_any()
    return found
