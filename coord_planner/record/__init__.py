# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Runs to and from files, their figures and their pages."""
