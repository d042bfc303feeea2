# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""At which moments neighbours are compared, in a saved program: key ``compared``, left out where at equal ones."""

from __future__ import annotations

from typing import Any, Optional

import attrs
import numpy as np

from ...core.parameter import Description
from ...core.problem import Comparison
from .entries import Entries

_WHAT = "keys: rows, width, " + ", ".join(field.name for field in attrs.fields(Comparison))
_COUNT = Description("how many", minimum=0, maximum=1e6)


def read(top: Entries, edges: int, intervals: int) -> Optional[Comparison]:
    """The comparison, or None where there is none or it is not sound."""
    below = top.mapping("compared", _WHAT)
    if below is None:
        return None
    rows, width = (below.value(key, _COUNT, "int", 0) for key in ("rows", "width"))
    if rows is None or width is None or width > intervals:
        below.add("width", f"{width} intervals are compared", f"at most {intervals}")
        return None
    places = [_places(below, key, rows, last) for key, last in (
        ("edges", edges - 1), ("first_at", intervals - width), ("second_at", intervals - width))]
    weights = [below.array(key, (rows, width), "one for each interval of each row") for key in ("first", "second")]
    plain = [below.array(key, (rows,), "one for each row") for key in ("known", "seconds")]
    below.done()
    parts = [*places, *weights, *plain]
    return None if any(part is None for part in parts) else Comparison(*parts)  # type: ignore[arg-type]


def write(compared: Comparison) -> dict[str, Any]:
    """The mapping of a comparison."""
    rows, width = compared.first.shape
    fields = attrs.asdict(compared, recurse=False)
    return {"rows": rows, "width": width, **{name: part.tolist() for name, part in fields.items()}}


def _places(below: Entries, key: str, rows: int, last: int) -> Optional[np.ndarray]:
    found = below.array(key, (rows,), "one for each row")
    if found is None:
        return None
    if not ((found == np.round(found)) & (found >= 0) & (found <= last)).all():
        below.add(key, "it holds places that there are not", f"whole numbers from 0 to {last}")
        return None
    return found.astype(int)
