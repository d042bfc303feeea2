# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The tick solver: condensed semismooth Newton steps on the same problem that ocp.py states. Plain numpy."""
