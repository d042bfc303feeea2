# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What is called from outside, with its types: loaded or compiled before it is needed, never in a tick."""

from __future__ import annotations

import hashlib
import types
from collections.abc import Callable, Iterator
from typing import Any

import attrs
import numba
from numba.core.caching import FunctionCache
from numba.core.registry import CPUDispatcher

from . import (
    active,
    blocks,
    chain,
    clearance,
    factor,
    fields,
    footprints,
    interior,
    limits,
    matrix,
    motion,
    objective,
    point,
    rows,
    sweeps,
)
from .compiled import OPTIONS

_MODULES = (
    active, blocks, chain, clearance, factor, fields, footprints, interior, limits, matrix, motion, objective, point,
    rows, sweeps,
)
_F, _I = numba.float64, numba.int64
_F1, _F2, _F3, _F4 = (numba.types.Array(_F, d, "C") for d in (1, 2, 3, 4))
_I1, _I2 = (numba.types.Array(_I, d, "C") for d in (1, 2))
_S1, _S2, _S3 = (numba.types.Array(_F, d, "A", readonly=True) for d in (1, 2, 3))  # also parts of larger arrays
_B, _B1 = numba.boolean, numba.types.Array(numba.boolean, 1, "C")

_RESPONSE = (_I2, _F4, _F3)  # which, mean, last
_COSTS = (_F2, _F1, _F3, _F2)  # span, prices, field, robot
_EDGES = (_I2, _F2)
_COMPARING = (_I2, _F3, _F2)  # rows, means, row_numbers
_PAIRS = (_I2, _F3, _F2)  # pairs, lines, foot
_AT = (_F3, _F3, _F4)  # roll, levers, wrenches
_OF_ROWS = (_F3, _F2, _F2)  # of limits, ends, clearances
_FLAT = (_F1, _F1, _F1)  # the same, flat
_FLAT_SETS = (_F1, _B1, _B1)
_FACTOR = (_I1, _F1, _I1, _I2, _I1)  # order, panels, begins, later, counts


@attrs.frozen
class Entries:
    """The compiled functions."""

    evaluate: Callable[..., Any]
    linearise: Callable[..., Any]
    assemble: Callable[..., Any]
    factorise: Callable[..., Any]
    respond: Callable[..., Any]
    stiffen: Callable[..., Any]
    aim: Callable[..., Any]
    follow: Callable[..., Any]
    advance: Callable[..., Any]
    settle_interior: Callable[..., Any]
    want: Callable[..., Any]
    settle_active: Callable[..., Any]
    nearest: Callable[..., Any]
    at: Callable[..., Any]
    drive: Callable[..., Any]


_KNOWN: dict[str, tuple[Callable[..., Any], tuple[Any, ...]]] = {
    "evaluate": (
        point.evaluate, (*_RESPONSE, *_COSTS, _F3, _F3, _F2, _F2, *_EDGES, *_COMPARING, *_PAIRS, _F2)
    ),
    "linearise": (matrix.linearise, (_F2, _F2, _I2, _F3, _F4, _F2, _F2, _F2, _B)),
    "assemble": (matrix.assemble, (
        *_RESPONSE, *_COSTS, *_EDGES, _F1, _F3, _F3, _I2, _I1, _I2, _F3, *_AT, _F3, _B1, *_OF_ROWS, _F2, _B, _F3,
    )),
    "factorise": (factor.factorise, (_F1, _I1, _I1, _I2, _I1, _I2, _I)),
    "respond": (point.respond, (
        *_RESPONSE, *_COSTS, *_EDGES, *_COMPARING, _I2, *_FACTOR, _B1, *_AT, *_OF_ROWS, *_AT, *_OF_ROWS, _B,
    )),
    "stiffen": (interior.stiffen, (_B1, _F1, _I, _F1, _F1, _F1)),
    "aim": (interior.aim, (_B1, _F1, _F1, _F1, _F1, _F1, *_FLAT, _F1, _F1)),
    "follow": (interior.follow, (_B1, _F1, _F1, _F1, _F1, _F1, _F1, _F1, _I2, _I, _F1, *_FLAT, *_FLAT)),
    "advance": (interior.advance, (_I2, _F3, _F1, _F1, _F1, _F2, _F1, _F1, _F1, _F)),
    "settle_interior": (interior.settle, (_F1, _F1, _F1, _F1, _F1, _F1, _F)),
    "want": (active.want, (_F1, _F1, *_FLAT, _F1, *_FLAT_SETS)),
    "settle_active": (active.settle, (_F1, _F1, _F1, _F1, *_FLAT, *_FLAT, *_FLAT, *_FLAT, *_FLAT_SETS)),
    "nearest": (footprints.nearest, (_S3, _F3, _F1)),
    "at": (motion.at, (_S1, _S3, _S2)),
    "drive": (motion.drive, (_S2, _S2, _S3, _S1, _S2, _S1)),
}


def entries() -> Entries:
    """Loaded from numba's cache, or compiled and put there where its folder can be written; else compiled each time."""
    stamp = _stamp()
    return Entries(**{name: _compiled(*known, stamp) for name, known in _KNOWN.items()})


def _compiled(function: Callable[..., Any], signature: tuple[Any, ...], stamp: str) -> Any:
    try:
        return _with_types(function, signature, _StampedCache(function, stamp))
    except (RuntimeError, OSError):  # no folder for the cache, or no room in it
        return _with_types(function, signature, None)


def _with_types(function: Callable[..., Any], signature: tuple[Any, ...], cache: Any) -> Any:
    dispatcher = numba.njit(no_cfunc_wrapper=True, **OPTIONS)(function)
    if cache is not None:
        dispatcher._cache = cache
    dispatcher.compile(signature)
    dispatcher.disable_compile()  # other types are an error, never a compilation in a tick
    return dispatcher


class _StampedCache(FunctionCache):
    """Numba's own cache, which looks at the code of a function but not at what it calls: the stamp tells of that."""

    def __init__(self, function: Callable[..., Any], stamp: str) -> None:
        super().__init__(function)
        self._stamp = stamp

    def _index_key(self, sig: Any, codegen: Any) -> tuple[Any, ...]:
        return (*super()._index_key(sig, codegen), self._stamp)


def _stamp() -> str:
    """Changes with the code of any kernel, and with any constant that it uses."""
    told = hashlib.sha256()
    for module in _MODULES:
        for name, value in sorted(vars(module).items()):
            for part in _told(value):
                told.update(f"{name}={part}\n".encode())
    return told.hexdigest()


def _told(value: Any) -> Iterator[Any]:
    function = value.py_func if isinstance(value, CPUDispatcher) else value
    if isinstance(function, types.FunctionType):
        code = function.__code__
        yield code.co_code.hex()
        yield code.co_names
        yield [const for const in code.co_consts if isinstance(const, (int, float, str, tuple))]
    elif isinstance(function, (int, float)):
        yield function
