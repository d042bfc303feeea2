# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Hazards in motion: everyone stops, or, where it is armed, who sees it turns away and the others copy."""

import attrs
import fleets
import numpy as np
import pytest
from fleets import PROMPT, abreast, carts, settings
from typer.testing import CliRunner

from coord_planner.cli import app
from coord_planner.core import graph as graphs
from coord_planner.core import manoeuvre, reference
from coord_planner.core.advice.copying import led_shares
from coord_planner.core.manoeuvre import ToEnds, TurnAway
from coord_planner.core.messages import HazardPoint, Level, Snapshot, State
from coord_planner.errors import RefusedError

POINT = (7.5, 1.9)  # ahead of cart_1 of two, to its right


def yard(count=2, spacing=2.5, away=None, **hazard):
    ends = tuple(f"cart_{k + 1} pose 14 {spacing * (count - 1 - k)} 0" for k in range(count))
    chosen = settings(horizon={"intervals": 12}, hazard={"sight": 6.0, "expires": 6.0, **hazard})
    made = {"go": ToEnds(ends_deg=ends), "away": away or TurnAway(after=4.0)}
    return fleets.Yard(carts(count, response=PROMPT), abreast(count, spacing), made, chosen)


def under_way(seconds=4.0, **more):
    run = yard(**more)
    assert run.begin("go").ok
    run.run(seconds)
    return run


def found(run, code):
    return [caution for decision in run.decisions for caution in decision.warnings if caution.code == code]


def line(alignment, angle, count=12):
    """A line of many that drives, of which the first sees a point ahead of it."""
    chosen = settings(hazard={"sight": 3.5}, clearance={"reach": 1.5}, horizon={"interval": 0.5})
    fleet = carts(count)
    graph, poses = graphs.path(fleet.names), abreast(count, 4.0)
    task = manoeuvre.work_out(
        "away", TurnAway(alignment=alignment, angle_deg=angle), fleet, chosen, poses, 1.0, graph.hops(),
        np.zeros(count), (3.3, float(poses[0, 1]) - 1.0),
    )
    assert task.note == "seen by cart_1" and task.ends[0, 2] > 0.0
    made = reference.make(task, fleet, graph, chosen, fleets.states(poses, 1.0))
    assert made.fencing.least(fleet, made.plan.dense(3))[0] > 0.0  # 1 m from the point, all of them
    return made


def test_with_alignment_a_line_of_twelve_takes_the_heading_of_the_one_that_sees():
    turned = np.degrees(line(20.0, 60.0).plan.states[:, -1, 2])
    assert turned[0] == pytest.approx(60.0, abs=0.1) and np.abs(turned - turned[0]).max() < 5.0


def test_without_alignment_it_falls_from_hop_to_hop_as_the_copying_law_says():
    made = line(0.0, 25.0)
    turned = made.plan.states[:, -1, 2]
    law = led_shares(made.graph, made.task.coupling, (0,))[:, 0]
    assert turned / turned[0] == pytest.approx(law, rel=0.10)


def test_by_default_everyone_who_could_come_near_stops():
    run = under_way()
    assert "stops" in run.coordinator.hazard(*POINT, run.now).text
    assert run.coordinator.state is State.STOPPING
    run.run_to(State.HELD)
    assert run.standing() and all(value < 1e-6 for value in run.breaches().values())
    assert {caution.level for caution in found(run, "hazard seen")} == {Level.ERROR}
    # whoever resumes by it keeps away from it, and is not stopped by it again
    assert run.resume().ok and run.coordinator.reference.task.hazard == POINT
    run.run(1.5)
    assert run.coordinator.state is State.MOVING
    run.coordinator.halt(run.now, "halted")
    run.run_to(State.HELD)
    run.run(7.0)
    assert run.resume().ok and run.coordinator.reference.task.hazard is None


def test_a_hazard_that_nobody_comes_near_stops_nobody():
    run = under_way()
    assert "goes on" in run.coordinator.hazard(5.0, 40.0, run.now).text
    run.run(1.0)
    assert run.coordinator.state is State.MOVING and found(run, "hazard known") and not found(run, "hazard seen")
    run.run(7.0)
    assert not run.coordinator.decision.warnings  # forgotten


def test_armed_it_turns_away_without_a_jump_and_keeps_clear():
    run = under_way()
    assert run.coordinator.arm("away", run.now).ok
    run.coordinator.hazard(*POINT, run.now)
    run.run_to(State.ENDED)
    track = np.stack([poses for _, poses in run.track], axis=1)
    made = run.coordinator.reference
    assert made.task.name == "away" and made.task.hazard == POINT and "seen by cart_1" in made.task.note
    assert made.fencing.least(run.fleet, track)[0] > 0.0  # 1 m from the footprints
    assert all(value < 1e-6 for value in run.breaches().values())
    assert {caution.level for caution in found(run, "hazard seen")} == {Level.WARN}
    assert np.degrees(run.machines.poses()[:, 2]) == pytest.approx([60.0, 60.0], abs=3.0)  # to the left of it


def test_heard_again_and_again_it_turns_away_once():
    run = under_way()
    run.coordinator.arm("away", run.now)
    seen = []
    for _ in range(30):
        run.coordinator.hazard(POINT[0] + 0.1, POINT[1], run.now)
        run.run(0.1)
        seen.append(run.coordinator.reference.task.name)
    assert seen[0] == "go" and seen[-1] == "away" and len(set(seen)) == 2


def test_a_hazard_that_expires_while_the_turn_is_made_is_turned_away_from_all_the_same():
    """On a busy machine what is made comes too late and is made again."""
    run = under_way(expires=0.3)
    run.coordinator.arm("away", run.now)
    run.coordinator.hazard(*POINT, run.now)
    made = [job() for job in run.coordinator.jobs()]
    run.run(0.95)
    for outcome in made:
        run.coordinator.deliver(outcome, run.now)
    assert run.coordinator.reference.task.name == "go"
    run.run(3.0)  # more time is taken for the next try
    assert run.coordinator.reference.task.name == "away" and run.coordinator.reference.task.hazard == POINT


def test_what_cannot_turn_away_stops():
    run = under_way(away=TurnAway(after=4.0, speed=9.0))
    run.coordinator.arm("away", run.now)
    run.coordinator.hazard(*POINT, run.now)
    run.run_to(State.HELD)
    assert "turning away was refused" in run.coordinator.decision.reason and run.standing()


def test_arming_expires():
    run = yard(armed_for=1.0)
    assert run.coordinator.arm("away", 0.0).ok and not run.coordinator.arm("go", 0.0).ok
    run.begin("go")
    run.run(4.0)
    run.coordinator.hazard(*POINT, run.now)
    assert run.coordinator.state is State.STOPPING


def test_a_standing_fleet_is_not_moved_and_begins_nothing_beside_a_hazard():
    run = yard()
    run.coordinator.arm("away", 0.0)
    assert "nothing is moved" in run.coordinator.hazard(1.2, 2.5, 0.0).text
    run.run(0.5)
    assert run.coordinator.state is State.IDLE and not run.sent
    answer = run.begin("go")
    assert not answer.ok and "too near to the hazard at (1.2, 2.5)" in answer.text
    assert "no hazard" not in run.begin("away").text
    run.run(6.5)
    assert run.begin("go").ok and run.coordinator.reference.task.hazard is None


def test_turning_away_from_nothing_is_refused():
    run = yard()
    answer = run.begin("away")
    assert not answer.ok and "no hazard is known" in answer.text
    fleet, chosen = carts(1), settings(hazard={"sight": 2.0})
    with pytest.raises(RefusedError, match=r"nobody sees the hazard: cart_1 is nearest, 9\.0 m away"):
        manoeuvre.work_out("away", TurnAway(), fleet, chosen, abreast(1), 1.0, np.zeros((1, 1)), None, (9.0, 0.0))


def test_a_hazard_comes_with_snapshots_too_and_nonsense_is_ignored():
    run = under_way()
    for odd in (HazardPoint(np.nan, 0.0, run.now), HazardPoint(1e300, 0.0, run.now), HazardPoint(*POINT, run.now + 9)):
        run.coordinator.step(attrs.evolve(run.snapshot(), hazard=odd))
        assert run.coordinator.state is State.MOVING
    assert not run.coordinator.hazard(np.inf, 0.0, run.now).ok
    run.coordinator.step(Snapshot(run.now, run.snapshot().poses, hazard=HazardPoint(*POINT, run.now)))
    assert run.coordinator.state is State.STOPPING


SITE = """\
/**:
  ros__parameters:
    robots:
      names: [a, b]
      a: {start_x: 0.0, start_y: 2.5}
      b: {start_x: 0.0, start_y: 0.0}
    graph: {edges: ["a b"]}
    horizon: {intervals: 12}
    hazard: {sight: 6.0}
    site_rules: {min_clearance: 0.85}
    manoeuvres:
      names: [go, away]
      go: {kind: to_ends, ends_deg: ["a pose 14 2.5 0", "b pose 14 0 0"]}
      away: {kind: turn_away, after: 4.0}
"""


def simulate(folder, *words):
    file = folder / "site.yaml"
    file.write_text(SITE)
    done = CliRunner().invoke(app, ["simulate", str(file), "--manoeuvre", "go", *words])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done.exit_code, done.output


def test_simulate_shows_what_a_hazard_does_and_how_much_each_hop_turned(tmp_path):
    code, said = simulate(tmp_path, "--hazard", "7.5 1.9 4.0")
    assert code == 1 and "hazard at (7.5, 1.9)" in said and "the fleet is held" in said
    code, said = simulate(tmp_path, "--hazard", "7.5 1.9 4.0", "--arm", "away")
    assert code == 0 and "by the copying law" in said and "turns away together" in said


@pytest.mark.parametrize("words, told", [
    (("--hazard", "7.5 1.9"), "X Y SECONDS"), (("--hazard", "7.5 nan 3"), "out of range"),
    (("--arm", "away"), "together with --hazard"), (("--hazard", "7 1 3", "--arm", "go"), "turn_away"),
    (("--hazard", "7 1 3", "--arm", "waltz"), "go, away"),
])
def test_mistakes_exit_with_2(tmp_path, words, told):
    code, said = simulate(tmp_path, *words)
    assert code == 2 and told in said
