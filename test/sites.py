# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Parameter files made up for tests: the solar park's mowers in other numbers, places and manoeuvres."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from coord_planner import config
from coord_planner.config import Configuration

_PARK = Path(__file__).parent.parent / "config" / "solar_park.yaml"


def site(starts: np.ndarray, manoeuvres: dict[str, dict[str, object]], **more: object) -> Configuration:
    """Mowers at starts of shape (N, 3) (m, m, rad), each joined with the next; ``more``: dotted keys, dots as __."""
    flat = {
        key: value for key, value in config.load(_PARK).flat.items() if not key.startswith(("robots.", "manoeuvres."))
    }
    names = [f"mower_{k + 1}" for k in range(len(starts))]
    flat |= {"robots.names": names, "manoeuvres.names": list(manoeuvres)}
    flat["graph.edges"] = [f"{a} {b}" for a, b in zip(names, names[1:])]
    for name, (x, y, heading) in zip(names, starts):
        flat |= {f"robots.{name}.start_x": float(x), f"robots.{name}.start_y": float(y),
                 f"robots.{name}.start_heading_deg": float(np.degrees(heading))}
    for name, fields in manoeuvres.items():
        flat |= {f"manoeuvres.{name}.{field}": value for field, value in fields.items()}
    return config.from_parameters(flat | {key.replace("__", "."): value for key, value in more.items()})


def shown(run, spacing: float) -> dict[str, float]:
    """Largest heading spread (degrees) and largest part by which the spacing of neighbours is off, through a run."""
    inside = (run.times >= run.began) & (run.times <= run.ended)
    poses = run.poses[:, inside]
    apart = np.linalg.norm(np.diff(poses[:, :, :2], axis=0), axis=2)
    headings = poses[:, :, 2] - poses[:, :1, 2]
    return {"heading_deg": float(np.degrees(np.ptp(headings, axis=0).max())),
            "spacing": float(np.abs(apart / spacing - 1).max())}
