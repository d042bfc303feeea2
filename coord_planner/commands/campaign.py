# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Many rehearsals with faults at random moments: who was warned how soon, how near robots came, how it ended.

Run as ``python -m coord_planner.commands.campaign``; ``make campaign`` runs the whole of it.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import sys
from collections.abc import Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed

import attrs
import numpy as np
from rich.console import Console
from rich.progress import Progress
from rich.table import Table

from .. import config
from ..config.places import example
from ..core.manoeuvre import work_out
from ..core.messages import State
from ..errors import RefusedError
from ..record.metrics import summary
from ..trial.faults import KINDS, Fault
from ..trial.hindsight import unavoidable
from ..trial.kernels import load_kernels
from ..trial.rehearsal import rehearse
from ..trial.run import Run

# Which warnings tell of which fault. Any of them counts.
TOLD_BY: dict[str, tuple[str, ...]] = {
    "pose_lost": ("pose old",),
    "pose_frozen": ("pose frozen", "robot not following", "pose jumped", "pose unsteady"),
    "pose_jump": ("pose jumped", "pose unsteady"),
    "pose_noise": ("pose unsteady", "pose jumped"),
    "robot_stuck": ("robot not following", "free way short", "pose unsteady"),
    "robot_slow": ("robot not following", "free way short", "pose unsteady"),
    "not_ready": ("robot not ready",),
    "link_lost": ("graph changed", "graph split"),
    "command_delay": ("robot not following", "robot astray", "pose unsteady", "free way short"),
    "command_lost": ("robot not following", "robot astray", "pose unsteady", "free way short"),
    "planner_late": ("plan late", "plan failed"),
    "planner_fails": ("plan late", "plan failed"),
}
# From which size on a fault must be warned of, and within how many seconds.
_MUST: dict[str, tuple[float, float]] = dict.fromkeys(KINDS, (0.0, 0.5))
_MUST.update({
    "pose_jump": (0.3, 0.5), "pose_noise": (0.3, 0.5), "command_delay": (0.3, 0.5), "planner_late": (0.3, 0.5),
    "robot_stuck": (0.0, 1.0),
    "command_lost": (0.0, 1.0),  # counted from the machine's time-out; it brakes then, and is as a stuck one
    "robot_slow": (0.6, 1.0),  # below this part of its speed, not above
})
# What the planner hears of, also while the fleet stops.
_HEARD = ("pose_lost", "pose_frozen", "pose_jump", "pose_noise", "not_ready", "link_lost")
_MOVING = 0.2  # m/s
_ENDS = (State.ENDED.value, State.HELD.value)
_MISSED = (0.3, 0.1)  # m/s and rad/s by which a machine whose commands come late moves otherwise than told
_MOVED = 0.1  # metres
_AS_LOST = 1.0  # seconds for commands that come so late that the machine brakes first
_MOST_EXCUSED = 0.02  # part of the cases in which a contact may be excused
_LEAST_MOVING = 1.5  # seconds after the beginning before which no fault strikes


@attrs.frozen
class Case:
    """One rehearsal of the campaign."""

    number: int
    file: str
    manoeuvre: str
    seed: int
    faults: tuple[Fault, ...]


@attrs.frozen
class Result:
    """What came of a case.

    Attributes:
        contacts: footprints that touched. excused: contacts that no braking could have avoided.
        clearance: smallest, metres. outside: published commands outside a limit. ended: the last state.
        told_after: seconds from each fault's onset to its first warning, inf for none, by the fault's place.
        owed: whether that warning was owed, by the fault's place. allowed: within how many seconds.
    """

    case: Case
    contacts: int
    excused: bool
    clearance: float
    outside: int
    ended: str
    told_after: tuple[float, ...]
    owed: tuple[bool, ...]
    allowed: tuple[float, ...]

    @property
    def kept(self) -> bool:
        """Whether nothing went wrong that must not."""
        late = any(
            owed and after > allowed + 1e-6 for after, owed, allowed in zip(self.told_after, self.owed, self.allowed)
        )
        return (not self.contacts or self.excused) and not self.outside and self.ended in _ENDS and not late


def cases(files: Sequence[str], count: int, seed: int, kinds: Sequence[str] = tuple(KINDS)) -> Iterator[Case]:
    """Cases drawn at random: one to three faults each, every kind as often as the others."""
    rng = np.random.default_rng(seed)
    configurations = {file: config.load(file) for file in files}
    able = {file: begun_from_starts(configuration) for file, configuration in configurations.items()}
    for number in range(count):
        file = files[number % len(files)]
        configuration = configurations[file]
        manoeuvre = str(rng.choice(able[file]))
        first = kinds[number % len(kinds)]
        others = [str(kind) for kind in rng.choice(kinds, size=int(rng.integers(0, 3)))]
        faults = tuple(_fault(kind, configuration, rng) for kind in (first, *others))
        yield Case(number, file, manoeuvre, int(rng.integers(1 << 31)), faults)


def begun_from_starts(configuration: config.Configuration) -> list[str]:
    """Manoeuvres that can be begun where the file has the robots stand."""
    fleet, starts = configuration.driven, configuration.all_starts()
    poses = np.array([starts[name] for name in fleet.names])
    hops, found = configuration.graph.relative_to(fleet.names).hops(), []
    for name, wanted in configuration.manoeuvres.items():
        with contextlib.suppress(RefusedError):
            work_out(name, wanted, fleet, configuration.settings, poses, 0.0, hops)
            found.append(name)
    return found


def _fault(kind: str, configuration: config.Configuration, rng: np.random.Generator) -> Fault:
    begin = float(rng.uniform(_LEAST_MOVING, 8.0))
    lasts = float(rng.uniform(0.6, 6.0))
    values = {
        "pose_jump": rng.uniform(0.3, 3.0), "pose_noise": rng.uniform(0.3, 1.0), "robot_slow": rng.uniform(0.0, 0.6),
        "command_delay": rng.uniform(0.3, 1.5), "planner_late": rng.uniform(0.1, 1.0),
    }
    robot = str(rng.choice(configuration.fleet.names)) if KINDS[kind].target == "robot" else ""
    edge = ("", "")
    if KINDS[kind].target == "edge":
        first, second, _ = configuration.edges[int(rng.integers(len(configuration.edges)))]
        edge = (first, second)
    return Fault(kind, robot, begin, begin + lasts, float(values.get(kind, 0.0)), edge)


def play(case: Case) -> Result:
    """Rehearse one case and judge it."""
    configuration = config.load(case.file)
    try:
        run = rehearse(configuration, case.manoeuvre, seed=case.seed, faults=case.faults)
    except RefusedError:
        return Result(case, 0, False, np.inf, 0, "refused", (), (), ())
    figures = summary(run)
    told, owed = zip(*(_told(fault, run, configuration, case.faults) for fault in case.faults))
    contacts = int(figures["contacts"])
    return Result(
        case, contacts, bool(contacts) and unavoidable(run, case.faults), float(figures["min_clearance_m"]),
        int(figures["limit_violations"]), run.state, told, owed,
        tuple(_allowed(fault, configuration) for fault in case.faults),
    )


def _hidden(fault: Fault, configuration: config.Configuration, run: Run) -> float:
    """Seconds for which nobody can see a fault.

    A pose that stays where it was is right until its robot has moved. A machine without commands drives on as told
    until its time-out, also where they only come later than that; one that gets them late drives as it should until
    it is told something else. Infinite where it does not move otherwise for long enough to be warned of.
    """
    if fault.kind == "pose_frozen":
        return _unmoved(fault, run)
    if fault.kind not in ("command_lost", "command_delay"):
        return 0.0
    timeout = configuration.connections[fault.robot].command_timeout
    if fault.kind == "command_lost":
        return timeout
    k, began = run.fleet.index(fault.robot), run.began + fault.from_s
    speed, turning = _as_told(run, k)
    off = np.abs(run.speeds[k] - speed), np.abs(run.speeds[k] * run.curvatures[k] - turning)
    missed = ((off[0] > _MISSED[0]) | (off[1] > _MISSED[1])) & (run.times >= began)
    lasting = int(np.ceil(_MUST[fault.kind][1] / float(np.diff(run.times).max())))
    held = np.convolve(missed, np.ones(lasting), mode="valid") >= lasting
    shows = run.times[np.flatnonzero(held)]
    if not len(shows) or shows[0] >= run.began + fault.to_s:
        return np.inf
    after = float(shows[0] - began)
    return timeout if timeout < after <= fault.value else after


def _unmoved(fault: Fault, run: Run) -> float:
    """Seconds until a robot has moved by more than poses scatter; infinite where it does not, as long as it lasts."""
    poses, began = run.poses[run.fleet.index(fault.robot)], run.began + fault.from_s
    struck = int(np.searchsorted(run.times, began))
    moved = np.linalg.norm(poses[struck:, :2] - poses[min(struck, len(poses) - 1), :2], axis=1) > _MOVED
    shows = run.times[struck:][moved]
    return float(shows[0] - began) if len(shows) and shows[0] < run.began + fault.to_s else np.inf


def _as_told(run: Run, k: int) -> tuple[np.ndarray, np.ndarray]:
    """Speed and turn rate of a machine that gets its commands in time, at the times of a run: lags of first order."""
    response = run.fleet.robots[k].response
    sent = np.searchsorted(run.command_times, run.times - response.command_delay + 1e-9, side="right") - 1
    told = np.where((sent >= 0)[:, None], run.commanded[k, np.maximum(sent, 0)], 0.0)
    reached = np.zeros((len(run.times), 2))
    for i, step in enumerate(np.diff(run.times)):
        fading = [np.exp(-step / lag) if lag > 0.0 else 0.0 for lag in (response.speed_lag, response.curvature_lag)]
        reached[i + 1] = told[i] + (reached[i] - told[i]) * fading
    return reached[:, 0], reached[:, 0] * reached[:, 1]


def _allowed(fault: Fault, configuration: config.Configuration) -> float:
    """Seconds within which a fault must be warned of, from when it shows."""
    late = fault.kind == "command_delay" and fault.value > configuration.connections[fault.robot].command_timeout
    return _AS_LOST if late else _MUST[fault.kind][1]


def _told(
    fault: Fault, run: Run, configuration: config.Configuration, others: Sequence[Fault] = ()
) -> tuple[float, bool]:
    """Seconds to the first warning of a fault, and whether one was owed: it struck in motion and was large enough.

    No warning is owed of a planner that does not plan or of a machine that is not to follow because the fleet is
    stopping already, nor of what is wrong with poses that do not come.

    Args:
        others: faults that strike as well.
    """
    struck, size, allowed = run.began + fault.from_s, _MUST[fault.kind][0], _allowed(fault, configuration)
    hidden = _hidden(fault, configuration, run)
    onset = struck + hidden
    heard = min((
        max(first - onset, 0.0) for first, last, caution in run.cautions
        if caution.code in TOLD_BY[fault.kind] and last >= struck and _names(caution.subject, fault.robot)
    ), default=np.inf)
    stop = min((at for at, text in run.events if text.startswith("stopping")), default=np.inf)
    large = fault.value < size if fault.kind == "robot_slow" else fault.value >= size
    lasted = fault.to_s - fault.from_s - hidden >= allowed
    owed = large and lasted and onset + allowed <= run.ended and _driving(run, struck, min(onset + allowed, stop))
    if fault.kind not in _HEARD and stop <= onset + min(heard, allowed) - 1e-6:
        owed = False
    return heard, owed and not _hidden_by_loss(fault, others)


def _names(subject: str, robot: str) -> bool:
    """Whether a warning is of the robot that was struck, alone or in a pair; any is, where it was none of them."""
    return not robot or robot in subject.split(" and ")


def _driving(run: Run, struck: float, until: float) -> bool:
    """Whether everybody moved when a fault struck, and was to move on until a moment."""
    before = np.abs(run.speeds[:, (run.times >= struck - 0.2) & (run.times <= struck)])
    after = np.abs(run.commanded[:, (run.command_times >= struck) & (run.command_times < until), 0])
    return bool(before.size and (before > _MOVING).all() and (after > _MOVING).all())


def _hidden_by_loss(fault: Fault, others: Sequence[Fault]) -> bool:
    """Whether poses that are wrong do not come at all."""
    return fault.kind in ("pose_jump", "pose_noise", "pose_frozen") and any(
        other.kind == "pose_lost" and other.robot == fault.robot
        and other.from_s <= fault.from_s + _MUST[fault.kind][1] and fault.from_s <= other.to_s for other in others
    )


def _table(results: Sequence[Result]) -> Table:
    table = Table("fault", "cases", "contacts", "excused", "smallest clearance", "outside a limit", "warned after (s)",
                  "late", "completed", "held")
    for kind in KINDS:
        judged = [result for result in results if result.told_after]
        struck = [(r, i) for r in judged for i, fault in enumerate(r.case.faults) if fault.kind == kind]
        if not struck:
            continue
        after = [r.told_after[i] for r, i in struck if r.owed[i]]
        late = sum(r.told_after[i] > r.allowed[i] + 1e-6 for r, i in struck if r.owed[i])
        runs = [r for r, _ in struck]
        median = f"{np.median(after):.2f}, at most {max(after):.2f}" if after else "-"
        table.add_row(
            kind, str(len(runs)), str(sum(bool(r.contacts) for r in runs)), str(sum(r.excused for r in runs)),
            f"{min(r.clearance for r in runs):.2f}", str(sum(r.outside for r in runs)), median, str(late),
            str(sum(r.ended == State.ENDED.value for r in runs)), str(sum(r.ended == State.HELD.value for r in runs)),
        )
    return table


def main(arguments: Sequence[str] | None = None) -> int:
    """Play the campaign; exit status 1 when something went wrong that must not."""
    parser = argparse.ArgumentParser(description=__doc__, prog="python -m coord_planner.commands.campaign")
    parser.add_argument("--count", type=int, default=500, help="rehearsals")
    parser.add_argument("--seed", type=int, default=1, help="of the faults and the noise")
    parser.add_argument("--kinds", nargs="+", choices=list(KINDS), default=list(KINDS), help="of faults; all")
    parser.add_argument("--workers", type=int, default=2, help="processes")
    parser.add_argument("--json", action="store_true", help="one JSON object instead of a table")
    parser.add_argument("files", nargs="*", help="parameter files; the example sites when left out")
    given = parser.parse_args(arguments)
    files = given.files or [str(example(name)) for name in ("solar_park.yaml", "snow_yard.yaml", "orchard.yaml")]
    console = Console(stderr=True)
    load_kernels(console.print)
    results: list[Result] = []
    with ProcessPoolExecutor(given.workers) as pool, Progress(console=console, disable=not console.is_terminal) as bar:
        task = bar.add_task("rehearsals", total=given.count)
        drawn = cases(files, given.count, given.seed, given.kinds)
        for future in as_completed([pool.submit(play, case) for case in drawn]):
            results.append(future.result())
            bar.advance(task)
    results.sort(key=lambda result: result.case.number)
    broken = [result for result in results if not result.kept]
    if given.json:
        told = {"cases": len(results), "broken": [attrs.asdict(result) for result in broken]}
        json.dump(told, sys.stdout, default=str)
    else:
        Console().print(_table(results))
        for result in broken:
            Console().print(f"case {result.case.number}: {result}", markup=False)
    excused = sum(bool(result.contacts) for result in results if result.excused)
    if excused > _MOST_EXCUSED * len(results):
        console.print(f"{excused} contacts are excused, {100 * _MOST_EXCUSED:g} % of the cases may be", markup=False)
    return 1 if broken or excused > _MOST_EXCUSED * len(results) else 0


if __name__ == "__main__":
    sys.exit(main())
