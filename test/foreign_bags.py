# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Bags as other software makes them, written with rosbags directly; invented robots on simple ways."""

import math

import numpy as np
from rosbags.rosbag2 import StoragePlugin, Writer

from coord_planner.record import bag_messages as messages

EPOCH = 1_700_000_000_000_000_000  # nanoseconds: an ordinary wall clock


def corner(times, *, speed=1.0, radius=4.0, begins=5.0, ramp=1.0, angle=math.pi / 2):
    """Straight on, then a left turn whose curvature grows and falls linearly within ``ramp`` seconds.

    Returns poses (S, 3), speeds and turn rates (S,).
    """
    hold = angle * radius / speed - ramp
    fine = np.arange(0.0, times[-1] + 0.002, 0.001)
    knots = begins + np.array([0.0, ramp, ramp + hold, 2 * ramp + hold])
    rate = speed / radius * np.interp(fine, knots, [0.0, 1.0, 1.0, 0.0])
    heading = np.concatenate([[0.0], np.cumsum(0.5 * (rate[1:] + rate[:-1]) * 0.001)])
    way = [np.concatenate([[0.0], np.cumsum(0.5 * (f[1:] + f[:-1]) * speed * 0.001)])
           for f in (np.cos(heading), np.sin(heading))]
    poses = np.column_stack([np.interp(times, fine, column) for column in (*way, heading)])
    return poses, np.full(len(times), speed), np.interp(times, fine, rate)


class ForeignBag:
    """Collects messages and writes them in the order of receipt."""

    def __init__(self):
        self.entries = []

    def add(self, received, topic, message):
        """``received`` in seconds since EPOCH; ``message`` one of bag_messages, or (type, bytes)."""
        self.entries.append((EPOCH + round(received * 1e9), topic, message))

    def poses(self, topic, times, poses, *, kind="odometry", frame="map", late=0.01, offset=0.0, speeds=None,
              rates=None):
        """Poses with stamps ``times`` (plus ``offset``, another clock) that are received ``late``."""
        late = np.broadcast_to(late, len(times))
        for n, (when, pose) in enumerate(zip(times, poses)):
            head = messages.header(frame, EPOCH + round((when + offset) * 1e9))
            speed = 0.0 if speeds is None else float(speeds[n])
            curvature = 0.0 if rates is None else float(rates[n]) / speed
            if kind == "odometry":
                made = messages.odometry(head, "base", pose, speed, curvature)
            else:
                made = messages.store().types["geometry_msgs/msg/PoseStamped"](header=head, pose=messages.pose(*pose))
            self.add(when + late[n], topic, made)

    def transforms(self, parent, child, times, poses, *, topic="/tf"):
        types = messages.store().types
        for when, pose in zip(times, poses):
            made = messages.pose(*pose)
            place = types["geometry_msgs/msg/Vector3"](x=made.position.x, y=made.position.y, z=0.0)
            one = types["geometry_msgs/msg/TransformStamped"](
                header=messages.header(parent, EPOCH + round(when * 1e9)), child_frame_id=child,
                transform=types["geometry_msgs/msg/Transform"](translation=place, rotation=made.orientation))
            self.add(when, topic, types["tf2_msgs/msg/TFMessage"](transforms=[one]))

    def write(self, folder, plugin="mcap"):
        storage = {"mcap": StoragePlugin.MCAP, "sqlite3": StoragePlugin.SQLITE3}[plugin]
        with Writer(folder, version=9, storage_plugin=storage) as writer:
            connections = {}
            for nanoseconds, topic, message in sorted(self.entries, key=lambda entry: entry[0]):
                raw = isinstance(message, tuple)
                if topic not in connections and raw:
                    connections[topic] = writer.add_connection(topic, message[0], msgdef="", rihs01="unknown")
                elif topic not in connections:
                    connections[topic] = writer.add_connection(topic, message.__msgtype__, typestore=messages.store())
                writer.write(connections[topic], nanoseconds, message[1] if raw else messages.packed(message))
        return folder
