# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How kernels are compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba

# Sums may be reordered and multiplied-and-added at once; but infinities and what is no number keep their meaning.
_SUMS = {"contract", "reassoc", "nsz", "arcp"}
OPTIONS: dict[str, Any] = {"error_model": "numpy", "nogil": True, "fastmath": _SUMS}

# For kernels that only kernels call: without what would let Python call them, they compile in half the time.
inner: Callable[[Callable[..., Any]], Any] = numba.njit(no_cpython_wrapper=True, no_cfunc_wrapper=True, **OPTIONS)
