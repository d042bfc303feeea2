# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Recordings that others made with rosbag2: the test data in the source archive of PyPI's ``evo`` 1.38.1.

``make unit`` downloads the archive; the recordings are unpacked into a temporary folder and never copied into the
project.
"""

import math
import sys
import tarfile
from pathlib import Path

import numpy as np
import pytest

from coord_planner.core import se2
from coord_planner.record.review import review

ARCHIVE = Path(sys.prefix) / "test_data" / "evo-1.38.1.tar.gz"


@pytest.fixture(scope="module")
def found(tmp_path_factory):
    """All recordings in the archive: bare MCAP files, and folders with a database."""
    if not ARCHIVE.exists():
        pytest.skip(f"needs {ARCHIVE.name} in {ARCHIVE.parent}; `make unit` downloads it")
    folder = tmp_path_factory.mktemp("found")
    with tarfile.open(ARCHIVE) as archive:
        for member in archive.getmembers():
            name = Path(member.name)
            if name.suffix in (".mcap", ".db3") or name.name == "metadata.yaml":
                target = folder / name.parent.name / name.name
                target.parent.mkdir(exist_ok=True)
                target.write_bytes(archive.extractfile(member).read())
    return folder


@pytest.fixture(scope="module")
def mcap(found):
    (file,) = found.rglob("*.mcap")
    assert b"libmcap" in file.read_bytes()[:80], "rosbag2 writes MCAP with libmcap, and says so in the head"
    return file


def localisation(figures):
    """The topic on which the robot's localisation told its pose, with a covariance."""
    (topic,) = [name for name, topic in figures["topics"].items() if "PoseWithCovariance" in topic["type"]]
    return topic


def test_an_mcap_file_is_read_whole_and_its_robot_is_followed(mcap):
    figures = review(mcap).figures
    assert figures["messages_read"] == figures["messages_expected"] > 8000 and figures["losses"] == []
    (robot,) = figures["robots"].values()
    assert robot["poses_from"] == "/odom" and robot["rates_from"] == "twist", "its twist is filled in, and right"
    assert localisation(figures) in robot["not_taken"] and "tf:base_link" in robot["not_taken"]
    assert any("another clock than the recorder's" in note for note in figures["notes"]), "a simulation's time"
    assert figures["lateness"]["robot"]["poses"]["late_median_s"] == pytest.approx(0.0, abs=0.05)
    assert figures["turns"]


def test_a_chain_of_transforms_ends_where_the_localisation_says(mcap):
    """Two witnesses: the poses of the localisation, and the transforms map to odometry to base."""
    sources = localisation(review(mcap).figures), "tf:base_link"
    witnesses = [review(mcap, robots={"robot": source}).record for source in sources]
    localised, chained = (record.robots[0].motion for record in witnesses)
    stamps, chain_stamps = (motion.times - record.clock.shifts[0]
                            for motion, record in zip((localised, chained), witnesses))
    inside = stamps > chain_stamps[0]
    at = [np.interp(stamps[inside], chain_stamps, column) for column in chained.poses.T]
    off = np.hypot(localised.poses[inside, 0] - at[0], localised.poses[inside, 1] - at[1])
    turned = np.abs(se2.wrap(localised.poses[inside, 2] - at[2]))
    assert inside.sum() > 100 and np.median(off) < 0.1 and np.median(turned) < math.radians(5)
    assert witnesses[1].robots[0].topics.poses.frame == witnesses[0].robots[0].topics.poses.frame


def test_a_folder_with_a_database_says_the_same_as_the_bare_file(found):
    (base,) = found.rglob("*.db3")
    whole, bare = review(base.parent).figures, review(base).figures
    assert whole["messages_read"] == whole["messages_expected"] == bare["messages_read"]
    assert whole["turns"] == bare["turns"] != []
