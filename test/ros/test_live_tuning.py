# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Tuning while the fleet turns: the README's worked example, over real DDS, seen on /diagnostics and in the markers."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from hand import ACTIVATE, CONFIGURE, Hand

from coord_planner.ros import qos

WEAK, STRONG = 0.05, 50.0


@pytest.fixture(scope="module")
def planner(site: Any, hand: Hand) -> None:
    file: Path = site.params()
    text = file.read_text().replace("names: [corner_left, corner_right, nudge]", "names: [led, further]")
    text += "" if text.endswith("\n") else "\n"
    led = "".join(f'      {name}: {{kind: to_ends, ends_deg: ["left heading {heading}"], speed: 0.3}}\n'
                  for name, heading in (("led", 60), ("further", 120)))
    kept = [line for line in text.splitlines(keepends=True) if not line.strip().startswith(("corner_", "nudge:"))]
    text = "".join(kept).replace("    simulation:", led + "    simulation:")
    text = text.replace("strength: 1.0", f"strength: {WEAK}")
    own = file.with_name("led.yaml")
    own.write_text(text)
    site.start("simulator_node", params=own)
    site.start("planner_node", params=own)
    assert hand.transition(CONFIGURE) and hand.transition(ACTIVATE)
    hand.until_heard()


def coupling(hand: Hand) -> dict[str, str]:
    return hand.values("/planner: coupling")


def turn(hand: Hand, manoeuvre: str) -> None:
    """Begin, and wait until it moves."""
    answer = hand.trigger(f"begin/{manoeuvre}")
    assert answer.success, answer.message
    hand.until(lambda: hand.status["state"] == "moving" and hand.status["manoeuvre"] == manoeuvre)


def test_a_stronger_coupling_in_mid_turn_is_seen_at_once_and_brings_the_headings_together(
    hand: Hand, planner: None
) -> None:
    from visualization_msgs.msg import MarkerArray

    shown: list[str] = []

    def look(message: MarkerArray) -> None:
        shown[:] = [marker.text for marker in message.markers if marker.ns == "copying"]

    hand.node.create_subscription(MarkerArray, "fleet_markers", look, qos.NEWEST)
    turn(hand, "led")
    hand.until(lambda: f"coupling {WEAK:g}" in shown, what="the coupling among the markers")
    hand.until_state("ended", seconds=60.0)
    hand.spin(1.2)
    apart = float(coupling(hand)["heading_spread_deg"])
    assert apart > 45.0, "hardly anybody copied"
    hand.until_state("idle")

    turn(hand, "further")  # the led one by as much again
    assert coupling(hand)["coupling"] == f"{WEAK:g}"
    taken = hand.set(coupling__strength=STRONG)
    assert taken.successful, taken.reason
    hand.until(lambda: coupling(hand).get("coupling") == f"{STRONG:g}", what="the new coupling on /diagnostics")
    hand.until(lambda: "in force since" in coupling(hand)["change"], seconds=2.0, what="the change in force")
    assert hand.status["state"] == "moving"
    hand.until(lambda: f"coupling {STRONG:g}" in shown, what="the new coupling among the markers")
    hand.until_state("ended", seconds=60.0)
    hand.spin(1.2)
    assert hand.status["completed"] == "true"
    assert float(coupling(hand)["heading_spread_deg"]) < 1.75 * apart, "they copied what was left of the turn"
