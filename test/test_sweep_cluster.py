# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The same sweep on a Dask cluster: a real scheduler, worker processes, and one of them killed in the middle."""

import json
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from made_up_sweep import compared, in_full, sweep_file
from test_cli_check import call
from test_sweep import ROOT, wait_for

from coord_planner.trial.sweep.file import load_sweep
from coord_planner.trial.sweep.plan import points

pytest.importorskip("distributed", reason="needs dask.distributed (the extra `cluster`)")
ENVIRONMENT = {**os.environ, "PYTHONPATH": f"{ROOT}:{Path(__file__).parent}", "OMP_NUM_THREADS": "1",
               "PYTHONWARNINGS": "ignore"}


class Cluster:
    """A scheduler and workers as processes of their own, on this machine only."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._file = folder / "scheduler.json"
        self._started: list[subprocess.Popen[bytes]] = []
        self.scheduler = self._start("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard",
                                     "--scheduler-file", str(self._file))
        wait_for(self._file.exists)
        self.address = str(json.loads(self._file.read_text())["address"])

    def worker(self, *options: str) -> subprocess.Popen[bytes]:
        return self._start("worker", self.address, "--nthreads", "1", "--no-dashboard", "--no-nanny", *options)

    def _start(self, what: str, *words: str) -> subprocess.Popen[bytes]:
        with open(self._folder / f"{what}{len(self._started)}.log", "wb") as log:
            process = subprocess.Popen([sys.executable, "-m", f"distributed.cli.dask_{what}", *words], stdout=log,
                                       stderr=log, env=ENVIRONMENT, cwd=self._folder)
        self._started.append(process)
        return process

    def close(self) -> None:
        for process in reversed(self._started):
            process.kill()
            process.wait()


@pytest.fixture
def cluster(tmp_path: Path) -> Iterator[Cluster]:
    made = Cluster(tmp_path)
    yield made
    made.close()


def sweep(file: Path, out: Path, address: str) -> subprocess.Popen[str]:
    words = ["sweep", str(file), "--out", str(out), "--results", "csv", "--json", "--cluster", address]
    return subprocess.Popen([sys.executable, "-c", "from coord_planner.cli import main; main()", *words], text=True,
                            stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=ENVIRONMENT)


def rows_in(journal: Path) -> list[dict[str, Any]]:
    return [json.loads(line)["row"] for line in journal.read_text().splitlines()]


def test_a_worker_killed_in_the_middle_costs_no_result_and_doubles_none(cluster: Cluster, tmp_path: Path) -> None:
    file = sweep_file(tmp_path, seeds=[1, 2, 3, 4])
    journal = tmp_path / "out" / "journal.jsonl"
    cluster.worker()
    doomed = cluster.worker()
    running = sweep(file, tmp_path / "out", cluster.address)
    wait_for(lambda: journal.exists() and any(
        row["time_process"].endswith(f":{doomed.pid}") for row in rows_in(journal)))
    doomed.send_signal(signal.SIGKILL)  # with a rehearsal under way, and maybe results that nobody has fetched
    output, errors = running.communicate(timeout=300)
    assert running.returncode == 0, errors
    found = rows_in(journal)
    todo = points(load_sweep(file))
    assert sorted(row["key"] for row in found) == sorted(point.key for point in todo), "none lost, none doubled"
    assert json.loads(output)["done"] == len(todo)
    assert len({row["time_process"] for row in found}) == 2, "both workers had their part"
    by_number = sorted(found, key=lambda row: int(row["point"]))
    for number in (0, 7, 11):
        assert compared(by_number[number]) == compared(in_full(todo[number]).row), "as on this machine, to the last bit"


def test_a_cluster_that_goes_away_leaves_what_had_come(cluster: Cluster, tmp_path: Path) -> None:
    file = sweep_file(tmp_path, seeds=[1, 2, 3, 4])
    journal = tmp_path / "out" / "journal.jsonl"
    cluster.worker()
    running = sweep(file, tmp_path / "out", cluster.address)
    wait_for(lambda: journal.exists() and journal.read_bytes().count(b"\n") >= 2)
    cluster.scheduler.send_signal(signal.SIGKILL)
    _, errors = running.communicate(timeout=120)
    assert running.returncode == 1 and "the same command goes on from there" in errors and "Traceback" not in errors
    assert len(rows_in(journal)) >= 2


def test_nobody_there_and_no_workers_are_told(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("coord_planner.trial.sweep.cluster._PATIENCE", 2)
    for address in ("tcp://127.0.0.1:9", "nonsense://x", "127.0.0.1"):
        status, output = call("sweep", sweep_file(tmp_path), "--out", tmp_path / "out", "--results", "csv", "--cluster",
                              address)
        assert status == 2 and "--cluster" in output and "dask scheduler" in output, output


def test_a_cluster_without_workers_is_told(cluster: Cluster, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("coord_planner.trial.sweep.cluster._PATIENCE", 2)
    status, output = call("sweep", sweep_file(tmp_path), "--out", tmp_path / "out", "--results", "csv", "--cluster",
                          cluster.address)
    assert status == 2 and "no workers" in output and "--nthreads 1" in output, output
