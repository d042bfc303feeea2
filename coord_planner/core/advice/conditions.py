# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Where the copying law does not hold for a manoeuvre: which of its conditions are not kept, by whom and how much."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ..fleet import Fleet
from ..manoeuvre import Task
from ..problem import CURVATURE_COMMAND, SPEED, SPEED_COMMAND
from ..reference import Reference
from ..settings import Settings

_MET = 0.995  # of a limit
_SPEEDS_EQUAL = 0.01  # of the asked speed
_BEND_SMALL = 1e-3  # of the price of turning, by which the price of steering changes it
_NEAR = 0.02  # metres beyond the gap to keep


@attrs.frozen
class Condition:
    """One condition of the law.

    Attributes:
        code: what it is about, in few words. kept: whether it holds.
        found: what there is, with figures. changes: what follows where it does not hold ("" where it does).
    """

    code: str
    kept: bool
    found: str
    changes: str = ""


def led_by(task: Task) -> tuple[int, ...]:
    """Robots that have an end of their own."""
    return tuple(int(k) for k in np.flatnonzero(~np.isnan(task.ends[:, 2])))


def conditions(made: Reference, fleet: Fleet, settings: Settings) -> tuple[Condition, ...]:
    """Every condition of the copying law, looked at in the reference of a manoeuvre."""
    return (
        _ends(made.task, fleet), _speeds(made, fleet), _limits(made, fleet, settings), _clearance(made, settings),
        _alignment(made.task), _steering(made, settings),
    )


def _ends(task: Task, fleet: Fleet) -> Condition:
    led = led_by(task)
    if len(led) == len(fleet):
        return Condition(
            "somebody only copies", False, "every robot has an end of its own",
            "who turns how far is fixed by the ends; the coupling only shapes how they get there",
        )
    names = ", ".join(fleet.names[k] for k in led)
    if len(led) == 1:
        return Condition("somebody only copies", True, f"{names} has an end, the others copy")
    return Condition(
        "somebody only copies", True, f"{names} have ends, the others copy a mixture of their turning",
    )


def _speeds(made: Reference, fleet: Fleet) -> Condition:
    speeds = made.plan.states[:, :, SPEED]
    apart = np.ptp(speeds / made.task.speed, axis=0)
    at = int(np.argmax(apart))
    if apart[at] <= _SPEEDS_EQUAL:
        return Condition("equal speeds", True, f"all speeds within {100 * apart[at]:.1g}% of each other")
    slow, fast = int(np.argmin(speeds[:, at])), int(np.argmax(speeds[:, at]))
    return Condition(
        "equal speeds", False,
        f"at {made.plan.times[at]:.1f} s {fleet.names[slow]} drives {speeds[slow, at]:.2f} m/s and "
        f"{fleet.names[fast]} {speeds[fast, at]:.2f} m/s",
        "the law then holds for turn rates over the asked speeds; headings and paths differ more than it says",
    )


def _limits(made: Reference, fleet: Fleet, settings: Settings) -> Condition:
    led = led_by(made.task)
    # A led robot may turn as it must: the law says what the others make of it.
    looked_at = [k for k in range(len(fleet)) if k not in led] or list(led)
    met = [f"{fleet.names[k]} its {name} for {100 * parts[k]:.0f}% of the time"
           for name, parts in _met(made, fleet, settings).items() for k in looked_at if parts[k] > 0]
    if not met:
        return Condition("no limit met", True, "no robot that copies meets a limit in the reference")
    shown = ", ".join(met[:4]) + (f" and {len(met) - 4} more" if len(met) > 4 else "")
    return Condition(
        "no limit met", False, f"{shown} of the reference",
        "who meets a limit turns as that allows, and the others copy what is left",
    )


def _met(made: Reference, fleet: Fleet, settings: Settings) -> dict[str, np.ndarray]:
    """Part of the manoeuvre during which each robot meets each limit, shape (N,) each; until arrival."""
    plan, rules = made.plan, settings.site_rules
    before = plan.times[1:] < made.task.arrival - 1e-9
    states, rates = plan.states[:, 1:][:, before], plan.rates[:, before]
    speed, bend = np.abs(states[:, :, SPEED_COMMAND]), np.abs(states[:, :, CURVATURE_COMMAND])

    def capped(name: str, cap: float = math.inf) -> np.ndarray:
        return np.minimum(fleet.limit(name), cap)[:, None]

    use = {
        "max_curvature": bend / capped("max_curvature", made.task.max_curvature),
        "max_curvature_rate": np.abs(rates[:, :, 0]) / capped("max_curvature_rate"),
        "max_turn_rate": speed * bend / capped("max_turn_rate"),
        "max_lateral_acceleration":
            speed**2 * bend / capped("max_lateral_acceleration", rules.max_lateral_acceleration),
        "max_speed": speed / capped("max_speed", rules.max_speed),
    }
    return {name: np.mean(part > _MET, axis=1) for name, part in use.items()}


def _clearance(made: Reference, settings: Settings) -> Condition:
    margins, rules = settings.clearance, settings.site_rules
    kept = rules.min_clearance + 2 * (margins.pose_uncertainty + made.task.speed * margins.response_uncertainty)
    if not math.isfinite(made.clearance) or made.clearance > kept + _NEAR:
        return Condition("no clearance met", True, "nobody has to make room")
    first, second = (made.plan.fleet.robots[k].name for k in made.pair)
    return Condition(
        "no clearance met", False,
        f"{first} and {second} come within {made.clearance:.2f} m, and {kept:.2f} m are to be kept in the plan",
        "they make room for each other, whatever they copy",
    )


def _alignment(task: Task) -> Condition:
    price = task.alignment
    if price == 0.0 or task.coupling == 0.0:
        return Condition("no alignment", True, "headings that differ are not priced")
    return Condition(
        "no alignment", False, f"alignment {price:g} 1/m^2 prices headings that differ",
        "robots that only copy turn on until they have their neighbours' heading: more, and later, than the law says",
    )


def _steering(made: Reference, settings: Settings) -> Condition:
    """The price of steering against that of turning, for a bend that lasts as long as the manoeuvre.

    Over a bend sin(w t) the price of changing it is ``prices.curvature_rate`` w^2 times that of the bend.
    """
    part = settings.prices.curvature_rate * (2 * math.pi / max(made.task.arrival, 1e-9)) ** 2
    if part <= _BEND_SMALL:
        found = f"prices.curvature_rate adds {100 * part:.2g}% to the price of a bend"
        return Condition("steering is free", True, found)
    return Condition(
        "steering is free", False,
        f"prices.curvature_rate {settings.prices.curvature_rate:g} adds about {100 * part:.2g}% to the price of a bend "
        "as long as the manoeuvre, and more to short ones",
        "each robot rounds off its own bends, and copies quick changes less",
    )
