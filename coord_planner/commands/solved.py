# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What ``solve`` tells of a plan: the keys of its JSON, and tables for people."""

from __future__ import annotations

from typing import Any, Optional

import numpy as np

from ..core import outline
from ..core.again import Again
from ..core.direct.heisenberg import HeisenbergPlan
from ..core.direct.impossible import Obstacle
from ..core.direct.judged import Judgement
from ..core.direct.planning import DirectPlan
from ..core.optimality import Check
from .speaking import CAUTION, table, write, write_heading, write_table

Figures = dict[str, Any]
_COARSE = 0.5  # rad within an interval: more is coarse
_BETWEEN = 4  # moments in each interval at which the clearance is looked at


def of_direct(plan: DirectPlan) -> Figures:
    """The JSON of a plan of the se2 model."""
    names = plan.problem.names
    figures = _head(plan.status, plan.reason, plan.obstacles, names)
    figures["starts"] = _starts(plan.tried, plan.converged, plan.reached)
    if plan.solved is None or plan.judgement is None:
        return {**figures, **_nothing("speed", "path_length_m", "min_clearance_m")}
    speed, h = plan.speed, np.diff(plan.times)
    return {
        **figures, "cost": plan.cost, "effort": plan.effort, "disagreement": plan.disagreement,
        "times": plan.times.tolist(), "curvature": plan.curvature.tolist(), "poses": plan.poses.tolist(),
        "optimality": _optimality(plan, plan.judgement), "speed": speed.tolist(),
        "path_length_m": dict(zip(names, (np.abs(speed) * h).sum(axis=1).tolist())),
        "min_clearance_m": _clearance(plan), "largest_turn_in_an_interval_rad": _largest_turn(plan),
    }


def of_heisenberg(plan: HeisenbergPlan) -> Figures:
    """The JSON of a plan on the Heisenberg group; its poses are x, y, z."""
    return {
        **_head(plan.status, plan.reason, (), plan.problem.names),
        "starts": _starts(plan.tried, plan.converged, plan.reached), "cost": plan.cost, "effort": plan.effort,
        "disagreement": plan.disagreement, "times": plan.times.tolist(), "curvature": None,
        "controls": plan.controls.tolist(), "poses": plan.places.tolist(),
        "optimality": {**_check(plan.check), "end_missed": plan.missed,
                       "drift": {"hamiltonian": plan.energy_drift, "costate_z": plan.area_drift}},
    }


def of_planner(found: Again, saved_because: str) -> Figures:
    """The JSON of a program of the planner, solved again."""
    figures = _head(found.status, found.reason, found.obstacles, found.problem.fleet.names)
    figures |= {"saved_because": saved_because, "from_scratch": None}
    if found.fresh is not None:
        fresh = found.fresh
        figures["from_scratch"] = {
            "solved": fresh.solved, "cost": fresh.cost, "iterations": fresh.iterations,
            "end_missed": float(fresh.missed.max(initial=0.0)),
            "clearance_short_m": float(fresh.short.max(initial=0.0)),
        }
    if found.plan is None or found.check is None:
        return {**figures, **_nothing("speed", "min_clearance_m", "iterations")}
    plan = found.plan
    gap = plan.closest()[0]
    return {
        **figures, "cost": plan.cost, "effort": found.effort, "disagreement": found.disagreement,
        "times": plan.times.tolist(), "curvature": found.curvature.tolist(), "poses": plan.poses.tolist(),
        "optimality": {**_check(found.check), "end_missed": float(plan.missed.max(initial=0.0))},
        "speed": found.speed.tolist(), "min_clearance_m": gap if np.isfinite(gap) else None,
        "iterations": plan.iterations,
    }


def _head(status: str, reason: str, obstacles: tuple[Obstacle, ...], names: tuple[str, ...]) -> Figures:
    return {
        "status": status, "reason": reason,
        "in_the_way": [{"limit": each.limit, "robots": list(each.robots), "text": each.text} for each in obstacles],
        "robots": list(names),
    }


def _nothing(*more: str) -> Figures:
    return dict.fromkeys(
        ("cost", "effort", "disagreement", "times", "curvature", "poses", "optimality", *more))


def _starts(tried: int, converged: int, reached: tuple[float, ...]) -> Figures:
    """First guesses tried, how many led to a plan, and what these plans cost (on few intervals, where guesses are
    compared); ``spread``: of the dearest over the cheapest.
    """
    least = min(reached, default=None)
    spread = (max(reached) - least) / least if least else (0.0 if reached else None)
    return {"tried": tried, "converged": converged, "distinct": len(reached), "cheapest": least,
            "dearest": max(reached, default=None), "spread": spread}


def _check(check: Check) -> Figures:
    return {
        "nothing_better_nearby": check.clean, "to": _finite(check.residual), "words": check.words,
        "stationarity": _finite(check.stationarity), "constraints": _finite(check.constraints),
        "complementarity": _finite(check.complementarity),
        "inertia": {"positive": check.positive, "negative": check.negative, "zero": check.zero,
                    "falling": check.falling, "flat": check.flat, "dependent_rows": check.dependent},
    }


def _optimality(plan: DirectPlan, judgement: Judgement) -> Figures:
    units, drifts, problem = plan.units, judgement.drifts, plan.problem
    per_metre = units.cost / units.metre  # what a costate of a position is counted in
    force = judgement.costates.before[:, -1, :2] * per_metre
    bound = judgement.heading_bound * units.cost
    return {
        **_check(judgement.check), "end_missed": judgement.missed,
        "drift": {"hamiltonian": drifts.hamiltonian, "costates": drifts.force, "costate_sums": drifts.force_sum,
                  "casimirs": drifts.casimir},
        "hamiltonian": judgement.energy * units.cost / units.second,
        "costates_at_end": {name: {"p_x": float(p[0]), "p_y": float(p[1]), "moment": float(moment)} for name, p, moment
                            in zip(problem.names, force, judgement.costates.before[:, -1, 2] * units.cost)},
        "heading_bound": {"bound": bound, "kept": bool(plan.cost >= bound * (1 - 1e-9) - 1e-12)},
        "identities": {"cost": judgement.cost_identity, "coupling": judgement.coupling_identity,
                       "end": judgement.end_identity},
    }


def _finite(value: float) -> Optional[float]:
    return value if np.isfinite(value) else None


def _largest_turn(plan: DirectPlan) -> float:
    return float(np.abs(np.diff(plan.poses[..., 2], axis=1)).max())


def _clearance(plan: DirectPlan) -> Optional[float]:
    """Smallest exact distance between any two footprints, at the nodes and between them."""
    problem = plan.problem
    if len(problem) < 2:
        return None
    gap, _ = outline.closest(outline.outlines(problem.corners, plan.between(_BETWEEN)), outline.all_pairs(len(problem)))
    return gap


# Tables


def write_figures(figures: Figures, problem: str) -> None:
    """A plan for people."""
    if figures["cost"] is None:
        return
    write(f"{problem}: {figures['status']}. Cost {figures['cost']:.8g}: effort {figures['effort']:.6g}, disagreement "
          f"{figures['disagreement']:.6g}.")
    check = figures["optimality"]
    write(f"{check['words'].capitalize()}.\n")
    turn = figures.get("largest_turn_in_an_interval_rad") or 0.0
    if turn > _COARSE:
        write(f"Somebody turns by {turn:.2g} rad within one interval: with more intervals the cost will be lower.\n")
    _write_robots(figures)
    _write_check(check)
    _write_starts(figures)
    write(CAUTION)


def _write_robots(figures: Figures) -> None:
    curvature, poses = figures["curvature"], np.array(figures["poses"])
    lengths = figures.get("path_length_m")
    third = "heading rad" if curvature is not None else "z"
    extra = ["largest curvature 1/m"] if curvature is not None else []
    shown = table("robot", "end x", "end y", third, *extra, *(["way m"] if lengths else []))
    for k, name in enumerate(figures["robots"]):
        row = [f"{value:.4f}" for value in poses[k, -1]]
        row += [f"{np.abs(curvature[k]).max():.4f}"] if curvature is not None else []
        shown.add_row(name, *row, *([f"{lengths[name]:.4f}"] if lengths else []))
    write_table(shown)
    gap = figures.get("min_clearance_m")
    if gap is not None:
        write(f"Smallest clearance {gap:.4f} m.\n")


def _write_check(check: Figures) -> None:
    write_heading("Optimality check")
    write(f"Slopes that are left {check['stationarity']:.1e} (relative), limits and ends missed by "
          f"{check['constraints']:.1e}, prices of what is not used up {check['complementarity']:.1e}.")
    drift = check.get("drift", {})
    kept = [f"{name.replace('_', ' ')} {value:.1e}" for name, value in drift.items() if value is not None]
    if kept:
        write(f"What must stay constant along the plan drifts by: {', '.join(kept)} (relative).")
    identities = {"cost": "energy times duration less work is the cost", "coupling": "its slope in the coupling is the "
                  "disagreement", "end": "its slope in an end is the costate"}
    held = [f"{identities[name]} (to {value:.1e})" for name, value in check.get("identities", {}).items()
            if value is not None]
    if held:
        write(f"The cost keeps its identities: {', '.join(held)}.")
    bound = check.get("heading_bound")
    if bound:
        write(f"The headings alone cost at least {bound['bound']:.6g}.")
    write()


def _write_starts(figures: Figures) -> None:
    starts = figures.get("starts")
    if starts is None:
        return
    others = ("all to the same plan" if starts["distinct"] == 1 else
              f"to {starts['distinct']} plans, the dearest {100 * (starts['spread'] or 0.0):.1f}% above the cheapest")
    write(f"{starts['tried']} first guesses, {starts['converged']} of them led to a plan: {others}.\n")

