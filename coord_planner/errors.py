# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The exception tree: every error that a user can cause says what to do about it."""


class CoordPlannerError(Exception):
    """Base of all errors that this package raises on purpose; its text is meant for people."""


class SettingsError(CoordPlannerError):
    """A parameter file or a parameter value that cannot be used.

    The text names the file, the key, the value that was given and what is allowed.
    """

    def __init__(self, problem: str, *, key: str = "", file: str = "", allowed: str = "") -> None:
        self.problem, self.key, self.file, self.allowed = problem, key, file, allowed
        where = ": ".join(part for part in (file, key) if part)
        text = f"{where}: {problem}" if where else problem
        super().__init__(f"{text}; allowed: {allowed}" if allowed else text)


class RefusedError(CoordPlannerError):
    """A request that cannot be kept; nothing has moved because of it.

    ``case`` is the program (core.case.PlannerCase) whose solution was not good enough, where one was solved.
    """

    def __init__(self, reason: str, remedy: str) -> None:
        self.reason, self.remedy = reason, remedy
        self.case: object = None
        super().__init__(f"{reason}; {remedy}")


class ArrivedError(RefusedError):
    """There is nothing to drive: every robot is where it is to end."""


class SolveError(CoordPlannerError):
    """An optimisation gave no usable plan."""
