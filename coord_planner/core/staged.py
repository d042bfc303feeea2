# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The program of ocp.py put together from one interval: built in a fraction of the time, whatever its length.

All that is not linear in the program belongs to one interval and its two nodes, so that derivatives are worked out
once, for a program of a single interval, and mapped along the horizon. What neighbours compare at different moments
is the exception: a sum of squares, added as such.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import attrs
import casadi as ca
import numpy as np

from . import ocp
from .blocks import Blocks
from .problem import Shape

_LAST = ("end",)  # rows that belong to the last interval alone
_END_PRICES = ("price_end",)  # parameters that count in the last interval alone


@attrs.frozen(eq=False)
class Staged:
    """A program of S variables, R rows and Q parameters, with its derivatives.

    Attributes:
        program: (x, p) -> (f, g). gradient: (x, p) -> (f, slope of f).
        jacobian: (x, p) -> (g, slopes of g). hessian: (x, p, lam_f, lam_g) -> upper half of that of the Lagrangian.
    """

    program: ca.Function
    gradient: ca.Function
    jacobian: ca.Function
    hessian: ca.Function


@lru_cache(maxsize=16)
def staged(shape: Shape) -> Staged:
    """The program for problems of a shape."""
    stage = _stage(attrs.evolve(shape, intervals=1))
    m = shape.intervals
    x = ca.MX.sym("x", ocp.variable_blocks(shape).size)
    p = ca.MX.sym("p", ocp.parameter_blocks(shape).size)
    lam_f, lam_g = ca.MX.sym("lam_f"), ca.MX.sym("lam_g", ocp.row_blocks(shape).size)
    at_x = _places(ocp.variable_blocks(shape), stage.variables, m)
    at_p = _places(ocp.parameter_blocks(shape), stage.parameters, m, _END_PRICES)
    at_g = _places(ocp.row_blocks(shape), stage.rows, m, _LAST)
    here = _taken(x, at_x), _taken(p, at_p)
    joint = _joint(shape, x, p)

    f, g = stage.values.map(m)(*here)
    f, g = ca.sum2(f) + joint[0], _gathered(g, at_g)
    slopes = _scattered(stage.gradient.map(m)(*here), at_x, x.shape[0]) + joint[1]
    jacobian = _matrix(stage.jacobian, here, (at_g, at_x), (lam_g.shape[0], x.shape[0]))
    hessian = _matrix(
        stage.hessian, (*here, ca.repmat(lam_f, 1, m), _taken(lam_g, at_g)), (at_x, at_x), (x.shape[0], x.shape[0])
    )
    return Staged(
        ca.Function("nlp", [x, p], [f, g], ["x", "p"], ["f", "g"]),
        ca.Function("nlp_grad_f", [x, p], [f, slopes], ["x", "p"], ["f", "grad_f_x"]),
        ca.Function("nlp_jac_g", [x, p], [g, jacobian], ["x", "p"], ["g", "jac_g_x"]),
        ca.Function(
            "nlp_hess_l", [x, p, lam_f, lam_g], [ca.triu(hessian + lam_f * joint[2])],
            ["x", "p", "lam_f", "lam_g"], ["hess_gamma_x_x"],
        ),
    )


@attrs.frozen(eq=False)
class _Entries:
    """Values of a sparse matrix, as a function that gives them as one column, and where they stand in it."""

    values: ca.Function
    rows: np.ndarray
    columns: np.ndarray


@attrs.frozen(eq=False)
class _Stage:
    """One interval: its layouts, and its values and derivatives as functions of SX."""

    variables: Blocks
    parameters: Blocks
    rows: Blocks
    values: ca.Function
    gradient: ca.Function
    jacobian: _Entries
    hessian: _Entries


@lru_cache(maxsize=32)
def _stage(shape: Shape) -> _Stage:
    one = ocp.build(shape, joint=False)
    lam_f, lam_g = ca.SX.sym("lam_f"), ca.SX.sym("lam_g", one.g.shape[0])
    gradient, jacobian = ca.gradient(one.f, one.x), ca.jacobian(one.g, one.x)
    hessian = ca.triu(ca.hessian(lam_f * one.f + ca.dot(lam_g, one.g), one.x)[0])
    return _Stage(
        one.variables, one.parameters, one.rows,
        ca.Function("values", [one.x, one.p], [one.f, one.g]),
        ca.Function("gradient", [one.x, one.p], [ca.densify(gradient)]),
        _entries("jacobian", [one.x, one.p], jacobian), _entries("hessian", [one.x, one.p, lam_f, lam_g], hessian),
    )


def _entries(name: str, given: list[ca.SX], matrix: Any) -> _Entries:
    rows, columns = matrix.sparsity().get_triplet()
    values = ca.vertcat(*matrix.nonzeros()) if rows else ca.SX(0, 1)
    return _Entries(ca.Function(name, given, [values]), np.array(rows, dtype=int), np.array(columns, dtype=int))


def _joint(shape: Shape, x: ca.MX, p: ca.MX) -> tuple[ca.MX, ca.MX, ca.MX]:
    """What joins moments that lie apart, its slope and its second derivative, over all variables."""
    size = x.shape[0]
    if not shape.compared:
        return ca.MX(0), ca.MX(size, 1), ca.MX(size, size)
    variables, parameters = ocp.variable_blocks(shape), ocp.parameter_blocks(shape)
    own, given = variables.slices["compared"], ca.SX.sym("p", parameters.size)
    compared = ca.SX.sym("compared", own.stop - own.start)
    named = {
        name: ca.reshape(given[place], *parameters.shapes[name]) for name, place in parameters.slices.items()
    }
    cost = ocp.comparison_cost({"compared": ca.reshape(compared, *variables.shapes["compared"])}, named, shape)
    curvature, slope = ca.hessian(cost, compared)
    found = ca.Function("joint", [compared, given], [cost, ca.densify(slope), curvature])(x[own], p)
    wide = _sums(np.arange(own.start, own.stop), np.arange(own.stop - own.start), size, own.stop - own.start)
    return found[0], wide @ found[1], wide @ found[2] @ wide.T


def _places(whole: Blocks, one: Blocks, m: int, last: tuple[str, ...] = ()) -> np.ndarray:
    """Where the entries of each interval's own vector lie in the whole one, shape (size of one, M).

    Nodes n and n + 1, interval n, or all of what there is only once; -1 for ``last`` before the last interval.
    """
    found = []
    for name, (rows, columns) in one.shapes.items():
        start, wide = whole.slices[name].start, whole.shapes[name][1]
        own = np.arange(rows * columns)[:, None]
        places = start + own + (0 if wide == columns else rows * np.arange(m))
        places = np.broadcast_to(places, (rows * columns, m)).copy()
        if name in last:
            places[:, :-1] = -1
        found.append(places)
    return np.concatenate(found)


def _taken(vector: ca.MX, places: np.ndarray) -> ca.MX:
    """Entries of a vector, 0 where there is none (-1), in the shape of ``places``."""
    padded = ca.vertcat(vector, 0.0)
    taken = padded[np.where(places < 0, vector.shape[0], places).ravel(order="F").tolist()]
    return ca.reshape(taken, *places.shape)


def _gathered(values: ca.MX, places: np.ndarray) -> ca.MX:
    """The whole vector of which each interval gives the entries at ``places``, each of them once."""
    flat = places.ravel(order="F")
    source = np.empty(int(flat.max(initial=-1)) + 1, dtype=int)
    source[flat[flat >= 0]] = np.flatnonzero(flat >= 0)
    return ca.vec(values)[source.tolist()]


def _scattered(values: ca.MX, places: np.ndarray, size: int) -> ca.MX:
    """The sum, over the intervals, of what each gives for the entries at ``places``; shape (size, 1)."""
    flat = places.ravel(order="F")
    return _sums(flat, np.arange(len(flat)), size, len(flat)) @ ca.vec(values)


def _matrix(
    entries: _Entries, given: tuple[ca.MX, ...], places: tuple[np.ndarray, np.ndarray], shape: tuple[int, int]
) -> ca.MX:
    """The sparse matrix to which each interval adds its own one."""
    m = places[0].shape[1]
    rows, columns = places[0][entries.rows].ravel(order="F"), places[1][entries.columns].ravel(order="F")
    there = np.flatnonzero((rows >= 0) & (columns >= 0))
    pattern = ca.Sparsity.triplet(*shape, rows[there].tolist(), columns[there].tolist())
    if not len(there):
        return ca.MX(pattern, ca.MX(0, 1))
    # The pattern holds its entries column by column.
    known, into = np.unique(columns[there] * shape[0] + rows[there], return_inverse=True)
    values = ca.vec(entries.values.map(m)(*given))
    return ca.MX(pattern, _sums(into.reshape(-1), there, len(known), values.shape[0]) @ values)


def _sums(into: np.ndarray, source: np.ndarray, size: int, count: int) -> ca.MX:
    """The matrix that adds ``count`` values up to ``size`` sums: value source[i] into sum into[i]."""
    return ca.MX(ca.DM(ca.Sparsity.triplet(size, count, into.tolist(), source.tolist()), 1.0))
