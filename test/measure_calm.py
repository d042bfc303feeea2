# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Rehearsals without faults: of what is warned all the same? Every manoeuvre of a file that begins from its starts.

    python test/measure_calm.py config/solar_park.yaml 10      # so many seeds; exit status 1 when anything is raised

"plan unfinished" is left out: it tells of the machine that this runs on.
"""

import sys

from coord_planner import config
from coord_planner.commands.campaign import begun_from_starts
from coord_planner.trial.rehearsal import rehearse


def main() -> int:
    configuration, seeds, raised = config.load(sys.argv[1]), int(sys.argv[2]), 0
    for name in begun_from_starts(configuration):
        for seed in range(1, seeds + 1):
            run = rehearse(configuration, name, seed=seed)
            found = [(began, caution) for began, _, caution in run.cautions if caution.code != "plan unfinished"]
            raised += len(found)
            for began, caution in found:
                sys.stdout.write(f"{name}, seed {seed}, {began - run.began:.1f} s: {caution.code}: {caution.text}\n")
        sys.stdout.write(f"{name}: {seeds} rehearsals, {raised} warnings so far\n")
        sys.stdout.flush()
    return 1 if raised else 0


if __name__ == "__main__":
    sys.exit(main())
