# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A sweep file (YAML) -> a sweep; everything that is wrong with it is told before anything runs."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import Any, Optional

import attrs

from ... import config
from ...config import Configuration, Declaration
from ...config.complaints import Complaints, Source, nearest, shown
from ...errors import SettingsError
from ..faults import Fault
from .axes import Axis, Listed, Ranged, in_words
from .document import read_document
from .faults import fault_list
from .measures import MEASURES
from .plan import GRID, LATIN_HYPERCUBE, Sweep

_WHAT = "a sweep file (YAML)"
_REQUIRED = {
    "params": "a parameter file, its path seen from the sweep file",
    "manoeuvre": "the manoeuvre to be rehearsed, or a list of them",
    "seeds": "a list of whole numbers, e.g. [1, 2, 3]", "objective": "what counts, e.g. {heading_spread_deg: 1.0}",
}
_OPTIONAL = {
    "set": dict, "vary": dict, "faults": list, "method": str, "points": int, "sampling_seed": int, "as_shipped": bool,
    "within": dict,
}
_KEYS = (*_REQUIRED, *_OPTIONAL)
_SPAN = "[a, b, ...], {range: [low, high], count: n}, {log: [low, high], count: n} or {NAME: value, ...}"
_MOST_POINTS = 100_000
_OWN = {"coupling.strength": "coupling", "coupling.alignment": "alignment"}


def load_sweep(path: str | Path) -> Sweep:
    """Read and check a sweep file, its parameter file, and every setting that follows from it.

    Raises:
        SettingsError: all that is wrong, each with its file, line, key, value and what is allowed.
    """
    held, lines = read_document(path, _WHAT)
    complaints = Complaints(Source(str(path), lines))
    reader = _Reader(Path(path), held, complaints)
    sweep = reader.sweep()
    _check_settings(sweep, complaints)
    return sweep


class _Reader:
    """Goes through a sweep file key by key."""

    def __init__(self, path: Path, held: Mapping[str, Any], complaints: Complaints) -> None:
        self._path, self._held, self._complaints = path, held, complaints

    def sweep(self) -> Sweep:
        self._check_keys()
        base = self._base()
        manoeuvres = self._manoeuvres(base)
        method = self._choice("method", GRID, (GRID, LATIN_HYPERCUBE))
        axes = self._axes(base, manoeuvres, method)
        sweep = Sweep(
            name=self._path.stem, base=base, manoeuvres=manoeuvres, seeds=self._seeds(), faults=self._faults(base),
            fixed=self._held.get("set") or {}, axes=axes, method=method, points=self._points(method),
            sampling_seed=self._whole("sampling_seed", 1, 0, 2**31 - 1),
            as_shipped=bool(self._held.get("as_shipped", False)), objective=self._weights(), within=self._within(),
        )
        self._complaints.raise_any()
        return sweep

    def _check_keys(self) -> None:
        for key in self._held:
            if key not in _KEYS:
                self._complaints.add(f"it is not a known key{nearest(str(key), _KEYS)}", str(key), ", ".join(_KEYS))
        for key, meaning in _REQUIRED.items():
            if self._held.get(key) is None:
                self._complaints.add("it has to be given", key, meaning)
        for key, kind in _OPTIONAL.items():
            value = self._held.get(key)
            if value is not None and (not isinstance(value, kind) or (kind is int and isinstance(value, bool))):
                words = {dict: "`key: value` below it", list: "a list", str: "a word", int: "a whole number",
                         bool: "true or false"}[kind]
                self._complaints.add(f"{shown(value)} cannot stand here", key, words)
        self._complaints.raise_any()

    def _base(self) -> Configuration:
        """The parameter file with ``set`` in force; its own errors are told with its own name."""
        given = self._held["params"]
        if not isinstance(given, str):
            self._complaints.add(f"{shown(given)} is no path", "params", _REQUIRED["params"])
            self._complaints.raise_any()
        file = self._path.parent / given
        base = config.load(file)
        base.all_starts()
        changes = {str(key): value for key, value in (self._held.get("set") or {}).items()}
        for key, value in changes.items():
            self._try(f"set.{key}", {**base.flat, key: value})
        self._complaints.raise_any()
        if changes:
            with self._complaints.about("set"):
                base = attrs.evolve(config.from_parameters({**base.flat, **changes}), file=str(file))
        self._complaints.raise_any()
        return base

    def _manoeuvres(self, base: Configuration) -> tuple[str, ...]:
        held = self._held["manoeuvre"]
        names = tuple(map(str, held)) if isinstance(held, list) else (str(held),)
        known = ", ".join(base.manoeuvres) or "none is named in the parameter file"
        for name in names:
            if name not in base.manoeuvres:
                close = nearest(name, base.manoeuvres)
                self._complaints.add(f"there is no manoeuvre {shown(name)}{close}", "manoeuvre", known)
        if not names or len(set(names)) < len(names):
            self._complaints.add(f"{shown(held)} cannot stand here", "manoeuvre", f"different ones of {known}")
        self._complaints.raise_any()
        return names

    def _seeds(self) -> tuple[int, ...]:
        seeds = self._held["seeds"]
        sound = isinstance(seeds, list) and seeds and all(
            isinstance(seed, int) and not isinstance(seed, bool) and 0 <= seed < 2**31 for seed in seeds
        )
        if not sound or len(set(seeds)) < len(seeds):
            self._complaints.add(f"{shown(seeds)} cannot be seeds", "seeds",
                                 "a list of different whole numbers of at least 0, e.g. [1, 2, 3]")
            return ()
        return tuple(seeds)

    def _faults(self, base: Configuration) -> tuple[Fault, ...]:
        graph = base.graph.relative_to(base.driven.names)
        return fault_list(self._held.get("faults") or [], graph, self._complaints)

    def _choice(self, key: str, default: str, allowed: tuple[str, ...]) -> str:
        value = self._held.get(key, default)
        if value not in allowed:
            self._complaints.add(f"{shown(value)} is not known", key, "one of " + ", ".join(allowed))
            return default
        return str(value)

    def _whole(self, key: str, default: int, least: int, most: int) -> int:
        value = self._held.get(key, default)
        if not least <= value <= most:
            self._complaints.add(f"{value} is out of range", key, f"a whole number from {least} to {most}")
        return int(value)

    def _points(self, method: str) -> int:
        if method == GRID:
            if "points" in self._held:
                self._complaints.add("a grid has as many points as its values give", "points",
                                     f"nothing, or method: {LATIN_HYPERCUBE}")
            return 0
        if "points" not in self._held:
            self._complaints.add("it has to be given", "points", "how many settings the hypercube draws, e.g. 40")
            return 0
        return self._whole("points", 0, 2, _MOST_POINTS)

    def _weights(self) -> dict[str, float]:
        weights = self._figures("objective", "a price per unit, at least 0", lambda value: value >= 0.0)
        if weights and not any(weights.values()):
            self._complaints.add("nothing counts", "objective", "a price above 0 for at least one measure")
        return weights

    def _within(self) -> dict[str, float]:
        return self._figures("within", "the worst value that is still good enough", lambda _value: True)

    def _figures(self, key: str, meaning: str, sound: Callable[[float], bool]) -> dict[str, float]:
        """Numbers by measure."""
        held = self._held.get(key) or {}
        if not isinstance(held, dict) or (key in _REQUIRED and not held):
            self._complaints.add(f"{shown(held)} cannot stand here", key, _REQUIRED.get(key, "measures and numbers"))
            return {}
        found = {}
        for name, value in held.items():
            if name not in MEASURES:
                self._complaints.add(f"it is not measured{nearest(str(name), MEASURES)}", f"{key}.{name}",
                                     ", ".join(MEASURES))
            elif not isinstance(value, (int, float)) or isinstance(value, bool) or not sound(value):
                self._complaints.add(f"{shown(value)} cannot stand here", f"{key}.{name}", meaning)
            else:
                found[name] = float(value)
        return found

    # What is varied

    def _axes(self, base: Configuration, manoeuvres: tuple[str, ...], method: str) -> tuple[Axis, ...]:
        known = {each.key: each for each in config.declarations(base.flat)}
        found = []
        for key, spread in (self._held.get("vary") or {}).items():
            where = f"vary.{key}"
            if key not in known:
                self._complaints.add(f"it is not a key of the parameter file{nearest(str(key), known)}", where)
            elif key == "simulation.seed":
                self._complaints.add("every point is rehearsed with each of the seeds", where, "the list `seeds`")
            elif key in (self._held.get("set") or {}):
                self._complaints.add("it is both set and varied", where, "one of the two")
            elif self._check_in_force(base, manoeuvres, key, where):
                before = self._complaints.count
                axis = self._axis(known[key], spread, where, method)
                if axis is not None and self._complaints.count == before:
                    self._check_values(base, axis, where)
                    found.append(axis)
        if method == LATIN_HYPERCUBE and not (self._held.get("vary") or {}):
            self._complaints.add("a hypercube needs something to vary", "vary", f"KEY: {_SPAN}")
        return tuple(found)

    def _check_in_force(self, base: Configuration, manoeuvres: tuple[str, ...], key: str, where: str) -> bool:
        field = _OWN.get(key)
        if not field or any(getattr(base.manoeuvres[name], field) is None for name in manoeuvres):
            return True
        names = " and ".join(manoeuvres)
        own = ", ".join(f"manoeuvres.{name}.{field}" for name in manoeuvres)
        self._complaints.add(f"{names} has {field} of its own, so that this would change nothing", where, own)
        return False

    def _axis(self, known: Declaration, spread: Any, where: str, method: str) -> Optional[Axis]:
        if isinstance(spread, list):
            return self._listed(known, {in_words(value): value for value in spread}, len(spread), where)
        if isinstance(spread, dict) and {"range", "log"} & set(spread):
            return self._ranged(known, spread, where, method)
        if isinstance(spread, dict):
            return self._listed(known, {str(name): value for name, value in spread.items()}, len(spread), where)
        self._complaints.add(f"{shown(spread)} is nothing to go through", where, _SPAN)
        return None

    def _listed(self, known: Declaration, values: Mapping[str, Any], given: int, where: str) -> Optional[Axis]:
        if not values or len(values) < given:
            self._complaints.add("a value stands there twice" if values else "there is no value", where,
                                 "different values, at least one")
            return None
        kept = [float(value) if known.kind == "float" and _is_number(value) else value for value in values.values()]
        return Listed(known.key, tuple(kept), tuple(values))

    def _ranged(self, known: Declaration, spread: Mapping[str, Any], where: str, method: str) -> Optional[Axis]:
        logarithmic = "log" in spread
        ends = spread["log" if logarithmic else "range"]
        unknown = set(spread) - {"log" if logarithmic else "range", "count"}
        if unknown or known.kind not in ("int", "float"):
            self._complaints.add(f"{shown(spread)} is no range of {known.kind}", where, _SPAN)
            return None
        if not (isinstance(ends, list) and len(ends) == 2 and all(map(_is_number, ends)) and ends[0] < ends[1]):
            self._complaints.add(f"{shown(ends)} are no two ends", where, "[low, high], two numbers, the lower first")
            return None
        if logarithmic and ends[0] <= 0:
            self._complaints.add(f"a logarithmic range cannot begin at {ends[0]:g}", where, "a low end above 0")
            return None
        if known.kind == "int" and any(end != int(end) for end in ends):
            self._complaints.add(f"{shown(ends)} are no whole numbers", where, "whole ends for a whole number")
            return None
        count = self._count(spread, where, method)
        return Ranged(known.key, float(ends[0]), float(ends[1]), count, logarithmic, known.kind == "int")

    def _count(self, spread: Mapping[str, Any], where: str, method: str) -> int:
        if method == LATIN_HYPERCUBE:
            if "count" in spread:
                self._complaints.add("a hypercube draws as many values as it has points", f"{where}.count",
                                     f"nothing, or method: {GRID}")
            return 0
        count = spread.get("count")
        if not isinstance(count, int) or isinstance(count, bool) or not 2 <= count <= 1000:
            self._complaints.add(f"{shown(count)} cannot be a count", f"{where}.count", "a whole number from 2 to 1000")
            return 2
        return count

    def _check_values(self, base: Configuration, axis: Axis, where: str) -> None:
        """Each listed value, or both ends of a range, in the file by itself."""
        values: Iterable[Any] = (axis.at(0.0), axis.at(1.0 - 1e-12)) if isinstance(axis, Ranged) else axis.values
        for value in values:
            self._try(where, {**base.flat, axis.key: value})

    def _try(self, where: str, flat: Mapping[str, Any]) -> None:
        """Complain about ``where`` when these parameters are not sound."""
        try:
            config.from_parameters(flat)
        except SettingsError as error:
            key = "" if where.endswith(error.key) else f"{error.key}: "
            self._complaints.add(f"{key}{error.problem}", where, error.allowed)


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _check_settings(sweep: Sweep, complaints: Complaints) -> None:
    """Values that are right one by one and cannot be kept together."""
    settings = sweep.settings()
    each = len(sweep.seeds) * len(sweep.manoeuvres)
    if len(settings) * each > _MOST_POINTS:
        complaints.add(f"{len(settings)} settings with {each} rehearsals each are too many", "vary",
                       f"at most {_MOST_POINTS} rehearsals")
        complaints.raise_any()
    for values in settings:
        try:
            config.from_parameters({**sweep.base.flat, **values})
        except SettingsError as error:
            together = ", ".join(f"{key} {in_words(value)}" for key, value in values.items())
            complaints.add(f"with {together}: {error.key}: {error.problem}", "vary", error.allowed)
    complaints.raise_any()
