# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A sweep on a Dask cluster: Dask's scheduler hands out the points, nothing of our own stands in between."""

from __future__ import annotations

import logging
import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import suppress
from typing import Any

from ... import __version__
from ...errors import CoordPlannerError, SettingsError
from .plan import Point
from .point import Record, given_up

Work = Callable[[Point], Record]
_PATIENCE = 15  # seconds for the scheduler to answer, and for a first worker
_AHEAD = 4  # points handed out for each thread of the cluster, so that its workers never wait for us
_TAKEN_BACK = ("lost", "pending")
_GONE = "the cluster went away; what had come is kept, and the same command goes on from there"
_WORKERS = "dask worker ADDRESS --nthreads 1 --nworkers N, with this package of the same version beside it"


class ClusterLostError(CoordPlannerError):
    """The scheduler is gone; what had come is kept."""


def check_library() -> None:
    """SettingsError where dask.distributed is not installed."""
    try:
        import distributed  # noqa: F401
    except ImportError as error:
        raise SettingsError(f"a cluster needs dask.distributed, which is not installed ({error})", key="--cluster",
                            allowed="`pip install 'coord_planner[cluster]'`, or no --cluster") from None


def run_on_cluster(points: Sequence[Point], work: Work, address: str, tell: Callable[[str], None]) -> Iterator[Record]:
    """Records as they come. The work of a worker that dies is done by others; a point that kills several is given up.

    A point has one key on the cluster, so that it is counted once however often it had to be begun.

    Raises:
        SettingsError: nobody answers there, or no worker that could do it. ClusterLostError: it went away.
    """
    from distributed import as_completed

    _quieten()
    client = _connected(address)
    try:
        for warning in _looked_at(client):
            tell(warning)
        waiting = list(reversed(points))
        by_key: dict[str, Point] = {}
        coming = as_completed(loop=client.loop)
        while waiting or by_key:
            for point in _next(waiting, len(by_key), client):
                future = client.submit(work, point, key=f"coord_planner-{point.key}", pure=False)
                by_key[future.key] = point
                coming.add(future)
            future = next(coming)
            if future.status in _TAKEN_BACK and client.status == "running":
                coming.add(future)  # its worker died before anybody fetched the result: it is done again
                continue
            yield _record(future, by_key.pop(future.key))
            future.release()
    except OSError:
        raise ClusterLostError(_GONE) from None
    finally:
        with suppress(Exception):  # it may be gone already
            client.close(timeout=5)


def _quieten() -> None:
    """What goes wrong is told in our own words; the library logs the same, with its traces, from each of its parts."""
    for name in list(logging.root.manager.loggerDict):
        if name.split(".")[0] == "distributed":
            logging.getLogger(name).setLevel(logging.CRITICAL + 1)


def _connected(address: str) -> Any:
    from distributed import Client

    try:
        return Client(address, timeout=_PATIENCE, set_as_default=False)
    except (OSError, ValueError, TypeError) as error:
        raise SettingsError(f"no Dask scheduler answers at {address!r} ({type(error).__name__})", key="--cluster",
                            allowed="the address that `dask scheduler` prints, e.g. tcp://10.0.0.5:8786") from None


def _looked_at(client: Any) -> list[str]:
    """Warnings about the workers that are there; SettingsError when none is fit."""
    from distributed import TimeoutError as NoneCame

    try:
        client.wait_for_workers(1, timeout=_PATIENCE)
        said = client.run(_about_worker)
    except (NoneCame, TimeoutError):
        raise SettingsError("the cluster has no workers", key="--cluster", allowed=_WORKERS) from None
    except ImportError as error:
        raise SettingsError(f"a worker lacks this package ({error})", key="--cluster", allowed=_WORKERS) from None
    other = {worker: version for worker, (version, _) in said.items() if version != __version__}
    if other:
        shown = ", ".join(f"{worker} has {version}" for worker, version in other.items())
        raise SettingsError(f"this is version {__version__}, and {shown}", key="--cluster", allowed=_WORKERS)
    greedy = [worker for worker, (_, threads) in said.items() if threads != "1"]
    if not greedy:
        return []
    return [f"OMP_NUM_THREADS is not 1 at {', '.join(greedy)}: its linear algebra may take several cores from others"]


def _about_worker() -> tuple[str, str]:
    """Runs on a worker: version of the package there, and threads for its linear algebra."""
    from coord_planner import __version__ as version

    return version, os.environ.get("OMP_NUM_THREADS", "")


def _next(waiting: list[Point], handed_out: int, client: Any) -> list[Point]:
    room = max(_AHEAD, _AHEAD * sum(client.nthreads().values())) - handed_out
    return [waiting.pop() for _ in range(min(room, len(waiting)))]


def _record(future: Any, point: Point) -> Record:
    from distributed import KilledWorker

    if future.status not in ("finished", "error"):
        raise ClusterLostError(_GONE)
    try:
        record = future.result()
    except KilledWorker as error:
        last = error.last_worker.address
        return given_up(point, f"several workers died while they rehearsed it, the last one {last}")
    except OSError:
        raise
    except Exception as error:  # the worker's own: the library or the package there is not as it should be
        return given_up(point, f"{type(error).__name__} on a worker: {error}")
    assert isinstance(record, Record)
    return record
