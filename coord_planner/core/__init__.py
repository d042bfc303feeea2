# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Pure planning code: no files, no clock, no ROS. Time and randomness are passed in."""
