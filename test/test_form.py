# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Into a formation from where they stand: places, assignment, waiting, refusals, closed loop. Scenes are invented."""

import itertools
import math

import fleets
import numpy as np
import pytest
from fleets import LATE, abreast, carts, settings
from sites import site

from coord_planner.core import outline
from coord_planner.core.graph import path
from coord_planner.core.manoeuvre import Form, work_out
from coord_planner.errors import RefusedError, SettingsError
from coord_planner.record.metrics import summary
from coord_planner.trial.rehearsal import rehearse


def scattered(seed, count):
    """Robots about the origin, 2.6 m apart and more, looking up to 86 degrees to either side of the x axis."""
    random, found = np.random.default_rng(seed), []
    size = 1.6 * math.sqrt(count) + 1
    while len(found) < count:
        pose = np.array([*random.uniform(-size, size, 2), random.uniform(-1.5, 1.5)])
        if all(np.hypot(*(pose - other)[:2]) > 2.6 for other in found):
            found.append(pose)
    return np.array(found)


def task(wanted, poses, fleet=None, **more):
    fleet = fleet or carts(len(poses), response=LATE)
    return work_out("form", wanted, fleet, settings(**more), np.array(poses), 0.0, path(fleet.names).hops())


@pytest.mark.parametrize("wanted, directions", [
    (Form(shape="line", spacing=3.0, heading_deg=90.0, x=0.0, y=20.0), (1.0, 0.0)),
    (Form(shape="file", spacing=3.0, heading_deg=90.0, x=0.0, y=20.0), (0.0, -1.0)),
    (Form(shape="echelon", spacing=3.0, slant_deg=30.0, heading_deg=90.0, x=0.0, y=20.0),
     (math.cos(math.pi / 6), -0.5)),
    (Form(shape="echelon", spacing=3.0, slant_deg=-30.0, heading_deg=90.0, x=0.0, y=20.0),
     (math.cos(math.pi / 6), 0.5)),  # turned over: the left ones are behind
])
def test_places_lie_as_asked(wanted, directions):
    ends = task(wanted, abreast(4)).ends
    wanted_places = np.array([0.0, 20.0]) + 3.0 * np.outer(np.arange(4) - 1.5, directions)
    apart = np.linalg.norm(ends[:, None, :2] - wanted_places, axis=2)
    assert sorted(apart.argmin(axis=1)) == [0, 1, 2, 3] and apart.min(axis=1) == pytest.approx([0.0] * 4, abs=1e-6)
    assert np.cos(ends[:, 2] - math.pi / 2) == pytest.approx([1.0] * 4)


def test_straight_ways_do_not_cross():
    """The least sum of squared lengths has no crossing (exchange argument, common practice): all ways look one way."""
    poses = abreast(5, 3.0)[[3, 0, 4, 1, 2]]
    made = task(Form(spacing=4.0, heading_deg=0.0, x=25.0, y=6.0), poses)
    assert np.argsort(made.ends[:, 1]).tolist() == np.argsort(poses[:, 1]).tolist() and not made.note


def test_the_assignment_is_the_best_of_all():
    """Against every permutation of four, with the same ways."""
    poses = scattered(3, 4)
    made = task(Form(spacing=6.0, heading_deg=0.0, x=14.0, y=0.0), poses)
    from coord_planner.core.dubins import shortest

    places = [tuple(end) for end in made.ends]
    length = [[shortest(tuple(pose), place, 2.0 / 0.8).length ** 2 for place in places] for pose in poses]
    best = min(sum(length[k][i] for k, i in enumerate(order)) for order in itertools.permutations(range(4)))
    assert sum(length[k][k] for k in range(4)) == pytest.approx(best)


@pytest.mark.parametrize("shape", ["line", "file", "echelon"])
@pytest.mark.parametrize("seed", range(4))
def test_laid_drives_keep_clear(shape, seed):
    """Exact geometry at moments other than those that were looked at."""
    poses = scattered(seed, 5)
    made = task(Form(shape=shape, spacing=2.8, heading_deg=0.0), poses)
    guessed = made.guess(np.linspace(0.0, made.arrival, 157))[0]
    polygons = outline.outlines(carts(5).corners(), guessed)
    gaps = outline.clearances(polygons, outline.all_pairs(5)).min(axis=1)
    stand = outline.clearances(polygons[:, :1], outline.all_pairs(5))[:, 0]
    assert (gaps >= np.minimum(0.95, stand) - 0.03).all()
    assert guessed[:, -1] == pytest.approx(made.ends, abs=1e-6)


def test_eight_find_their_ways_into_a_file():
    """Laid one after the other by the lengths of their ways alone, in no order did they all find one."""
    made = task(Form(shape="file", spacing=2.8, heading_deg=0.0), scattered(308, 8))
    polygons = outline.outlines(carts(8).corners(), made.guess(np.linspace(0.0, made.arrival, 157))[0])
    assert outline.closest(polygons, outline.all_pairs(8))[0] > 0.85


def test_who_would_meet_waits_and_the_answer_says_so():
    made = task(Form(shape="file", spacing=2.8), abreast(3, 2.2))
    assert "waits until the others have driven" in made.note
    waiting = [k for k, drive in enumerate(made.drives) if drive.metres[3] == 0.0]
    assert waiting and len(waiting) < 3
    assert made.asked_speed(np.array([0.0, 0.25]))[waiting, 0] == pytest.approx(0.0)


@pytest.mark.parametrize("wanted, poses, words", [
    (Form(spacing=1.2), abreast(3), r"would end 0\.40 m apart, 1\.\d\d m short"),
    (Form(heading_deg=0.0, x=12.0, y=0.0), [[0, 0, 0], [2.8, 0, math.pi]],  # face to face, and no room to turn out
     r"cart_1 and cart_2 would come nearer than allowed by \d\.\d\d m"),
])
def test_what_cannot_be_formed_is_refused_with_figures(wanted, poses, words):
    with pytest.raises(RefusedError, match=words):
        task(wanted, poses, site_rules={"min_clearance": 1.4})


def test_half_a_place_is_told():
    with pytest.raises(SettingsError, match="only one of x and y"):
        Form(x=1.0)
    with pytest.raises(SettingsError, match=r"manoeuvres\.form\.x"):
        site(abreast(2), {"form": {"kind": "form", "x": 1.0}})


def test_who_still_waited_when_all_were_halted_waits_again():
    """The file is formed one after the other; halted while the last still stands, it goes on without a near miss."""
    yard = fleets.Yard(carts(3, response=LATE), abreast(3, 2.2), {"form": Form(shape="file", spacing=2.8)},
                       settings(horizon={"intervals": 12}))
    assert yard.begin("form").ok
    yard.run(2.5)
    yard.coordinator.halt(yard.now, "asked")
    yard.run_to(fleets.State.HELD)
    assert yard.resume().ok, yard.answers[-1].text
    yard.run_to(fleets.State.ENDED)
    track = np.stack([poses for _, poses in yard.track], axis=1)
    polygons = outline.outlines(yard.fleet.corners(), track)
    assert outline.closest(polygons, outline.all_pairs(3))[0] >= 0.85
    assert np.abs(track[:, -1] - yard.coordinator.ends)[:, :2].max() < 0.1


@pytest.mark.parametrize("shape, seed", [("line", 1), ("file", 2), ("echelon", 3)])
def test_a_rehearsal_ends_in_formation(shape, seed):
    formed = {"kind": "form", "shape": shape, "spacing": 2.8, "heading_deg": 0.0}
    run = rehearse(site(scattered(seed, 3), {"form": formed}), "form", seed=seed)
    figures = summary(run)
    assert figures["completed"] and figures["contacts"] == 0 and figures["limit_violations"] == 0
    assert figures["min_clearance_m"] >= 0.85
    assert max(figures["end_error_m"].values()) <= 0.10
    assert math.degrees(max(figures["end_heading_error_rad"].values())) <= 3.0
