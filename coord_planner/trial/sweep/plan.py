# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A sweep as data, and its points: each one rehearsal."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from itertools import product
from typing import Any

import attrs
import numpy as np
from scipy.stats import qmc

from ... import __version__
from ...config import Configuration, declarations
from ..faults import Fault
from .axes import Axis

GRID, LATIN_HYPERCUBE = "grid", "latin_hypercube"


@attrs.frozen(eq=False)
class Sweep:
    """What is asked for.

    Attributes:
        name: of the sweep. base: the parameter file, with ``fixed`` in force. manoeuvres: that are rehearsed.
        seeds: of the noise, each setting of each manoeuvre with each of them. faults: the same in every rehearsal.
        fixed: values of the file that are changed throughout, by key. axes: what is varied.
        method: GRID or LATIN_HYPERCUBE. points: settings of a hypercube. sampling_seed: of its random numbers.
        as_shipped: whether the file as it stands is a setting too.
        objective: price of each measure (see choice.MEASURES), per unit; the cheapest setting is the best.
        within: what a setting must keep besides the site's rules, by measure.
    """

    name: str
    base: Configuration
    manoeuvres: tuple[str, ...]
    seeds: tuple[int, ...]
    faults: tuple[Fault, ...]
    fixed: Mapping[str, Any]
    axes: tuple[Axis, ...]
    method: str
    points: int
    sampling_seed: int
    as_shipped: bool
    objective: Mapping[str, float]
    within: Mapping[str, float]

    def settings(self) -> tuple[dict[str, Any], ...]:
        """Values of the varied keys, setting by setting, each once; the order is the order of the rows."""
        found = self._grid() if self.method == GRID else self._hypercube()
        if self.as_shipped and self.shipped() not in found:
            found.insert(0, self.shipped())
        different = {json.dumps(values): values for values in found}
        return tuple(different.values())

    def shipped(self) -> dict[str, Any]:
        """Values of the varied keys as they are in force in the file; keys without a value are left out."""
        in_force = {each.key: each.value for each in declarations(self.base.flat)}
        return {axis.key: _plain(in_force[axis.key]) for axis in self.axes if in_force[axis.key] is not None}

    def labels(self, values: Mapping[str, Any]) -> dict[str, Any]:
        """The varied values as tables show them."""
        found = {}
        for axis in self.axes:
            if axis.key in values:
                value = values[axis.key]
                known = axis.ordered or value in axis.grid()
                found[axis.key] = axis.label(value) if known else "as shipped"
        return found

    def _grid(self) -> list[dict[str, Any]]:
        keys = [axis.key for axis in self.axes]
        return [dict(zip(keys, values)) for values in product(*(axis.grid() for axis in self.axes))]

    def _hypercube(self) -> list[dict[str, Any]]:
        """Latin hypercube (McKay, Beckman & Conover 1979, from memory), drawn by scipy."""
        sampler = qmc.LatinHypercube(d=len(self.axes), seed=np.random.default_rng(self.sampling_seed))
        drawn = sampler.random(self.points)
        return [{axis.key: axis.at(float(part)) for axis, part in zip(self.axes, row)} for row in drawn]


@attrs.frozen(eq=False)
class Point:
    """One rehearsal: all that its result depends on.

    Attributes:
        number: place in the sweep's order. setting: which of its settings. labels: their values as tables show them.
        flat: the parameters. file: where they came from, for messages.
        manoeuvre, seed, faults: what is rehearsed. key: a fingerprint of all that decides the result.
    """

    number: int
    setting: int
    labels: Mapping[str, Any]
    flat: Mapping[str, Any]
    file: str
    manoeuvre: str
    seed: int
    faults: tuple[Fault, ...]
    key: str


def points(sweep: Sweep) -> tuple[Point, ...]:
    """Every rehearsal of a sweep: setting by setting, manoeuvre by manoeuvre, seed by seed."""
    found: list[Point] = []
    for setting, values in enumerate(sweep.settings()):
        flat, labels = {**sweep.base.flat, **values}, sweep.labels(values)
        content = json.dumps(_content(flat, sweep), sort_keys=True)
        for manoeuvre, seed in product(sweep.manoeuvres, sweep.seeds):
            key = hashlib.sha256(f"{content} {manoeuvre} {seed}".encode()).hexdigest()[:32]
            found.append(Point(
                len(found), setting, labels, flat, sweep.base.file, manoeuvre, seed, sweep.faults, key
            ))
    return tuple(found)


def _content(flat: Mapping[str, Any], sweep: Sweep) -> dict[str, Any]:
    return {
        "version": __version__, "flat": {key: _plain(value) for key, value in flat.items()},
        "faults": [attrs.asdict(fault) for fault in sweep.faults],
    }


def _plain(value: Any) -> Any:
    return list(value) if isinstance(value, tuple) else value
