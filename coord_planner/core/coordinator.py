"""The receding-horizon loop: Snapshot in, Decision out (interface; the body follows)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any, Optional

from .fleet import Fleet
from .graph import NeighbourGraph
from .manoeuvre import Manoeuvre
from .messages import Answer, Command, Decision, Snapshot, State
from .settings import Settings

Job = Callable[[], Any]  # pure, slow, may run in any thread; its result goes to Coordinator.deliver


class Coordinator:
    """Drives one fleet through manoeuvres.

    Who calls what:
      * ``step(snapshot)`` at ``settings.horizon.rate``, in a worker thread (it solves).
      * ``commands(now)`` at ``settings.commands.rate``, from a timer; fast; passes the last gate and
        remembers what was sent. Returns None when nothing is to be published (idle, planning).
      * all requests (``begin``, ``halt``, ``resume``, ``abandon``, ``change``) from any thread; fast.
      * ``jobs()`` after every request and every step: slow work (making references). The caller
        runs each job in a thread of its choice and hands the result to ``deliver(result, now)``.
    """

    def __init__(self, fleet: Fleet, graph: NeighbourGraph, settings: Settings,
                 manoeuvres: Mapping[str, Manoeuvre]) -> None: ...

    @property
    def state(self) -> State: ...

    @property
    def decision(self) -> Decision:
        """The newest decision."""
        ...

    def step(self, snapshot: Snapshot) -> Decision: ...

    def commands(self, now: float) -> Optional[dict[str, Command]]: ...

    def begin(self, name: str, snapshot: Snapshot, *, overrides: Mapping[str, float] | None = None,
              request_id: str = "", answered: Callable[[Answer], None] = lambda _answer: None) -> None:
        """Ask for a manoeuvre. ``answered`` is called once: when it was refused or when it begins."""

    def halt(self, now: float, reason: str) -> Answer:
        """A controlled stop of everyone; the fleet is then held."""
        ...

    def resume(self, snapshot: Snapshot, answered: Callable[[Answer], None]) -> None:
        """Go on with a held manoeuvre, from where the robots stand."""

    def abandon(self, now: float) -> Answer:
        """Give up a held manoeuvre; the fleet is idle afterwards."""
        ...

    def change(self, now: float, *, settings: Settings | None = None, fleet: Fleet | None = None,
               graph: NeighbourGraph | None = None) -> None:
        """New settings, limits or neighbours; in motion the rest of the reference is made anew and swapped in."""

    def jobs(self) -> list[Job]: ...

    def deliver(self, result: Any, now: float) -> None: ...
