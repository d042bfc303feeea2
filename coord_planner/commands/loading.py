# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""A parameter file with the values that the command line sets in it."""

from __future__ import annotations

from collections.abc import Sequence

import attrs

from .. import config


def configured(params: str, entries: Sequence[str]) -> config.Configuration:
    """The file, with each ``KEY=VALUE`` in force; SettingsError for a file or a value that cannot be used."""
    configuration = config.load(params)
    if not entries:
        return configuration
    changed = config.from_parameters(config.set_values(configuration.flat, entries), f"{params} with --set")
    return attrs.evolve(changed, file=params)
