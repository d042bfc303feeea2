"""Decisions and commands as ROS messages; conversions only, no node."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence

import numpy as np
import shapely
from builtin_interfaces.msg import Time
from geometry_msgs.msg import Point, Pose, PoseStamped, Quaternion, Twist, TwistStamped
from nav_msgs.msg import Path
from std_msgs.msg import ColorRGBA, Header
from visualization_msgs.msg import Marker, MarkerArray

from ..core import outline
from ..core.fleet import Fleet
from ..core.graph import NeighbourGraph
from ..core.messages import Caution, Command, Decision

_GREY, _BLUE, _RED = (0.6, 0.6, 0.6, 0.8), (0.1, 0.4, 0.8, 1.0), (0.8, 0.1, 0.1, 1.0)
_LINE_WIDTH = 0.05  # metres


def time_message(seconds: float) -> Time:
    """Seconds as builtin_interfaces/Time, rounded to the nanosecond."""
    whole = math.floor(seconds)
    nanoseconds = round((seconds - whole) * 1e9)
    carried = nanoseconds >= 1_000_000_000
    return Time(sec=whole + carried, nanosec=0 if carried else nanoseconds)


def header(frame: str, seconds: float) -> Header:
    """A header in a frame at a time in seconds."""
    return Header(frame_id=frame, stamp=time_message(seconds))


def pose_message(x: float, y: float, heading: float) -> Pose:
    """A planar pose: metres, radians anticlockwise."""
    half = 0.5 * float(heading)
    return Pose(position=Point(x=float(x), y=float(y)), orientation=Quaternion(z=math.sin(half), w=math.cos(half)))


def twist(command: Command) -> Twist:
    """linear.x = speed, angular.z = speed times curvature."""
    message = Twist()
    message.linear.x, message.angular.z = float(command.speed), float(command.turn_rate)
    return message


def twist_stamped(command: Command, seconds: float) -> TwistStamped:
    """A stamped twist in the robot's own frame, which the robot knows: frame_id stays empty."""
    return TwistStamped(header=header("", seconds), twist=twist(command))


def steering_angle(curvature: float, wheelbase: float) -> float:
    """Angle of the steered wheel, radians (kinematic bicycle model, common practice)."""
    return math.atan(wheelbase * curvature)


def path_message(frame: str, times: np.ndarray, poses: np.ndarray) -> Path:
    """One robot's plan; times of shape (M,), poses of shape (M, 3)."""
    message = Path(header=header(frame, float(times[0])))
    message.poses = [
        PoseStamped(header=header(frame, float(when)), pose=pose_message(*pose)) for when, pose in zip(times, poses)
    ]
    return message


def cautions_text(cautions: Sequence[Caution]) -> str:
    """Cautions as a JSON list of objects with code, robot, level and text."""
    return json.dumps([
        {"code": caution.code, "robot": caution.subject, "level": int(caution.level), "text": caution.text}
        for caution in cautions
    ])


def fleet_markers(frame: str, fleet: Fleet, graph: NeighbourGraph, decision: Decision,
                  min_clearance: float) -> MarkerArray:
    """Edges with what is copied along them, footprints, the smallest clearance now and the warnings, for a viewer."""
    heard = np.isfinite(decision.poses).all(axis=1) if len(decision.poses) else np.zeros(len(fleet), dtype=bool)
    canvas = _Canvas(header(frame, decision.time))
    canvas.clear()
    if heard.any():
        poses = np.where(heard[:, None], decision.poses, 0.0)
        _draw_edges(canvas, graph, poses, heard)
        _draw_copying(canvas, graph, poses, heard, decision)
        _draw_footprints(canvas, fleet, poses, heard, decision)
        _draw_clearance(canvas, fleet, poses, heard, min_clearance)
        _draw_warnings(canvas, fleet, poses, heard, decision.warnings)
    return MarkerArray(markers=canvas.markers)


class _Canvas:
    """Collects markers in one frame at one time; each gets a number of its own."""

    def __init__(self, at: Header) -> None:
        self._header, self.markers = at, list[Marker]()

    def clear(self) -> None:
        """Take away what was drawn before: robots may have gone, warnings ended."""
        self.markers.append(Marker(header=self._header, action=Marker.DELETEALL))

    def line(self, group: str, points: Iterable[Sequence[float]], colour: tuple[float, ...], kind: int) -> None:
        """A chain of points (LINE_STRIP) or separate pieces of two points each (LINE_LIST); metres."""
        marker = self._marker(group, colour, kind)
        marker.scale.x = _LINE_WIDTH
        marker.points = [Point(x=float(x), y=float(y)) for x, y in points]
        self.markers.append(marker)

    def text(self, group: str, where: Sequence[float], words: str, colour: tuple[float, ...]) -> None:
        """Words that face the viewer, 0.4 m high, a metre above the ground."""
        marker = self._marker(group, colour, Marker.TEXT_VIEW_FACING)
        marker.scale.z, marker.text = 0.4, words
        marker.pose.position.x, marker.pose.position.y, marker.pose.position.z = float(where[0]), float(where[1]), 1.0
        self.markers.append(marker)

    def _marker(self, group: str, colour: tuple[float, ...], kind: int) -> Marker:
        red, green, blue, alpha = colour
        marker = Marker(header=self._header, ns=group, id=len(self.markers), type=kind, action=Marker.ADD)
        marker.pose.orientation.w = 1.0
        marker.color = ColorRGBA(r=red, g=green, b=blue, a=alpha)
        return marker


def _draw_edges(canvas: _Canvas, graph: NeighbourGraph, poses: np.ndarray, heard: np.ndarray) -> None:
    seen = [(k, j) for k, j in graph.index_edges() if heard[k] and heard[j]]
    if seen:
        canvas.line("edges", poses[np.array(seen).ravel(), :2].tolist(), _GREY, Marker.LINE_LIST)


def _draw_copying(
    canvas: _Canvas, graph: NeighbourGraph, poses: np.ndarray, heard: np.ndarray, decision: Decision
) -> None:
    """How far the headings of neighbours are apart, and the coupling in force, while a manoeuvre is in hand."""
    if not decision.manoeuvre:
        return
    for k, j in graph.index_edges():
        if heard[k] and heard[j]:
            apart = abs(math.degrees(math.remainder(poses[k, 2] - poses[j, 2], 2 * math.pi)))
            canvas.text("copying", poses[[k, j], :2].mean(axis=0).tolist(), f"{apart:.0f} deg", _GREY)
    beside = poses[heard, :2].max(axis=0) + 1.0
    canvas.text("copying", beside.tolist(), f"coupling {decision.coupling:g}", _GREY)


def _draw_footprints(canvas: _Canvas, fleet: Fleet, poses: np.ndarray, heard: np.ndarray, decision: Decision) -> None:
    troubled = {name for caution in decision.warnings for name in caution.subject.split(" and ")}
    shapes = outline.outlines(fleet.corners(), poses)
    for name, shape, known in zip(fleet.names, shapes, heard):
        if known:
            colour = _RED if name in troubled else _BLUE
            canvas.line("footprints", list(shape.exterior.coords), colour, Marker.LINE_STRIP)


def _draw_clearance(canvas: _Canvas, fleet: Fleet, poses: np.ndarray, heard: np.ndarray, least: float) -> None:
    shapes = outline.outlines(fleet.corners(), poses)
    pairs = np.array([pair for pair in outline.all_pairs(len(fleet)) if heard[pair].all()], dtype=int).reshape(-1, 2)
    distance, (first, second) = outline.closest(shapes, pairs)
    if first >= 0:
        ends = shapely.get_coordinates(shapely.shortest_line(shapes[first], shapes[second]))
        colour = _RED if distance < least else _GREY
        canvas.line("clearance", ends, colour, Marker.LINE_STRIP)
        canvas.text("clearance", ends.mean(axis=0).tolist(), f"{distance:.2f} m", colour)


def _draw_warnings(canvas: _Canvas, fleet: Fleet, poses: np.ndarray, heard: np.ndarray,
                   cautions: Sequence[Caution]) -> None:
    middle = poses[heard, :2].mean(axis=0)
    for caution in cautions:
        subject = caution.subject.split(" and ")[0]
        known = subject in fleet.names and heard[fleet.index(subject)]
        where = poses[fleet.index(subject), :2] if known else middle
        canvas.text("warnings", where.tolist(), caution.code, _RED)
