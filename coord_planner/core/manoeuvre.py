"""What is asked of the fleet, and from it an end for each robot."""

from __future__ import annotations

import math
from typing import Optional, Union

import attrs
import numpy as np

from ..errors import RefusedError, SettingsError
from . import outline
from .dubins import ArcPath, paths, shortest
from .fleet import Fleet, weakest
from .parameter import parameter
from .profile import SpeedProfile, speed_profile
from .settings import Settings
from .watch import margin

# Part of a machine's rates that a manoeuvre is laid out with; the rest is left for corrections.
_COMFORT = 0.7
# Radii tried for a way to an end, as multiples of the machine's smallest: the widest that is hardly longer wins.
_RADII = (6.0, 4.0, 3.0, 2.0, 1.5, 1.25, 1.1)
_LONGER = 1.12
_WIDER = 1.12  # a turn of equal radius is laid out this much wider than its tightest, to leave room for corrections
_SHORTEST_WAY = 0.01  # metres; a fleet that has less to drive is where it is to end
_SETTLE_LAGS = 5.0  # response lags after which a machine has reached what it was told, to a hundredth


@attrs.frozen
class EqualRadius:
    """Everyone turns by the same angle at the same radius, easing in and out of the turn."""

    angle_deg: float = parameter(90.0, "angle of the turn, left positive", "deg", minimum=-720.0, maximum=720.0)
    radius: float = parameter(5.0, "tightest radius of the turn", "m", above=0.0, maximum=1000.0)
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4
    )
    alignment: Optional[float] = parameter(
        None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )


@attrs.frozen
class ToEnds:
    """Named robots get an end pose or an end heading; the others copy their neighbours."""

    ends_deg: tuple[str, ...] = parameter(
        attrs.NOTHING, "an end for each named robot: 'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG'"
    )
    speed: float = parameter(1.0, "asked speed", "m/s", above=0.0, maximum=20.0)
    duration: float = parameter(
        0.0, "time for the manoeuvre; 0: worked out from the longest way", "s", minimum=0.0, maximum=600.0
    )
    end_speed: float = parameter(0.0, "speed at the end of the manoeuvre", "m/s", minimum=0.0, maximum=20.0)
    coupling: Optional[float] = parameter(
        None, "coupling for this manoeuvre instead of coupling.strength", minimum=0.0, maximum=1e4
    )
    alignment: Optional[float] = parameter(
        None, "alignment for this manoeuvre instead of coupling.alignment", "1/m^2", minimum=0.0, maximum=1e3
    )

    def ends(self) -> dict[str, End]:
        """The end of each named robot; SettingsError for an entry that cannot be read."""
        found: dict[str, End] = {}
        for entry in self.ends_deg:
            name, end = _read_end(entry)
            if name in found:
                raise SettingsError(f"{name!r} has two ends", key="ends_deg", allowed="one end a robot")
            found[name] = end
        return found


@attrs.frozen
class End:
    """Where one robot shall arrive: a pose, or a heading alone (x and y None). Radians, metres."""

    heading: float
    x: Optional[float] = None
    y: Optional[float] = None


Manoeuvre = Union[EqualRadius, ToEnds]
KINDS: dict[str, type] = {"equal_radius": EqualRadius, "to_ends": ToEnds}


@attrs.frozen(eq=False)
class Task:
    """A manoeuvre worked out for the poses in which it begins. N robots.

    Attributes:
        name: of the manoeuvre.
        ends: shape (N, 3), headings unwrapped; NaN where nothing is asked.
        speed: asked speed of the fleet, m/s. asked: of each robot, shape (N,): who has a shorter way drives slower.
        end_speed: m/s.
        arrival: seconds until the fleet is at its ends as far as commands go, a whole number of intervals.
        duration: seconds until the machines have settled there too, a whole number of intervals; in between
            the manoeuvre goes straight on at the end speed.
        ways: a guessed way for each robot.
        profile: how far along the longest way the fleet is at which of its own seconds; shorter ways in proportion.
        pacing: seconds of the manoeuvre and the seconds of the profile that they stand for, joined by straight lines.
        coupling, alignment: in force for this manoeuvre.
        max_curvature: tightest bend that the manoeuvre asks for, 1/m; inf when only the machines' limits count.
    """

    name: str
    ends: np.ndarray
    speed: float
    asked: np.ndarray
    end_speed: float
    arrival: float
    duration: float
    ways: tuple[ArcPath, ...]
    profile: SpeedProfile
    pacing: tuple[tuple[float, ...], tuple[float, ...]]
    coupling: float
    alignment: float
    max_curvature: float = math.inf

    def asked_speed(self, s: np.ndarray) -> np.ndarray:
        """Mean asked speed between seconds of the manoeuvre, shape (K,) -> (N, K - 1): speed up, hold, slow down."""
        along = self.profile.distance(self.profile_time(s))
        full = max(self.profile.speeds[1], 1e-9)
        return np.outer(self.asked, np.diff(along) / np.maximum(np.diff(s), 1e-9) / full)

    def slower(self, stretch: float, settings: Settings) -> Task:
        """The same task from its beginning in ``stretch`` times the time."""
        step = settings.horizon.interval
        arrival = step * math.ceil(self.arrival * stretch / step - 1e-9)
        return attrs.evolve(
            self, arrival=arrival, duration=arrival + self.duration - self.arrival,
            pacing=((0.0, arrival), (0.0, self.profile.duration)),
        )

    def profile_time(self, s: np.ndarray) -> np.ndarray:
        """Seconds of the profile at seconds of the manoeuvre; after arrival both run alike."""
        inside = np.interp(s, *self.pacing)
        return inside + np.maximum(np.asarray(s) - self.arrival, 0.0)

    def guess(self, times: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Guessed poses (N, K, 3), speeds (N, K) and curvatures (N, K) at seconds since the beginning."""
        scale = self.profile.duration / self.arrival
        moments = self.profile_time(times)
        along, speed = self.profile.distance(moments), self.profile.speed(moments) * scale
        longest = max(max(way.length for way in self.ways), 1e-9)
        parts = [way.length / longest for way in self.ways]
        poses = np.stack([way.sample(along * part) for way, part in zip(self.ways, parts)])
        curvatures = np.stack([_curvatures(way, along * part) for way, part in zip(self.ways, parts)])
        return poses, np.stack([speed * part for part in parts]), curvatures


def work_out(
    name: str, manoeuvre: Manoeuvre, fleet: Fleet, settings: Settings, poses: np.ndarray, speed_now: float,
    neighbours: np.ndarray,
) -> Task:
    """The task that a manoeuvre means from the poses at hand.

    Args:
        poses: shape (N, 3), headings unwrapped. speed_now: of the fleet, m/s.
        neighbours: hops from robot to robot in the neighbour graph, shape (N, N), inf where there is no way.

    Raises:
        RefusedError: it cannot be kept, with the figures and what to do.
    """
    _check_speed(manoeuvre, fleet, settings)
    _check_start(fleet, settings, poses)
    if isinstance(manoeuvre, EqualRadius):
        ways = _equal_ways(manoeuvre, fleet, settings, poses)
        ends = np.stack([way.end for way in ways])
        named = ends
        fixed, tightest = 0.0, 1.0 / manoeuvre.radius
    else:
        named = _named_ends(manoeuvre, fleet)
        ways, ends = _ways_to_ends(fleet, poses, named, neighbours)
        fixed, tightest = manoeuvre.duration, math.inf
        if fixed > 0.0:
            _check_duration(name, manoeuvre, fleet, settings, poses, named, speed_now)
    _check_ends(fleet, settings, named, manoeuvre.speed)
    return lay_out(
        name, fleet, settings, ends, ways, speed=manoeuvre.speed, end_speed=manoeuvre.end_speed,
        speed_now=speed_now, duration=fixed, coupling=manoeuvre.coupling, alignment=manoeuvre.alignment,
        max_curvature=tightest,
    )


def go_on(
    task: Task, fleet: Fleet, settings: Settings, poses: np.ndarray, neighbours: np.ndarray,
    left: tuple[Optional[ArcPath], ...],
) -> Task:
    """The rest of a task for a fleet that stands still part of the way; windings of the ends are kept.

    Args:
        left: what is left of each robot's way; None for one that stands off it and needs a new one. (A new one
            for everybody would send a robot that stands a finger's breadth past its end round a full circle.)
    """
    ways, ends = tuple(way for way in left if way is not None), task.ends
    if len(ways) < len(left):
        anew, wound = _ways_to_ends(fleet, poses, task.ends, neighbours, keep_winding=True)
        ways = tuple(new if old is None else old for old, new in zip(left, anew))
        ends = np.where(np.array([way is None for way in left])[:, None], wound, ends)
    return lay_out(
        task.name, fleet, settings, ends, ways, speed=task.speed, end_speed=task.end_speed, speed_now=0.0,
        duration=0.0, coupling=task.coupling, alignment=task.alignment, max_curvature=task.max_curvature,
    )


def lay_out(
    name: str, fleet: Fleet, settings: Settings, ends: np.ndarray, ways: tuple[ArcPath, ...], *, speed: float,
    end_speed: float, speed_now: float, duration: float, coupling: Optional[float], alignment: Optional[float],
    max_curvature: float = math.inf,
) -> Task:
    """Times and speeds for ways that are known; RefusedError when there is nothing to drive.

    A given duration stretches or squeezes the profile: it is then driven slower or faster than asked.
    """
    longest = max(way.length for way in ways)
    if longest < _SHORTEST_WAY:
        raise RefusedError(f"{name}: every robot is where it is to end already", "ask for something else or abandon it")
    profile = speed_profile(
        longest, speed_now, speed, end_speed,
        _COMFORT * weakest(fleet.limit("max_acceleration")), _COMFORT * weakest(fleet.limit("max_braking")),
    )
    step = settings.horizon.interval
    arrival = step * max(4, math.ceil((duration or profile.duration) / step - 1e-9))
    # Machines that answer late come to rest late; the end holds the whole state.
    slowest = float(np.max(np.maximum(fleet.response("speed_lag"), fleet.response("curvature_lag"))))
    settled = arrival + step * max(1, math.ceil(_SETTLE_LAGS * slowest / step - 1e-9))
    lengths = np.array([way.length for way in ways])
    asked = profile.speeds[1] * np.maximum(lengths / max(longest, 1e-9), 0.1)
    return Task(
        name, ends, speed, asked, end_speed, arrival, settled, ways, profile,
        ((0.0, arrival), (0.0, profile.duration)),
        settings.coupling.strength if coupling is None else coupling,
        settings.coupling.alignment if alignment is None else alignment,
        max_curvature,
    )


def eased_turn(angle: float, radius: float, rate_per_metre: float, start: np.ndarray, pieces: int = 16) -> ArcPath:
    """A turn that eases in and out: curvature rises to 1/radius at ``rate_per_metre``, holds, and falls again.

    Clothoids (Fresnel integrals, DLMF 7.2) in short arcs. A turn too short to reach the radius stays wider.
    """
    turn = abs(angle)
    peak = min(1.0 / radius, math.sqrt(turn * rate_per_metre))
    ramp = peak / rate_per_metre
    hold = turn / peak - ramp if peak > 0 else 0.0
    side = math.copysign(1.0, angle)
    rising = [(side * peak * (i + 0.5) / pieces, ramp / pieces) for i in range(pieces)]
    return ArcPath(_start(start), "eased", (*rising, (side * peak, hold), *rising[::-1]))


def _equal_ways(
    manoeuvre: EqualRadius, fleet: Fleet, settings: Settings, poses: np.ndarray
) -> tuple[ArcPath, ...]:
    for robot in fleet.robots:
        smallest = 1.0 / robot.limits.max_curvature
        if manoeuvre.radius < smallest - 1e-9:
            raise RefusedError(
                f"a radius of {manoeuvre.radius:g} m is {smallest - manoeuvre.radius:.2f} m tighter than "
                f"{robot.name} can turn (smallest radius {smallest:.2f} m)",
                f"ask for a radius of at least {_smallest_radius(fleet):.2f} m",
            )
    _check_bend(manoeuvre, fleet, settings)
    rate = _COMFORT * weakest(fleet.limit("max_curvature_rate")) / manoeuvre.speed
    angle = math.radians(manoeuvre.angle_deg)
    return tuple(eased_turn(angle, _WIDER * manoeuvre.radius, rate, pose) for pose in poses)


def _smallest_radius(fleet: Fleet) -> float:
    return 1.0 / weakest(fleet.limit("max_curvature"))


def _check_bend(manoeuvre: EqualRadius, fleet: Fleet, settings: Settings) -> None:
    """Turn rate and lateral acceleration at the asked speed and radius."""
    speed, radius = manoeuvre.speed, manoeuvre.radius
    for robot in fleet.robots:
        lateral = min(robot.limits.max_lateral_acceleration, settings.site_rules.max_lateral_acceleration)
        fastest = min(robot.limits.max_turn_rate * radius, math.sqrt(lateral * radius))
        if speed > fastest + 1e-9:
            raise RefusedError(
                f"at {speed:g} m/s a radius of {radius:g} m asks {robot.name} for {speed / radius:.2f} rad/s and "
                f"{speed**2 / radius:.2f} m/s^2 sideways; its limits allow {robot.limits.max_turn_rate:g} rad/s and "
                f"{lateral:g} m/s^2",
                f"ask for at most {fastest:.2f} m/s or for a wider radius",
            )


def _named_ends(manoeuvre: ToEnds, fleet: Fleet) -> np.ndarray:
    ends = np.full((len(fleet), 3), np.nan)
    for name, end in manoeuvre.ends().items():
        if name not in fleet.names:
            raise RefusedError(f"{name!r} has an end but is not in the fleet", "name one of " + ", ".join(fleet.names))
        position = (end.x, end.y) if end.x is not None and end.y is not None else (np.nan, np.nan)
        ends[fleet.index(name)] = [*position, end.heading]
    if np.isnan(ends).all():
        raise RefusedError("no robot has an end", "give at least one robot an end pose or an end heading")
    return ends


def _ways_to_ends(
    fleet: Fleet, poses: np.ndarray, ends: np.ndarray, neighbours: np.ndarray, keep_winding: bool = False
) -> tuple[tuple[ArcPath, ...], np.ndarray]:
    """A way for each robot, and the ends with their windings chosen: those of the shortest way."""
    wound = ends.copy()
    found: dict[int, ArcPath] = {}
    for k in map(int, np.flatnonzero(~np.isnan(ends[:, 2]))):
        turning = ends[k, 2] - poses[k, 2]
        if not keep_winding:
            turning = math.remainder(turning, 2 * math.pi)
        if np.isnan(ends[k, 0]):
            found[k] = _turn_only(fleet, k, poses[k], turning)
        else:
            found[k] = _way_to_pose(fleet, k, poses[k], ends[k], turning if keep_winding else None)
        wound[k, 2] = poses[k, 2] + (found[k].turning if not np.isnan(ends[k, 0]) else turning)
    leaders = list(found)
    for k in range(len(fleet)):
        if k not in found:
            leader = min(leaders, key=lambda j: float(neighbours[k, j]))
            joined = np.isfinite(neighbours[k, leader])
            segments = found[leader].segments if joined else ((0.0, found[leader].length),)
            found[k] = ArcPath(_start(poses[k]), "copied", segments)
    return tuple(found[k] for k in range(len(fleet))), wound


def _turn_only(fleet: Fleet, k: int, pose: np.ndarray, turning: float) -> ArcPath:
    limits = fleet.robots[k].limits
    rate = _COMFORT * limits.max_curvature_rate / limits.max_speed
    return eased_turn(turning, 2.0 / limits.max_curvature, rate, pose)


def _way_to_pose(fleet: Fleet, k: int, pose: np.ndarray, end: np.ndarray, turning: Optional[float]) -> ArcPath:
    """The widest way that is hardly longer than the shortest, with the asked winding where one is asked."""
    smallest = 1.0 / fleet.robots[k].limits.max_curvature
    start, goal = _start(pose), _start(end)

    def candidates(radius: float) -> list[ArcPath]:
        if turning is None:
            return [shortest(start, goal, radius)]
        return [path for path in paths(start, goal, radius) if abs(path.turning - turning) < 0.1]

    tightest = candidates(smallest * _RADII[-1])
    if not tightest:
        tightest = [shortest(start, goal, smallest * _RADII[-1])]
    best = min(tightest, key=lambda path: path.length)
    for multiple in _RADII:
        same = [
            path for path in candidates(smallest * multiple)
            if path.length <= _LONGER * best.length and abs(path.turning - best.turning) < 0.1
        ]
        if same:
            return min(same, key=lambda path: path.length)
    return best


def _start(pose: np.ndarray) -> tuple[float, float, float]:
    return float(pose[0]), float(pose[1]), float(pose[2])


def _curvatures(way: ArcPath, along: np.ndarray) -> np.ndarray:
    curvatures = np.array([curvature for curvature, _ in way.segments])
    ends = np.cumsum([length for _, length in way.segments])
    return curvatures[np.minimum(np.searchsorted(ends, along), len(curvatures) - 1)]


def _check_speed(manoeuvre: Manoeuvre, fleet: Fleet, settings: Settings) -> None:
    cap = settings.site_rules.max_speed
    for robot in fleet.robots:
        top = min(robot.limits.max_speed, cap)
        if manoeuvre.speed > top + 1e-9:
            raise RefusedError(
                f"{manoeuvre.speed:g} m/s is asked and {robot.name} may drive {top:g} m/s",
                f"ask for at most {min(weakest(fleet.limit('max_speed')), cap):g} m/s",
            )
    if manoeuvre.end_speed > manoeuvre.speed + 1e-9:
        raise RefusedError(
            f"{manoeuvre.end_speed:g} m/s is asked at the end and only {manoeuvre.speed:g} m/s on the way there",
            f"ask for an end speed of at most {manoeuvre.speed:g} m/s",
        )


def _check_duration(
    name: str, manoeuvre: ToEnds, fleet: Fleet, settings: Settings, poses: np.ndarray, ends: np.ndarray,
    speed_now: float,
) -> None:
    """No way is shorter than the Dubins path of the smallest radius, and none is driven faster than allowed."""
    for k in np.flatnonzero(~np.isnan(ends[:, 0])):
        limits = fleet.robots[k].limits
        way = shortest(_start(poses[k]), _start(ends[k]), 1.0 / limits.max_curvature).length
        top = min(limits.max_speed, settings.site_rules.max_speed)
        least = speed_profile(
            way, speed_now, top, manoeuvre.end_speed, limits.max_acceleration, limits.max_braking
        ).duration
        if manoeuvre.duration < least - 1e-9:
            raise RefusedError(
                f"{name}: {manoeuvre.duration:g} s are given, and even the shortest way of {fleet.names[k]} to its "
                f"end, {way:.2f} m at a radius of {1.0 / limits.max_curvature:.2f} m, takes {least:.1f} s at up to "
                f"{top:g} m/s",
                f"give at least {least:.1f} s and something for corrections, or 0 to have it worked out",
            )


def _check_start(fleet: Fleet, settings: Settings, poses: np.ndarray) -> None:
    _check_apart(fleet, settings, poses, np.arange(len(fleet)), "stand", "move them apart by hand before it begins")


def _check_ends(fleet: Fleet, settings: Settings, ends: np.ndarray, speed: float) -> None:
    """Ends keep the site's clearance and the plan's margin: whatever is nearer, no plan would end on."""
    placed = np.flatnonzero(~np.isnan(ends[:, 0]))
    kept = 2 * float(margin(fleet, settings, speed).max())
    _check_apart(fleet, settings, ends, placed, "would end", "move the ends apart", kept)


def _check_apart(
    fleet: Fleet, settings: Settings, poses: np.ndarray, which: np.ndarray, verb: str, remedy: str, kept: float = 0.0
) -> None:
    polygons = outline.outlines(fleet.corners()[which], poses[which])
    gap, (k, j) = outline.closest(polygons, outline.all_pairs(len(which)))
    allowed = settings.site_rules.min_clearance
    if gap < allowed + kept - 1e-6:
        first, second = fleet.names[which[k]], fleet.names[which[j]]
        beyond = f" and the planner's margin of {kept:.2f} m" if kept else ""
        raise RefusedError(
            f"{first} and {second} {verb} {gap:.2f} m apart, {allowed + kept - gap:.2f} m short of the site's "
            f"smallest clearance of {allowed:g} m{beyond}",
            remedy,
        )


def _read_end(entry: str) -> tuple[str, End]:
    words = entry.split()
    try:
        if len(words) == 5 and words[1] == "pose":
            x, y, heading = (float(word) for word in words[2:])
            return words[0], End(math.radians(_finite(heading)), _finite(x), _finite(y))
        if len(words) == 3 and words[1] == "heading":
            return words[0], End(math.radians(_finite(float(words[2]))))
    except ValueError:
        pass
    raise SettingsError(
        f"{entry!r} cannot be read", key="ends_deg",
        allowed="'NAME pose X Y HEADING_DEG' or 'NAME heading HEADING_DEG', finite numbers",
    )


def _finite(number: float) -> float:
    if not math.isfinite(number):
        raise ValueError(number)
    return number
