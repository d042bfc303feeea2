# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Many rehearsals: what is varied, the rehearsals that follow from it, and what they say together.

    axes.py          values that a parameter goes through
    plan.py          a sweep as data, and its points: each one rehearsal
    file.py          a sweep file (YAML) -> a sweep; everything wrong with it is told before anything runs
    faults.py        faults as a file lists them
    point.py         one point -> one record, whatever happens to it
    journal.py       records as they come, so that a sweep that was killed goes on where it stopped
    table.py         records -> a table, Parquet or CSV
    local.py         on this machine's cores
    cluster.py       on a Dask cluster
    choice.py        figures of each setting, which of them keep the rules, the best, the trade-off front
    sensitivity.py   which parameters matter
"""
