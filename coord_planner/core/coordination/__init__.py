# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The parts of the coordinator: functions over one shared situation, called under its lock."""
