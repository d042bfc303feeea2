# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A short soak: turns begun and ended leave no memory, thread or file behind (measure_soak.py: an hour of it)."""

import gc
import tracemalloc

from measure_soak import MOST_GROWTH, Operation, standing


def test_turn_after_turn_leaves_nothing_behind():
    """Python's own count of bytes, since what the system says of a process jumps by whole arenas."""
    operation = Operation()
    assert operation.once(16.0) and operation.once(16.0)  # caches and histories fill up
    before = standing()
    tracemalloc.start()
    try:
        assert operation.once(16.0)
        gc.collect()
        first = tracemalloc.get_traced_memory()[0]
        assert operation.once(16.0)
        gc.collect()
        grown = tracemalloc.get_traced_memory()[0] - first
    finally:
        tracemalloc.stop()
    after = standing()
    assert grown < MOST_GROWTH * 2**20 * before.memory / 100  # one turn of a hundred
    assert after.threads <= before.threads and after.files <= before.files
