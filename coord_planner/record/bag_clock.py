# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""One time for everything in a recording, from stamps and from times of receipt.

Stamps tell when something was; times of receipt are all that messages without stamps have. Clocks may differ from
robot to robot, run at another pace than the recorder's (a simulation), or jump. Time that jumps parts the recording
into stretches; nothing is measured across a jump.
"""

from __future__ import annotations

from collections.abc import Mapping

import attrs
import numpy as np

_BIN = 1.0  # seconds
_BACKWARD, _FORWARD = 1.0, 10.0  # seconds by which stamps must go back or run ahead of receipt to be a jump
_FIRST_BINS = 60
_OTHER_PACE = 0.05  # seconds a second by which a clock that runs at another pace differs; less is lateness
_OTHER_CLOCK = 1.0  # seconds between two clocks that are not the same


@attrs.frozen
class Placed:
    """Messages of one stream on the common time.

    Attributes:
        times: seconds since the recording began, shape (S,).
        stretch: which stretch each belongs to, shape (S,), int.
        late: time of receipt minus stamp, seconds, (S,), less what is usual where all stamps are of another clock than
            the recorder's; NaN where they are of another clock than most stamps, or missing.
    """

    times: np.ndarray
    stretch: np.ndarray
    late: np.ndarray


class Clock:
    """The clock that most stamps are of, as a function of the time of receipt.

    Args:
        streams: by name: times of receipt and stamps of its messages, seconds, shape (S, 2); NaN for none.

    Attributes:
        notes: what was found out about the clocks, in words.
        breaks: times, seconds, at which a new stretch begins.
        shifts: by stretch, what is added to a stamp of the main clock to get the common time, seconds.
    """

    def __init__(self, streams: Mapping[str, np.ndarray]) -> None:
        self.notes: list[str] = []
        stamped = {name: rows[_usable(rows)] for name, rows in streams.items()}
        stamped = {name: rows for name, rows in stamped.items() if len(rows)}
        self._centres, self._offsets = _main(stamped)
        jumps = _jumps(self._centres, self._offsets)
        self._stretch = np.cumsum(jumps) if len(jumps) else np.zeros(1, dtype=int)
        self.shifts = self._place_stretches()
        self._same_clock = not len(self._offsets) or abs(float(np.median(self._offsets))) <= _OTHER_CLOCK
        if not self._same_clock:
            self.notes.append("stamps are of another clock than the recorder's (simulated time, or a clock that is not "
                              "set): how late messages came is told against what is usual")
        at = np.flatnonzero(jumps).tolist()
        self.breaks = [float(self._centres[b] + self._shift_of(b) - self._offsets[b]) for b in at]
        self.notes += [
            f"the clock of the stamps jumped by {self._jump(b):+.1f} s, {self._centres[b]:.0f} s after the recording "
            "began: what lies before and after is kept apart" for b in at
        ]

    def _jump(self, b: int) -> float:
        return float(self._offsets[b - 1] - self._offsets[b])

    def _shift_of(self, b: int) -> float:
        return float(self.shifts[self._stretch[b]])

    def _place_stretches(self) -> np.ndarray:
        """What is added to stamps of each stretch: it begins when it was received, but not before the last one ends."""
        if not len(self._centres):
            return np.zeros(1)
        shifts: list[float] = []
        for number in range(int(self._stretch[-1]) + 1):
            bins = np.flatnonzero(self._stretch == number)
            shift = _at_begin(self._centres[bins], self._offsets[bins])
            if shifts:
                ended = self._centres[bins[0] - 1] - self._offsets[bins[0] - 1] + shifts[-1] + _BIN / 2
                begins = self._centres[bins[0]] - self._offsets[bins[0]] - _BIN / 2
                shift = max(shift, float(ended - begins))
            shifts.append(shift)
        return np.array(shifts)

    def received(self, times: np.ndarray) -> Placed:
        """Where messages without usable stamps lie, from their times of receipt."""
        if not len(self._centres):
            return Placed(times, np.zeros(len(times), dtype=int), np.full(len(times), np.nan))
        stretch = self._stretch[self._bin(times)]
        placed = np.empty(len(times))
        for number in np.unique(stretch):
            inside, bins = stretch == number, self._stretch == number
            offset = np.interp(times[inside], self._centres[bins], self._offsets[bins])
            placed[inside] = times[inside] - offset + self.shifts[number]
        return Placed(placed, stretch, np.full(len(times), np.nan))

    def place(self, name: str, rows: np.ndarray) -> Placed:
        """Where the messages of a stream lie; rows of receipt and stamp, shape (S, 2)."""
        fallback = self.received(rows[:, 0])
        usable = _usable(rows)
        if not usable.any() or not len(self._centres):
            if len(rows):
                self.notes.append(f"{name} has no stamps: its times are times of receipt")
            return fallback
        offsets = np.where(usable, rows[:, 0] - rows[:, 1], np.inf)
        stretch, expected = self._nearest(rows[:, 0], offsets)
        off = offsets - expected
        typical = float(np.median(off[usable]))
        if abs(typical) > _OTHER_CLOCK:
            self.notes.append(f"{name} is stamped by a clock that is {-typical:+.1f} s beside the others': "
                              "its times are times of receipt")
            return fallback
        strange = ~usable | (np.abs(off) > _FORWARD)
        if strange.any():
            self.notes.append(f"{name}: {int(strange.sum())} stamps are far from the others' or missing: "
                              "their times are times of receipt")
        times = np.where(strange, fallback.times, np.nan_to_num(rows[:, 1]) + self.shifts[stretch])
        late = offsets if self._same_clock else off
        return Placed(times, np.where(strange, fallback.stretch, stretch), np.where(strange, np.nan, late))

    def _bin(self, times: np.ndarray) -> np.ndarray:
        """Number of the occupied bin that is nearest to each time."""
        right = np.clip(np.searchsorted(self._centres, times), 0, len(self._centres) - 1)
        left = np.clip(right - 1, 0, None)
        return np.where(np.abs(self._centres[left] - times) <= np.abs(self._centres[right] - times), left, right)

    def _nearest(self, times: np.ndarray, offsets: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Stretch and expected offset of messages; near a jump those that fit the offset better."""
        at = self._bin(times)
        near = np.stack([np.clip(at + step, 0, len(self._centres) - 1) for step in (0, -1, 1)])
        misfit = np.abs(self._offsets[near] - offsets)
        # neighbouring bins count only beyond a jump: within a stretch the own bin says best what is usual
        misfit[1:][self._stretch[near[1:]] == self._stretch[at]] = np.inf
        best = near[np.argmin(misfit, axis=0), np.arange(len(times))]
        return self._stretch[best], self._offsets[best]


def _usable(rows: np.ndarray) -> np.ndarray:
    return np.isfinite(rows).all(axis=1)


def _main(streams: Mapping[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Receipt minus stamp, second by second: the median over streams of each stream's median; occupied bins only."""
    if not streams:
        return np.zeros(0), np.zeros(0)
    bins = [np.floor(rows[:, 0] / _BIN).astype(int) for rows in streams.values()]
    occupied = np.unique(np.concatenate(bins))
    table = np.full((len(streams), len(occupied)), np.nan)
    for row, (values, number) in enumerate(zip(streams.values(), bins)):
        order = np.argsort(number, kind="stable")
        for part in np.split(order, np.flatnonzero(np.diff(number[order])) + 1):
            table[row, np.searchsorted(occupied, number[part[0]])] = np.median(values[part, 0] - values[part, 1])
    # of an even number of streams the lower median is taken: the middle of two clocks would be neither
    return (occupied + 0.5) * _BIN, np.nanquantile(table, 0.5, axis=0, method="lower")


def _at_begin(centres: np.ndarray, offsets: np.ndarray) -> float:
    """Receipt minus stamp when a stretch begins, by its first minute: one message that came late says little.

    A clock of another pace is followed back to the beginning (median of slopes and of intercepts).
    """
    centres, offsets = centres[:_FIRST_BINS], offsets[:_FIRST_BINS]
    slope = float(np.median(np.diff(offsets) / np.diff(centres))) if len(centres) > 2 else 0.0
    slope = slope if abs(slope) > _OTHER_PACE else 0.0
    return float(np.median(offsets - slope * (centres - centres[0] + _BIN / 2)))


def _jumps(centres: np.ndarray, offsets: np.ndarray) -> np.ndarray:
    """Which bins begin a new stretch, shape (B,), bool."""
    if not len(centres):
        return np.zeros(0, dtype=bool)
    received, stamped = np.diff(centres), np.diff(centres - offsets)
    jumped = (stamped < -_BACKWARD) | (stamped > received + _FORWARD)
    return np.concatenate([[False], jumped])
