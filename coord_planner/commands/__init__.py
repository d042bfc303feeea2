# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The commands of ``coord-planner``, one module each."""

import os

# Linear algebra on one thread, unless somebody has said otherwise: the matrices here are small, and several threads
# only wait for each other (six robots: 16 s of computing on two cores instead of 6). Read when numpy is loaded.
for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")
