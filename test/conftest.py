# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""How hypothesis searches: the same examples every time, unless asked to look for new ones."""

from hypothesis import settings

# No deadline: a busy machine is not a mistake.
settings.register_profile("steady", derandomize=True, deadline=None)
settings.register_profile("search", max_examples=1000, deadline=None)
settings.load_profile("steady")
