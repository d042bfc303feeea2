# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A real recording of wheeled vehicles that turn: aircraft taxiing, about one position a second.

The positions ship with PyPI's ``traffic`` 2.13 (MIT), as samples/onground/zurich_airport.json.gz. They come from a
network of volunteers' receivers, which asks that its data are used for research and not for profit. They are read
where ``make unit`` puts the package, put into a bag in a temporary folder, and never copied into the project.
"""

import gzip
import json
import math
import sys
import zipfile
from pathlib import Path

import numpy as np
import pytest
from foreign_bags import ForeignBag

from coord_planner.record.review import review

PACKAGE = Path(sys.prefix) / "test_data" / "traffic-2.13-py3-none-any.whl"
SAMPLE = "traffic/data/samples/onground/zurich_airport.json.gz"
EARTH = 6_371_000.0  # metres, mean radius


@pytest.fixture(scope="module")
def tracks():
    """Times (s) and positions (m, east and north) on the ground, by aircraft."""
    if not PACKAGE.exists():
        pytest.skip(f"needs {PACKAGE.name} in {PACKAGE.parent}; `make unit` downloads it")
    with zipfile.ZipFile(PACKAGE) as package:
        rows = json.loads(gzip.decompress(package.read(SAMPLE)))
    found = {}
    for row in rows:
        if row["onground"] and row["latitude"] is not None:
            found.setdefault(row["icao24"], set()).add((row["timestamp"] / 1000.0, row["longitude"], row["latitude"]))
    first = min(min(track) for track in found.values())
    return {name: _metres(np.array(sorted(track)), first) for name, track in found.items()}


def _metres(track, first):
    east = EARTH * math.cos(math.radians(47.46)) * np.radians(track[:, 1] - 8.55)
    return np.column_stack([track[:, 0] - first[0], east, EARTH * np.radians(track[:, 2] - 47.46)])


def fresh(track):
    """Part of the seconds that brought a new position."""
    moved = np.any(np.diff(track[:, 1:], axis=0) != 0.0, axis=1)
    return moved.sum() / max(track[-1, 0] - track[0, 0], 1.0)


@pytest.fixture(scope="module")
def reviewed(tracks, tmp_path_factory):
    bag = ForeignBag()
    for name, track in tracks.items():
        poses = np.column_stack([track[:, 1:], np.zeros(len(track))])  # no heading was recorded
        bag.poses(f"/aircraft_{name}/position", track[:, 0], poses, kind="pose")
    return review(bag.write(tmp_path_factory.mktemp("airport") / "bag"))


def test_every_aircraft_is_followed_and_what_was_done_is_stated(tracks, reviewed):
    robots = reviewed.figures["robots"]
    assert set(robots) == {f"aircraft_{name}" for name, track in tracks.items()}
    assert reviewed.figures["messages_read"] == sum(len(track) for track in tracks.values())
    for robot in robots.values():
        assert robot["headings_from"] == "path" and "parabolas over" in robot["motion"]
    assert sum(robot["stale_poses"] for robot in robots.values()) > 1000, "repeated positions are no positions"
    assert any("repeat the one before" in robot["motion"] for robot in robots.values())
    assert any("irregularly" in robot["motion"] for robot in robots.values())


def test_an_aircraft_with_a_fresh_position_every_second_moves_as_aircraft_do(tracks, reviewed):
    """Radius at the tightest 35 to 60 m, lateral acceleration at most about 1 m/s^2 (shared checks, section 7)."""
    robots = [robot for robot in reviewed.record.robots
              if fresh(tracks[robot.name.removeprefix("aircraft_")]) > 0.9 and robot.motion.position_sd > 0.1]
    assert robots
    for robot in robots:
        motion = robot.motion
        taxiing = (motion.speeds > 2.0) & (motion.speeds < 15.0) & np.isfinite(motion.rates)
        assert 35.0 < 1.0 / np.abs(motion.curvatures[taxiing]).max() < 60.0
        assert 0.3 < np.abs(motion.speeds * motion.rates)[taxiing].max() < 1.2
        assert taxiing.sum() > 200


def test_turns_of_taxiing_aircraft_are_physical(tracks, reviewed):
    good = {robot.name for robot in reviewed.record.robots
            if fresh(tracks[robot.name.removeprefix("aircraft_")]) > 0.9 and robot.motion.position_sd > 0.1}
    changes = [abs(turn["heading_change_rad"][name]) for turn in reviewed.figures["turns"] for name in turn["robots"]
               if name in good]
    assert len(changes) >= 3, "a way from a runway to a stand has several turns"
    assert max(changes) < math.pi, "taxiways turn by less than half a circle at a time"
    assert any(math.radians(60) < change < math.radians(120) for change in changes), "and some by about a right angle"
