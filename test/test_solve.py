# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""``coord-planner solve``: its JSON, its words, its exit status, and failures solved again."""

import json
import math
import os
import subprocess
import sys
from pathlib import Path

import attrs
import numpy as np
import pytest
from test_problem_file import GOOD, written
from typer.testing import CliRunner

from coord_planner.cli import app
from coord_planner.config.failures import FailureStore, keeping
from coord_planner.config.problem_file import to_problem_file
from coord_planner.core import again, solver
from coord_planner.core.case import PlannerCase
from coord_planner.core.fleet import Fleet, Robot
from coord_planner.core.problem import Problem, Watch, bounds_in_force
from coord_planner.core.settings import Prices
from coord_planner.errors import SolveError

ROOT = Path(__file__).parents[1]
PROMISED = {"status", "cost", "effort", "disagreement", "times", "curvature", "poses", "optimality"}


def call(*words):
    """Exit status, stdout and stderr of a call within this process."""
    done = CliRunner().invoke(app, [str(word) for word in words])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done.exit_code, done.stdout, done.stderr


def answer(file):
    status, out, err = call("solve", file, "--json")
    return status, json.loads(out), err


def test_few_intervals_are_told(tmp_path):
    file = written(tmp_path, GOOD.replace("intervals: 50", "intervals: 8"))
    assert answer(file)[1]["largest_turn_in_an_interval_rad"] > 0.5
    assert "with more intervals the cost will be lower" in call("solve", file)[1]


def test_the_promised_keys(tmp_path):
    status, found, err = answer(written(tmp_path, GOOD))
    assert status == 0 and err == "" and set(found) >= PROMISED
    assert found["status"] == "solved"
    assert found["cost"] == pytest.approx(found["effort"] + 1.0 * found["disagreement"])
    poses, curvature, times = (np.array(found[key]) for key in ("poses", "curvature", "times"))
    assert curvature.shape == (3, 50) and poses.shape == (3, 51, 3) and times.shape == (51,)
    np.testing.assert_allclose(times, np.linspace(0, 3, 51))
    np.testing.assert_allclose(poses[0, -1], [1.2, 1.0, 1.5707963], atol=1e-6)
    np.testing.assert_allclose(poses[1, -1, 2], 1.2, atol=1e-6)
    np.testing.assert_allclose(np.diff(poses[..., 2]), curvature * 0.06, atol=1e-9)
    laplacian = np.array([[1, -1, 0], [-1, 1.5, -0.5], [0, -0.5, 0.5]])
    assert found["disagreement"] == pytest.approx(np.sum(curvature * (laplacian @ curvature)) * 0.06 / 2)
    check = found["optimality"]
    assert check["nothing_better_nearby"] and check["words"].startswith("nothing better nearby: yes, to ")
    assert check["to"] < 1e-6 and check["inertia"]["zero"] == 0 and check["heading_bound"]["kept"]
    assert set(check["drift"]) == {"hamiltonian", "costates", "costate_sums", "casimirs"}
    assert max(check["identities"].values()) < 1e-4
    starts = found["starts"]
    assert starts["tried"] >= starts["converged"] >= starts["distinct"] >= 1
    assert starts["cheapest"] <= starts["dearest"] and starts["spread"] >= 0


def test_for_people(tmp_path):
    status, out, err = call("solve", written(tmp_path, GOOD))
    assert status == 0 and err == ""
    for words in ("solved. Cost 5.0", "Nothing better nearby: yes, to ", "first guesses", "Smallest clearance",
                  "not a safety function", "The headings alone cost at least"):
        assert words in out


IMPOSSIBLE = {
    "too far": ("end: [1.2, 1.0, 1.5707963]", "end: [4.0, 1.0, 0]", "duration", ["a"]),
    "too tight": ("speed: 1.0", "limits: {max_curvature: 0.4}", "max_curvature", ["a"]),
    "starts too near": ("speed: 1.0", "min_clearance: 1.5", "min_clearance", ["a", "b"]),
}


@pytest.mark.parametrize("case", IMPOSSIBLE)
def test_what_is_impossible_is_one_and_says_why(case, tmp_path):
    old, new, limit, robots = IMPOSSIBLE[case]
    file = written(tmp_path, GOOD.replace(old, new))
    status, found, err = answer(file)
    assert status == 1 and found["status"] == "infeasible" and set(found) >= PROMISED
    assert found["cost"] is None and found["poses"] is None
    assert {"limit": limit, "robots": robots} in [{key: each[key] for key in ("limit", "robots")}
                                                  for each in found["in_the_way"]]
    assert found["reason"] and found["reason"] in err
    status, out, err = call("solve", file)
    assert status == 1 and out == "" and "infeasible" in err


def test_bad_files_are_two_and_nothing_on_stdout(tmp_path):
    for file in (written(tmp_path, GOOD.replace("coupling", "couplng"), "typo.yaml"), tmp_path / "none.yaml"):
        status, out, err = call("solve", file, "--json")
        assert status == 2 and out == "" and err.startswith(str(file))
    assert call("solve")[0] == 2 and call("solve", written(tmp_path, GOOD), "--seed", "-1")[0] == 2


def test_the_driftless_problem(tmp_path):
    """Check values, section 5: chi 4, z = (1, 0) costs 6 pi."""
    text = ("model: heisenberg\nrobots: [{name: a, start: [0, 0, 0], end: [0, 0, 1]}, {name: b, start: [0, 0, 0], "
            "end: [0, 0, 0]}]\nedges: [[a, b]]\ncoupling: 4\nduration: 1\nintervals: 40\n")
    file = written(tmp_path, text)
    status, found, _ = answer(file)
    assert status == 0 and set(found) >= PROMISED and found["curvature"] is None
    assert found["cost"] == pytest.approx(6 * math.pi, rel=30 / 40**2)
    assert np.shape(found["controls"]) == (2, 40, 2)
    np.testing.assert_allclose(np.array(found["poses"])[:, -1], [[0, 0, 1], [0, 0, 0]], atol=1e-8)
    assert "Cost 18.8" in call("solve", file)[1]


def test_reversing(tmp_path):
    """Reeds & Shepp 1990: no way of radius 1 from (0, 0, 0) to (0, 1, 0) is shorter than 2.636232143306."""
    text = ("robots: [{name: a, start: [0, 0, 0], end: [0, 1, 0]}]\nduration: 3\nintervals: 40\n"
            "speed: {min: -1, max: 1}\nlimits: {max_curvature: 1}\n")
    status, found, _ = answer(written(tmp_path, text))
    assert status == 0 and 2.636232143306 - 1e-6 <= found["path_length_m"]["a"] <= 3 + 1e-6
    assert min(found["speed"][0]) < 0 < max(found["speed"][0])
    assert len(found["times"]) == 41 and found["times"][-1] == pytest.approx(3)


def test_the_same_seed_gives_the_same_plan(tmp_path):
    file = written(tmp_path, GOOD.replace("50", "20"))
    first, second = (call("solve", file, "--json", "--seed", 3)[1] for _ in range(2))
    assert first == second


def test_as_a_process(tmp_path):
    """Messages on stderr, results on stdout, nothing else."""
    cases = (GOOD, 0), (GOOD.replace("end: [1.2", "end: [9.2"), 1), (GOOD.replace("name: b", "name: a"), 2)
    program = "from coord_planner.cli import main; main()"
    for text, expected in cases:
        file = written(tmp_path, text)
        done = subprocess.run(
            [sys.executable, "-W", "error", "-c", program, "solve", str(file), "--json"], capture_output=True,
            text=True, timeout=300, check=False, env={**os.environ, "PYTHONPATH": str(ROOT)})
        assert done.returncode == expected, done.stderr
        assert "Traceback" not in done.stderr and len(done.stderr.splitlines()) == (expected != 0)
        assert (done.stdout == "") == (expected == 2)


# Failures of the planner


def driven_on(**changes):
    """A program of the planner, invented: two robots drive straight on, 3 m apart."""
    fleet, times = Fleet((Robot("a"), Robot("b"))), np.arange(9) / 4
    initial = np.zeros((2, 7))
    initial[:, [4, 6]], initial[1, 1] = 1.0, 3.0
    target = initial.copy()
    target[:, 0] = 2.0
    problem = Problem(
        fleet=fleet, edges=np.array([[0, 1]]), weights=np.ones(1), coupling=1.0, alignment=0.0, prices=Prices(),
        times=times, pace=1.0, initial=initial, asked_speed=np.ones((2, 8)), turn_speed=np.ones((2, 8)),
        full_speed=np.ones(2), target=target, bounds=bounds_in_force(fleet, initial, times, 9.0, 1.0, 2.0, 1.0),
        watch=Watch(np.array([[0, 1]]), np.tile([0.0, 1.0], (1, 8, 1)), np.full((1, 8), 1.1)),
    )
    return attrs.evolve(problem, **changes)


def saved(folder, case):
    return written(folder, json.dumps(to_problem_file(case), allow_nan=False), "case.json")


def test_a_saved_program_is_solved_as_it_was(tmp_path):
    problem = driven_on()
    problem.initial[0, 1] = 0.1  # off its way
    begun = solver.start_from_states(problem, np.repeat(problem.initial[:, None], 9, axis=1))
    then = solver.solve(problem, begun)
    status, found, _ = answer(saved(tmp_path, PlannerCase(problem, begun, False, "kept for a test")))
    assert status == 0 and found["saved_because"] == "kept for a test"
    assert found["cost"] == then.cost and found["iterations"] == then.iterations
    np.testing.assert_array_equal(found["poses"], then.poses)
    assert found["optimality"]["nothing_better_nearby"] and found["from_scratch"]["solved"]
    assert "Optimality check" in call("solve", saved(tmp_path, PlannerCase(problem)))[1]


def test_a_saved_program_that_misses_something_is_infeasible(tmp_path):
    too_far = driven_on()
    too_far.target[0, 1] = 1.5
    status, found, err = answer(saved(tmp_path, PlannerCase(too_far)))
    assert status == 1 and found["status"] == "infeasible" and "a misses the y of its end" in err
    near = driven_on(watch=Watch(np.array([[0, 1]]), np.tile([0.0, 1.0], (1, 8, 1)), np.full((1, 8), 2.5)))
    status, found, err = answer(saved(tmp_path, PlannerCase(near)))
    assert status == 1 and ["a", "b"] in [each["robots"] for each in found["in_the_way"] if each["limit"] == "watch"]
    assert "a and b come nearer than asked" in err


def test_a_saved_program_that_the_solver_did_not_finish_fails_again():
    problem = driven_on()
    problem.initial[:, 1] += [0.3, -0.3]
    begun = solver.start_from_states(problem, np.repeat(problem.initial[:, None], 9, axis=1))
    rows = solver.solve(problem, begun).multipliers[1]
    # Multipliers of no use: a few iterations from there, as a tick has them, do not suffice.
    spoilt = attrs.evolve(begun, vector=begun.vector * 50, multipliers=(begun.vector * 1e3, rows * -1e4))
    found = again.again(PlannerCase(problem, spoilt, True))
    assert found.status == "failed" and "did not finish" in found.reason and found.fresh.solved


def test_what_fails_in_a_tick_is_kept_once_and_can_be_solved_again(tmp_path):
    """A solver that is given too little, as ``Coordinator`` has it: solved, twice failed, solved, failed again."""
    problem, store = driven_on(), FailureStore(tmp_path)
    start = solver.start_from_states(problem, np.repeat(problem.initial[:, None], 9, axis=1))
    good = solver.solve(problem, start)
    start = solver.Start(good.vector, good.multipliers)
    unfinished = attrs.evolve(good, solved=False, rates=good.rates * math.nan)
    answers = iter([good, unfinished, SolveError("not finite"), good, SolveError("not finite")])

    def poor(_problem, _start, _warm, _budget):
        answer = next(answers)
        if isinstance(answer, SolveError):
            raise answer
        return answer

    solve = keeping(poor, store, 0.5, "tick")
    for expected in (0, 1, 1, 1, 2):
        try:
            assert solve(problem, start, True, 0.1) in (good, unfinished)
        except SolveError:
            assert expected >= 1
        assert len(store.files()) == expected
    status, found, _ = answer(store.files()[1])
    assert status == 0 and found["saved_because"] == "not finite"
    assert found["cost"] == pytest.approx(good.cost, abs=1e-3)


def test_a_refused_rehearsal_keeps_its_problem_and_solve_finds_what_stood_in_the_way(tmp_path):
    """An invented site: one cart stands for good between another and its end, and neither can turn out of the way."""
    site = written(tmp_path, """
/**:
  ros__parameters:
    robots: {names: [stays, passes], stays: {start_x: 6.0, start_y: 0.0}, passes: {start_x: 0.0, start_y: 0.0}}
    robot_defaults: {max_curvature: 0.02}
    site_rules: {min_clearance: 0.85}
    graph: {edges: ["stays passes"]}
    manoeuvres: {names: [through], through: {kind: to_ends, ends_deg: ["passes pose 12 0 0", "stays pose 6 0 0"]}}
""", "site.yaml")
    kept = tmp_path / "kept"
    status, _, err = call("simulate", site, "--manoeuvre", "through", "--set", f"failures.folder={kept}")
    files = FailureStore(kept).files()
    assert status == 1 and len(files) == 1 and str(files[0]) in err
    status, found, err = answer(files[0])
    assert status == 1 and found["status"] in ("infeasible", "failed") and "passes" in err
    assert call("simulate", site, "--manoeuvre", "through")[0] == 1 and len(FailureStore(kept).files()) == 1
