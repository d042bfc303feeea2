# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Neighbours from poses in real nodes: told on ~/neighbours_in_force, and not taken from messages as well."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

from hand import ACTIVATE, CONFIGURE, Hand
from std_msgs.msg import String

from coord_planner.ros import qos


def test_neighbours_come_from_the_poses_that_arrive(site: Any, hand: Hand) -> None:
    """The planner's own file says nothing of where the robots stand; 3 m apart, the nearest are joined."""
    file: Path = site.params("neighbours: {source: nearest, count: 1}")
    site.start("simulator_node", params=file)
    own = file.with_name("planner.yaml")
    text = re.sub(r"\{start_x: [^}]*\}", "{enabled: true}", file.read_text())
    own.write_text(re.sub(r"graph: \{[^}]*\}", "graph: {edges: []}", text))
    site.start("planner_node", params=own)
    told: list[dict[str, Any]] = []
    hand.node.create_subscription(
        String, "planner/neighbours_in_force", lambda message: told.append(json.loads(message.data)), qos.NEWEST_LATCHED
    )
    assert hand.transition(CONFIGURE) and hand.transition(ACTIVATE)
    hand.until_heard()
    hand.until(lambda: bool(told and told[-1]["edges"]), what="neighbours from the poses")
    assert told[-1]["edges"] == [["left", "middle", 1.0], ["middle", "right", 1.0]]
    sender = hand.node.create_publisher(String, "neighbours", qos.NEWEST_LATCHED)
    sender.publish(String(data=json.dumps({"version": 1, "stamp": 1e9, "edges": [["left", "right", 1.0]]})))
    hand.begin("nudge", to=0.1)
    hand.until_state("ended", "idle")
    assert told[-1]["edges"] == [["left", "middle", 1.0], ["middle", "right", 1.0]]
