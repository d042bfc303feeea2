# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The still picture of a run."""

import math
from xml.etree import ElementTree

import attrs
import numpy as np
import pytest
from made_up_run import standing, turn

from coord_planner.record.picture import picture, write_picture

SVG = "{http://www.w3.org/2000/svg}"


def boxes(root):
    """Corners of the footprints drawn, one array a footprint."""
    paths = [path for path in root.iter(f"{SVG}path") if path.get("fill") != "#fff"]
    data = [path.get("d") for path in paths if path.get("d").endswith("Z")]
    return [np.array([[float(n) for n in pair.split()] for pair in text[1:-1].split("L")]) for text in data]


def test_picture_shows_every_robot_at_every_moment_in_true_proportion(tmp_path):
    write_picture(turn(slowed="mower_3"), tmp_path / "new" / "turn.svg", moments=4)
    text = (tmp_path / "new" / "turn.svg").read_text()
    assert len(text) < 60_000
    root = ElementTree.fromstring(text)
    width, height = float(root.get("width")), float(root.get("height"))
    drawn = boxes(root)
    assert len(drawn) == 4 * 6
    for corners in drawn:  # a footprint of 1.2 m by 0.8 m, inside the picture
        length, breadth = (math.dist(corners[n], corners[n + 1]) for n in (0, 1))
        assert length / breadth == pytest.approx(1.5, rel=0.02)
        assert corners.min() > 0 and corners[:, 0].max() < width and corners[:, 1].max() < height
    texts = [element.text for element in root.iter(f"{SVG}text")]
    assert [text for text in texts if text.endswith(" s")][0] == "0.0 s"
    assert texts[-1] == "corner_left: 6 robots, simulated"


def test_a_scene_higher_than_wide_is_laid_on_its_side():
    """Six robots abreast driving along x: they drive up the page, the leftmost at the left."""
    first = boxes(ElementTree.fromstring(picture(turn(seconds=3.0), moments=2)))[:6]
    assert first[0][0, 1] < first[0][1, 1] - 5  # front above rear
    assert all(a[:, 0].mean() < b[:, 0].mean() for a, b in zip(first, first[1:]))


def test_texts_are_escaped_and_poor_records_are_drawn_or_refused():
    run = standing([[0, 0, 0]], count=1, manoeuvre="<b>&")
    assert "&lt;b&gt;&amp;" in picture(run)
    ElementTree.fromstring(picture(run))
    two = standing([[0, 0, 0], [math.nan] * 3], count=5)
    assert len(boxes(ElementTree.fromstring(picture(two)))) == 1
    with pytest.raises(ValueError, match="needs samples"):
        picture(standing([[0, 0, 0]], count=0))


def test_the_edge_of_a_headland_is_a_dashed_line_where_it_lies():
    run = attrs.evolve(turn(), strip=(((0.0, 1.0), float(turn().poses[:, :, 1].max()) + 1.0),))
    root = ElementTree.fromstring(picture(run))
    (edge,) = [path.get("d") for path in root.iter(f"{SVG}path") if path.get("stroke-dasharray")]
    ends = np.array([[float(n) for n in pair.split()] for pair in edge[1:].split("L")])
    drawn = np.concatenate(boxes(root))
    level = np.ptp(ends, axis=0).argmin()  # the axis across the edge
    assert np.ptp(ends[:, level]) < 0.1
    assert (drawn[:, level] > ends[0, level]).all() or (drawn[:, level] < ends[0, level]).all()
