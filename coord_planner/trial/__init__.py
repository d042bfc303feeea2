# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Simulated fleets and closed-loop rehearsals, without ROS."""
