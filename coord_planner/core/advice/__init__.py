# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""What the neighbour graph and the coupling do, worked out before anything is driven.

    copying.py      how much of a led robot's turning each other robot copies, robot by robot and hop by hop
    agreement.py    what a disagreement is reduced to, mode by mode
    links.py        which links and robots hold the graph together, and what further links would gain
    choosing.py     the smallest coupling with which far robots copy enough
    strength.py     a coupling that does nothing, or more than a tick can be trusted with
    conditions.py   where the copying law does not hold for a manoeuvre
    measuring.py    copying as it came out, in a plan or in a run
"""
