# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Coordinated motion planning for several ground robots that turn together."""

__version__ = "0.1.0"
