# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The line turns as one about a pivot, easing in and out, each robot on its own radius.

A line abreast that turns as a rigid body has one turn rate; robot k, d_k further from the pivot than the innermost,
drives at v_k = v + omega d_k, so its curvature is kappa / (1 + kappa d_k) of the innermost's kappa (kinematics of a
rigid body in the plane, common practice). The turn is laid out for the innermost; the others' ways are parallel curves.
"""

from __future__ import annotations

import math
from typing import Optional

import attrs
import numpy as np
from scipy.optimize import brentq

from ...errors import RefusedError
from .. import se2
from ..dubins import ArcPath
from ..fleet import weakest
from .checks import check_speed
from .driving import COMFORT
from .kinds import Wheel
from .line import Line, line_of
from .scene import Laid, Scene
from .ways import as_start, joined, preceded, straightened

_AS_ONE = 0.03  # 1/m by which a bend may differ from that of a line that turns as one
_LEAST_SPEED = 0.1  # m/s
_PIECES = 16  # short arcs of an easing
_RESERVE = 0.9  # part of a limit that is asked for; the rest is left for corrections
_SLOWEST = 0.1  # part of the asked speed below which a wheel turn is not slowed to fit
_ROUNDS = 30  # bisections


@attrs.frozen(eq=False)
class _Turn:
    """A wheel turn of the innermost robot: curvatures (1/m) and lengths (m) of its arcs, and the outermost's speed."""

    curvatures: np.ndarray
    lengths: np.ndarray
    speed: float


def lay(name: str, wanted: Wheel, scene: Scene) -> Laid:
    """Parallel curves about the pivot; RefusedError with the missing metres where it cannot be turned about.

    A line that is wheeling already comes out of that turn as one first; the angle counts from where it began.
    """
    angle, out = math.radians(wanted.angle_deg), _out_of_wheeling(scene)
    if out is None:
        scene, first = straightened(scene)
        return preceded(_laid(name, wanted, scene, angle), first)
    turned = attrs.evolve(scene, poses=np.array([way.end for way in out.ways]), bends=np.zeros(len(out.ways)))
    after = _laid(name, wanted, turned, angle - out.ways[0].turning)
    assert after.marks is not None
    marks = np.concatenate([out.marks, out.marks[:, -1:] + after.marks[:, 1:]], axis=1)
    return attrs.evolve(after, ways=tuple(map(joined, out.ways, after.ways)), marks=marks)


@attrs.frozen(eq=False)
class _Out:
    """How a line comes out of a wheel turn: a way for each robot, and metres on them that all pass together."""

    ways: tuple[ArcPath, ...]
    marks: np.ndarray


def _out_of_wheeling(scene: Scene) -> Optional[_Out]:
    """Parallel curves on which the line straightens; None where it does not turn as one."""
    if not scene.turning:
        return None
    try:
        line = line_of("", scene)
    except RefusedError:
        return None
    inner = int(np.argmax(np.abs(scene.bends)))
    tightest, side = abs(float(scene.bends[inner])), math.copysign(1.0, float(scene.bends[inner]))
    further = side * (line.across[inner] - line.across)
    as_one = side * tightest / (1 + tightest * np.maximum(further, 0.0))
    if further.min() < -line.tolerance or np.abs(scene.bends - as_one).max() > _AS_ONE:
        return None
    further = np.maximum(further, 0.0)
    middles, lengths = _ramp(tightest, max(scene.speed_now, _LEAST_SPEED), further, scene, True)
    turn = _Turn(middles[::-1], lengths[::-1], scene.speed_now)
    return _Out(*_ways(scene.poses, turn, further, side, 0.0))


def _laid(name: str, wanted: Wheel, scene: Scene, angle: float) -> Laid:
    line = line_of(name, scene)
    side = math.copysign(1.0, angle)
    radii, ahead = _radii(name, wanted, scene, line, angle)
    moving = scene.speed_now > 0.0 or wanted.end_speed > 0.0 or ahead > _PIECES * 0.01
    turn = _fastest(name, abs(angle), radii, wanted.speed, scene, moving)
    check_speed(wanted.end_speed, wanted.end_speed, scene.fleet, scene.settings)
    _check_slowest(name, turn, radii - radii.min(), scene)
    ways, marks = _ways(scene.poses, turn, radii, side, ahead)
    return Laid(
        _ends(scene.poses, line, angle, radii, side, ahead), ways, speed=turn.speed, marks=marks, turn_rates=True,
        note=_note(scene, turn, radii),
    )


def _radii(name: str, wanted: Wheel, scene: Scene, line: Line, angle: float) -> tuple[np.ndarray, float]:
    """Distance of each robot from the pivot across the line, shape (N,), and how far ahead of the line it lies, m."""
    about, fleet, side = wanted.about(), scene.fleet, math.copysign(1.0, angle)
    across = side * line.across  # to the inner side
    inner = int(np.argmax(across))
    if about is not None and about.point is not None:
        ahead, pivot = line.place(about.point)
        if ahead < -line.tolerance:
            raise RefusedError(
                f"{name}: the pivot lies {-ahead:.2f} m behind the line", "choose a pivot on the line or ahead of it"
            )
        radii = side * pivot - across
    elif about is not None:
        if about.beside != fleet.names[inner]:
            raise RefusedError(
                f"{name}: the pivot is to lie beside {about.beside}, and the innermost robot of this turn is "
                f"{fleet.names[inner]}", f"name {fleet.names[inner]}, or turn to the other side",
            )
        ahead, radii = 0.0, across[inner] + about.distance - across
    else:
        ahead, radii = 0.0, across[inner] - across
        moving = scene.speed_now > 0.0 or wanted.end_speed > 0.0
        radii = radii + _least(abs(angle), radii, wanted.speed, scene, moving)
    smallest = 1.0 / fleet.robots[inner].limits.max_curvature
    if abs(radii.min()) < 1e-6:
        raise RefusedError(
            f"{name}: {fleet.names[inner]} is to turn on the spot; it is told speed and curvature, its smallest "
            f"radius is {smallest:.2f} m", f"choose a pivot more than {smallest:.2f} m beside it",
        )
    if radii.min() < 0.0:
        outside = [robot for robot, radius in zip(fleet.names, radii) if radius <= 0.0]
        raise RefusedError(
            f"{name}: the pivot lies {-radii.min():.2f} m on the outer side of {', '.join(outside)}, who "
            f"would have to drive backwards round it",
            f"move it at least {smallest - radii.min():.2f} m inwards, {smallest:.2f} m and more beside "
            f"{fleet.names[inner]}",
        )
    return radii, max(ahead, 0.0)


def _fastest(name: str, angle: float, radii: np.ndarray, asked: float, scene: Scene, moving: bool) -> _Turn:
    """The turn at the highest speed of the outermost, at most the asked one, that everyone's limits hold."""
    slow, fast = _SLOWEST * asked, asked
    best = _turn_at(slow, angle, radii, scene, moving)
    if best is None:
        missing = _missing(angle, radii, slow, scene, moving)
        inner = scene.fleet.names[int(np.argmin(radii))]
        smallest = weakest(1.0 / scene.fleet.limit("max_curvature"))
        raise RefusedError(
            f"{name}: the pivot lies {radii.min():.2f} m from {inner}, {missing:.2f} m nearer than the group can turn "
            f"about even at {slow:.2f} m/s (smallest radius {smallest:.2f} m, and room to ease in and out)",
            f"choose a pivot at least {radii.min() + missing:.2f} m beside {inner}",
        )
    quickest = _turn_at(fast, angle, radii, scene, moving)
    if quickest is not None:
        return quickest
    for _ in range(_ROUNDS):
        middle = (slow + fast) / 2
        found = _turn_at(middle, angle, radii, scene, moving)
        slow, fast, best = (middle, fast, found) if found is not None else (slow, middle, best)
    return best


def _turn_at(speed: float, angle: float, radii: np.ndarray, scene: Scene, moving: bool) -> Optional[_Turn]:
    """The eased turn of the innermost that takes everyone from start to end; None where a limit stands in the way."""
    inner, further = float(radii.min()), radii - radii.min()
    chord = 2.0 * inner * math.sin(angle / 2)

    def beside(tightest: float) -> float:
        turn = _eased(tightest, speed, angle, further, scene, moving)
        return math.inf if turn is None else _reach(turn, angle) - chord

    tried = np.geomspace(0.4, 4.0, 25) / inner
    off = np.array([beside(each) for each in tried])
    for k in np.flatnonzero((off[:-1] * off[1:] <= 0) & np.isfinite(off[:-1] + off[1:])):
        turn = _eased(float(brentq(beside, tried[k], tried[k + 1])), speed, angle, further, scene, moving)
        if turn is not None and _held(turn, further, scene):
            return turn
    return None


def _eased(
    tightest: float, speed: float, angle: float, further: np.ndarray, scene: Scene, moving: bool
) -> Optional[_Turn]:
    """Curvature rises to ``tightest``, holds, and falls; None where the angle is too small to reach it.

    Steering binds: d kappa / dt is largest for everybody where the turn begins. So does the braking of the innermost
    where the group comes along at full speed: d/dt of v / (1 + kappa D) is -v D kappa' / (1 + kappa D)^2.
    """
    middles, lengths = _ramp(tightest, speed, further, scene, moving)
    held = (angle - 2 * float(np.dot(middles, lengths))) / tightest
    if held < 0.0:
        return None
    return _Turn(
        np.concatenate([middles, [tightest], middles[::-1]]), np.concatenate([lengths, [held], lengths[::-1]]), speed
    )


def _ramp(
    tightest: float, speed: float, further: np.ndarray, scene: Scene, moving: bool
) -> tuple[np.ndarray, np.ndarray]:
    """Curvatures and lengths of the innermost's arcs in which it comes into a bend."""
    width, fleet = float(further.max()), scene.fleet
    middles = tightest * (np.arange(_PIECES) + 0.5) / _PIECES
    rate = np.full(_PIECES, COMFORT * weakest(fleet.limit("max_curvature_rate")) / speed)
    if moving and width > 0.0:
        brake = COMFORT * min(weakest(fleet.limit("max_braking")), weakest(fleet.limit("max_acceleration")))
        rate = np.minimum(rate, brake * (1 + middles * width) ** 2 / (speed**2 * width))
    return middles, tightest / _PIECES / rate / (1 + middles * width)


def _reach(turn: _Turn, angle: float) -> float:
    """How far the innermost comes in the direction half way between its headings; a symmetric turn has no other."""
    turning = turn.curvatures * turn.lengths
    middle = np.cumsum(turning) - turning / 2 - angle / 2
    return float(np.sum(turn.lengths * np.asarray(se2.sinc(turning / 2)) * np.cos(middle)))


def _held(turn: _Turn, further: np.ndarray, scene: Scene) -> bool:
    """Whether everyone's limits hold where the turn is tightest, and at the outermost's speed before and after."""
    limit, rules = scene.fleet.limit, scene.settings.site_rules
    tightest = float(turn.curvatures.max())
    stretch = 1 + tightest * further
    speeds = turn.speed * stretch / stretch.max()
    rate = tightest * turn.speed / stretch.max()
    top = np.minimum(limit("max_speed"), rules.max_speed)
    lateral = np.minimum(limit("max_lateral_acceleration"), rules.max_lateral_acceleration)
    return bool(
        (tightest / stretch <= _RESERVE * limit("max_curvature")).all() and (speeds <= _RESERVE * top).all()
        and (rate <= _RESERVE * limit("max_turn_rate")).all() and (rate * speeds <= _RESERVE * lateral).all()
    )


def _missing(angle: float, radii: np.ndarray, speed: float, scene: Scene, moving: bool) -> float:
    return max(_least(angle, radii - radii.min(), speed, scene, moving) - float(radii.min()), 0.0)


def _least(angle: float, further: np.ndarray, speed: float, scene: Scene, moving: bool) -> float:
    """The smallest radius of the innermost at which a wheel turn is possible at a speed of the outermost, metres."""
    smallest = 1.0 / weakest(scene.fleet.limit("max_curvature"))
    wide = smallest
    while _turn_at(speed, angle, further + wide, scene, moving) is None:
        wide *= 1.5
        if wide > 1e3:
            raise RefusedError(
                f"no pivot within 1 km allows a turn at {speed:g} m/s", "ask for a lower speed or a larger angle"
            )
    tight = wide / 1.5
    for _ in range(_ROUNDS // 2):
        middle = (tight + wide) / 2
        tight, wide = (tight, middle) if _turn_at(speed, angle, further + middle, scene, moving) else (middle, wide)
    return wide


def _ways(
    poses: np.ndarray, turn: _Turn, radii: np.ndarray, side: float, ahead: float
) -> tuple[tuple[ArcPath, ...], np.ndarray]:
    further = radii - radii.min()
    stretch = 1 + np.outer(further, turn.curvatures)
    curvatures, lengths = side * turn.curvatures / stretch, turn.lengths * stretch
    curvatures = np.concatenate([np.zeros((len(radii), 1)), curvatures], axis=1)
    lengths = np.concatenate([np.full((len(radii), 1), ahead), lengths], axis=1)
    ways = tuple(
        ArcPath(as_start(pose), "wheel", tuple(zip(map(float, bends), map(float, metres))))
        for pose, bends, metres in zip(poses, curvatures, lengths)
    )
    return ways, np.concatenate([np.zeros((len(radii), 1)), np.cumsum(lengths, axis=1)], axis=1)


def _ends(
    poses: np.ndarray, line: Line, angle: float, radii: np.ndarray, side: float, ahead: float
) -> np.ndarray:
    """The line turned about the pivot: where each robot's place on it comes to lie, shape (N, 3)."""
    pivot = line.point(ahead, side * float(radii[0]) + float(line.across[0]))
    heading = line.heading + angle
    out = np.array([math.sin(heading), -math.cos(heading)]) * side
    headings = poses[:, 2] + se2.wrap(line.heading - poses[:, 2]) + angle
    return np.column_stack([pivot + radii[:, None] * out, headings])


def _check_slowest(name: str, turn: _Turn, further: np.ndarray, scene: Scene) -> None:
    """A machine that cannot drive slowly would not keep with the group on an inner radius when that is slowed."""
    stretch = 1 + float(turn.curvatures.max()) * further
    speeds = turn.speed * stretch / stretch.max() * scene.settings.progress.slowest
    for robot, speed in zip(scene.fleet.robots, speeds):
        if robot.limits.min_speed > speed + 1e-9:
            raise RefusedError(
                f"{name}: on its radius {robot.name} may have to drive as slowly as {speed:.2f} m/s, "
                f"{robot.limits.min_speed - speed:.2f} m/s below its min_speed of {robot.limits.min_speed:g} m/s",
                "choose a pivot further out",
            )


def _note(scene: Scene, turn: _Turn, radii: np.ndarray) -> str:
    inner, outer = (scene.fleet.names[int(pick(radii))] for pick in (np.argmin, np.argmax))
    slow = turn.speed * float(radii.min() / radii.max())
    return f"{outer} drives {turn.speed:.2f} m/s and {inner}, {radii.min():.2f} m from the pivot, {slow:.2f} m/s"
