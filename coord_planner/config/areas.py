# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Keep-out areas and areas with a speed cap: names, and a flat list of coordinates for each."""

from __future__ import annotations

from typing import Any

import attrs

from ..core.area import Area, area_of
from ..core.parameter import parameter
from ..core.settings import SiteRules, SpeedCap
from ..errors import SettingsError
from .complaints import Complaints

_CORNERS = "x and y of its corners in their order round it, [x, y, x, y, ...], in the fleet's frame; convex or not"


@attrs.frozen
class KeepOut:
    """Per keep-out area."""

    corners: tuple[float, ...] = parameter(attrs.NOTHING, _CORNERS, "m", minimum=-1e6, maximum=1e6)


@attrs.frozen
class CappedArea:
    """Per area with a speed cap of its own."""

    corners: tuple[float, ...] = parameter(attrs.NOTHING, _CORNERS, "m", minimum=-1e6, maximum=1e6)
    max_speed: float = parameter(
        attrs.NOTHING, "speed cap for every robot that any part of is in the area", "m/s", above=0.0, maximum=50.0,
    )


GROUPS: dict[str, type] = {"site_rules.keep_outs": KeepOut, "site_rules.speed_caps": CappedArea}


def with_areas(rules: SiteRules, given: Any, names: Any, complaints: Complaints) -> SiteRules:
    """The rules with the areas that the file names.

    Args:
        given: values by dotted key. names: of the areas, by group.
    """
    keep_outs = [_area("site_rules.keep_outs", name, given, complaints) for name in names["site_rules.keep_outs"]]
    capped = [
        (_area("site_rules.speed_caps", name, given, complaints), given[f"site_rules.speed_caps.{name}.max_speed"])
        for name in names["site_rules.speed_caps"]
    ]
    return attrs.evolve(
        rules, keep_outs=tuple(area for area in keep_outs if area is not None),
        speed_caps=tuple(SpeedCap(area, speed) for area, speed in capped if area is not None),
    )


def _area(group: str, name: str, given: Any, complaints: Complaints) -> Area | None:
    try:
        return area_of(name, given[f"{group}.{name}.corners"])
    except SettingsError as error:
        complaints.add(error.problem, f"{group}.{name}.corners", error.allowed)
        return None
