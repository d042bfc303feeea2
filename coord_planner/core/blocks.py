# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Named arrays laid end to end in one vector: how an optimisation problem is addressed by name."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property
from typing import Any

import casadi as ca
import numpy as np


class Blocks:
    """A layout: name -> (rows, columns). Vectors hold each block column by column, as CasADi does."""

    def __init__(self, shapes: Mapping[str, tuple[int, int]]) -> None:
        self.shapes = dict(shapes)

    @cached_property
    def slices(self) -> dict[str, slice]:
        """Where each block lies in the vector."""
        found, start = {}, 0
        for name, (rows, columns) in self.shapes.items():
            found[name] = slice(start, start + rows * columns)
            start += rows * columns
        return found

    @property
    def size(self) -> int:
        """Length of the vector."""
        return sum(rows * columns for rows, columns in self.shapes.values())

    def symbols(self) -> tuple[Any, dict[str, Any]]:
        """One CasADi symbol for each block: the stacked vector and the matrices by name."""
        parts = {name: ca.SX.sym(name, *shape) for name, shape in self.shapes.items()}
        return ca.vertcat(*[ca.vec(part) for part in parts.values()]), parts

    def pack(self, values: Mapping[str, Any]) -> np.ndarray:
        """Vector from arrays by name (each is broadcast to its block's shape); all names must be there."""
        vector = np.empty(self.size)
        for name, place in self.slices.items():
            value, shape = np.asarray(values[name], dtype=float), self.shapes[name]
            vector[place] = (value if value.shape == shape else np.broadcast_to(value, shape)).ravel(order="F")
        return vector

    def unpack(self, vector: np.ndarray) -> dict[str, np.ndarray]:
        """Arrays by name from a vector (copies)."""
        return {
            name: np.array(vector[place]).reshape(self.shapes[name], order="F") for name, place in self.slices.items()
        }

    def stack(self, parts: Mapping[str, Any]) -> Any:
        """CasADi expressions by name, stacked in the order of the layout; shapes are checked."""
        for name, shape in self.shapes.items():
            if tuple(parts[name].shape) != tuple(shape):
                raise ValueError(f"block {name}: {parts[name].shape} given, {shape} expected")
        return ca.vertcat(*[ca.vec(parts[name]) for name in self.shapes])
