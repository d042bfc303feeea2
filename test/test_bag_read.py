# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Recordings of all kinds and in all states: what can be read is read, the loss is counted and said."""

import shutil
import sqlite3

import numpy as np
import pytest
from foreign_bags import EPOCH, ForeignBag, corner
from rosbags.rosbag2 import CompressionFormat, CompressionMode, StoragePlugin, Writer

from coord_planner.errors import SettingsError
from coord_planner.record import bag_messages as messages
from coord_planner.record.bag_content import read
from coord_planner.record.review import losses

TIMES = np.arange(0.0, 20.0, 0.1)


def some_bag(folder, plugin="mcap"):
    bag = ForeignBag()
    poses, speeds, rates = corner(TIMES)
    for k in range(2):
        bag.poses(f"/cart_{k}/odom", TIMES, poses + [0, 3.0 * k, 0], speeds=speeds, rates=rates)
    for when in TIMES:
        bag.add(when, "/cart_0/cmd_vel", messages.twist(1.0, 0.1))
        bag.add(when, "/pictures", messages.text("x" * 2000))
    return bag.write(folder, plugin)


@pytest.fixture(params=["mcap", "sqlite3"])
def plugin(request):
    return request.param


@pytest.fixture
def folder(tmp_path, plugin):
    return some_bag(tmp_path / "bag", plugin)


def file_of(folder):
    return next(file for file in folder.iterdir() if file.suffix in (".mcap", ".db3"))


def test_whole_folder_and_bare_file_say_the_same(folder):
    for path in (folder, file_of(folder)):
        content = read(path)
        assert (content.read, content.recording.expected, content.recording.losses) == (800, 800, [])
        table = content.poses["/cart_1/odom"].table
        assert len(table) == 200 and content.poses["/cart_1/odom"].frame == "map"
        # first received 10 ms after the first stamp, but unstamped commands came before it
        assert table.column("received")[0] == pytest.approx(0.01, abs=1e-9)
        assert table.column("stamp")[1] == pytest.approx(0.1, abs=1e-9)
        assert table.column("y")[0] == pytest.approx(3.0)
        assert content.topics["/pictures"] == ("std_msgs/msg/String", 200)


def test_a_window_is_read_alone(folder):
    content = read(folder, 5.0, 7.0)
    assert content.read == pytest.approx(80, abs=2)
    assert content.poses["/cart_0/odom"].table.column("stamp").min() > 4.9
    assert content.poses["/cart_0/odom"].table.column("stamp").max() < 7.1


def test_no_metadata(folder):
    (folder / "metadata.yaml").unlink()
    content = read(folder)
    assert content.read == 800
    assert any("metadata.yaml is missing" in loss for loss in content.recording.losses)


def test_metadata_that_is_rubbish(folder):
    (folder / "metadata.yaml").write_text("rosbag2_bagfile_information: [")
    content = read(folder)
    assert content.read == 800 and "metadata.yaml cannot be read" in content.recording.losses


def test_truncated(folder, plugin):
    file = file_of(folder)
    size = file.stat().st_size
    with file.open("r+b") as stream:
        stream.truncate(size * 6 // 10)
    content = read(folder)
    assert 300 < content.read < 700, content.recording.losses  # also of a chunk that breaks off
    assert content.recording.expected == 800
    assert any("breaks off" in loss for loss in content.recording.losses)


@pytest.mark.parametrize("compression", ["zstd", "lz4", "none"])
def test_a_chunk_that_breaks_off_is_read_as_far_as_it_goes(tmp_path, compression):
    """Written with the mcap library, as recorders that compress do it."""
    from mcap.writer import CompressionType, Writer

    with (tmp_path / "long.mcap").open("wb") as stream:
        writer = Writer(stream, compression=CompressionType[compression.upper()], chunk_size=10**8)
        writer.start(profile="ros2")
        schema = writer.register_schema("std_msgs/msg/Float64", "ros2msg", b"float64 data")
        channel = writer.register_channel("/cart/curvature", "cdr", schema)
        rng = np.random.default_rng(0)
        for n in range(20_000):
            writer.add_message(channel, EPOCH + n * 10**7, bytes(messages.packed(messages.number(rng.normal()))), EPOCH)
        writer.finish()
    whole = (tmp_path / "long.mcap").read_bytes()
    (tmp_path / "cut.mcap").write_bytes(whole[:len(whole) // 5])
    content = read(tmp_path / "cut.mcap")
    assert 1_000 < content.read < 19_000 and len(content.numbers["/cart/curvature"].table) == content.read


@pytest.mark.parametrize("told", [True, False], ids=["metadata", "no metadata"])
@pytest.mark.parametrize("plugin", [StoragePlugin.SQLITE3, StoragePlugin.MCAP], ids=["sqlite3", "mcap"])
def test_messages_compressed_one_by_one_are_unpacked_without_metadata_too(tmp_path, plugin, told):
    folder = tmp_path / "bag"
    writer = Writer(folder, version=9, storage_plugin=plugin)
    writer.set_compression(CompressionMode.MESSAGE, CompressionFormat.ZSTD)
    with writer:
        connection = writer.add_connection("/cart/curvature", "std_msgs/msg/Float64", typestore=messages.store())
        for n in range(50):
            writer.write(connection, EPOCH + n * 10**8, messages.packed(messages.number(0.25)))
    if not told:
        (folder / "metadata.yaml").unlink()
    content = read(folder)
    assert content.read == 50 and set(content.numbers["/cart/curvature"].table.array()[:, -1]) == {0.25}


def test_a_broken_chunk_is_left_out_and_the_rest_is_read(tmp_path):
    bag = ForeignBag()
    for n in range(3000):
        bag.add(0.01 * n, "/pictures", messages.text(f"{n:04d}" + "x" * 1000))
    file = file_of(bag.write(tmp_path / "bag"))
    data = bytearray(file.read_bytes())
    at = data.index(b"1400xxx")
    data[at - 40:at - 20] = b"\xff" * 20  # the head of a message within the second chunk
    file.write_bytes(data)
    content = read(tmp_path / "bag")
    assert 1500 < content.read < 3000
    assert any("the index does not fit" in loss for loss in content.recording.losses)


@pytest.mark.parametrize("name", ["nothing.mcap", "nothing.db3"])
def test_an_empty_file(tmp_path, name):
    (tmp_path / name).touch()
    content = read(tmp_path / name)
    assert content.read == 0 and "0 bytes" in content.recording.losses[0]


def test_a_file_that_is_no_recording(tmp_path):
    (tmp_path / "notes.mcap").write_text("not a recording at all")
    content = read(tmp_path / "notes.mcap")
    assert content.read == 0 and any("breaks off" in loss for loss in content.recording.losses)


@pytest.mark.parametrize(("make", "words"), [
    (lambda path: None, "no such recording"),
    (lambda path: path.mkdir(), "no recording in this folder"),
    (lambda path: path.write_text("x"), "no recording of ROS 2"),
])
def test_what_cannot_be_a_recording_is_refused(tmp_path, make, words):
    make(tmp_path / "thing")
    with pytest.raises(SettingsError, match=words):
        read(tmp_path / "thing")


def test_rows_that_were_not_yet_moved_into_the_file(tmp_path):
    """A recorder that is killed while sqlite keeps a write-ahead log: rosbags alone would miss what is in the log."""
    file = file_of(some_bag(tmp_path / "bag", "sqlite3"))
    base = sqlite3.connect(file)
    base.execute("PRAGMA journal_mode=WAL")
    base.execute("INSERT INTO messages (topic_id, timestamp, data) SELECT topic_id, timestamp + 30000000000, data "
                 "FROM messages WHERE topic_id = 1")
    base.commit()
    (tmp_path / "killed").mkdir()
    for part in file.parent.glob("*.db3*"):  # as it lies there when the process is gone
        shutil.copy(part, tmp_path / "killed")
    base.close()
    assert read(tmp_path / "killed").read == 1000


def test_unknown_types_are_named_and_the_rest_is_read(tmp_path):
    bag = ForeignBag()
    poses, *_ = corner(TIMES)
    bag.poses("/cart/odom", TIMES, poses)
    bag.add(1.0, "/lidar", ("acme_msgs/msg/Sweep", b"\x00\x01\x00\x00abcd"))
    bag.add(1.0, "/cart/cmd_vel", messages.twist(1.0, 0.0))
    content = read(bag.write(tmp_path / "bag"))
    assert content.topics["/lidar"] == ("acme_msgs/msg/Sweep", 1)
    assert content.read == 202 and len(content.poses["/cart/odom"].table) == 200
    assert content.unknown == {"/lidar": "acme_msgs/msg/Sweep"}
    assert losses(content, whole=True) == ["1 messages on /lidar are of the type acme_msgs/msg/Sweep, which neither "
                                           "the recording nor ROS 2 defines"]


def test_messages_that_cannot_be_unpacked_are_counted(tmp_path):
    bag = ForeignBag()
    poses, *_ = corner(TIMES)
    bag.poses("/cart/odom", TIMES, poses)
    good = bytes(messages.packed(bag.entries[0][2]))
    bag.entries[50] = (EPOCH + 5, "/cart/odom", bag.entries[50][2])
    with_broken = ForeignBag()
    with_broken.entries = bag.entries
    folder = with_broken.write(tmp_path / "bag", "sqlite3")
    base = sqlite3.connect(file_of(folder))
    base.execute("UPDATE messages SET data = ? WHERE id IN (20, 21)", (good[:60],))
    base.commit()
    base.close()
    content = read(folder)
    assert content.unpackable == {"/cart/odom": 2} and content.read == 200


def test_a_type_that_the_bag_defines_otherwise_is_read_as_it_says(tmp_path):
    """The bag's own definition counts: here an Odometry with a field more in front."""
    from rosbags.typesys import Stores, get_types_from_msg, get_typestore

    definition, _ = messages.store().generate_msgdef("nav_msgs/msg/Odometry", ros_version=2)
    other = get_typestore(Stores.EMPTY)
    other.register(get_types_from_msg("float64 quality\n" + definition, "nav_msgs/msg/Odometry"))
    head = messages.header("map", EPOCH)
    stock = messages.odometry(head, "base", (1.0, 2.0, 0.5), 1.0, 0.0)
    fields = {name: getattr(stock, name) for name in ("header", "child_frame_id", "pose", "twist")}
    made = other.types["nav_msgs/msg/Odometry"](quality=9.0, **fields)
    with Writer(tmp_path / "bag", version=9, storage_plugin=StoragePlugin.MCAP) as writer:
        connection = writer.add_connection("/cart/odom", "nav_msgs/msg/Odometry", typestore=other)
        writer.write(connection, EPOCH, other.serialize_cdr(made, "nav_msgs/msg/Odometry"))
    table = read(tmp_path / "bag").poses["/cart/odom"].table
    assert table.column("x")[0] == 1.0 and table.column("y")[0] == 2.0
