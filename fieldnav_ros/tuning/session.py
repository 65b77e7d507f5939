"""The tuner without ROS, clock or file: it is told outcomes and says what to do next.

Event-sourced. A command (``begin``, ``record``, ``void`` ...) returns events and changes nothing; the driver
appends them to the ledger and then applies them. So nothing is acknowledged that the ledger does not hold:

    session = Session(draw)
    session.apply(*ledger.events())            # nothing on a new ledger
    events = session.advance() if session.begun else session.begin(config)
    ledger.append(events); session.apply(*events)
    while not session.ended:
        episode = session.pending()[0]         # put its set in service, run it
        events = session.record(episode.id, outcome, floor_time_s)
        ledger.append(events); session.apply(*events)
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

from fieldnav_ros.model import Layout, Outcome
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.tuning.events import Episode, Event, SessionConfig
from fieldnav_ros.tuning.space import Prior

Draw = Callable[[str, int], Layout]  # (grade, seed) -> layout; must be a function of the two alone


class Report(NamedTuple):
    """An outcome on its way in. ``floor_time_s`` is the episode with its reset."""

    episode_id: int
    outcome: Outcome
    floor_time_s: float
    source: str = "judge"


class InService(NamedTuple):
    """The set that the robot must carry now."""

    set_id: str
    parameters: ParameterSet


class Session:
    """One tuning session as a fold over its events."""

    def __init__(self, draw: Draw | None = None) -> None:
        """``draw`` makes layouts; a reader that takes no decisions can leave it out."""
        raise NotImplementedError

    # -- state
    def apply(self, *events: Event) -> None:
        """Fold events into the state. InputError where one cannot follow the events before it."""

    @property
    def begun(self) -> bool: ...  # type: ignore[empty-body]
    @property
    def ended(self) -> bool: ...  # type: ignore[empty-body]
    @property
    def config(self) -> SessionConfig: ...  # type: ignore[empty-body]
    @property
    def champion(self) -> InService: ...  # type: ignore[empty-body]

    def pending(self) -> list[Episode]:  # type: ignore[empty-body]
        """Episodes that can be run now, in this order; none while paused, released or ended."""

    def in_service(self) -> InService:  # type: ignore[empty-body]
        """The set of the first pending episode, or the champion where there is none."""

    def summary(self) -> dict[str, object]:  # type: ignore[empty-body]
        """Plain numbers for a status line."""

    def prior(self) -> Prior:  # type: ignore[empty-body]
        """What the search has learnt so far."""

    # -- commands: each returns events and changes nothing
    def begin(  # type: ignore[empty-body]
        self, config: SessionConfig, champion: ParameterSet = DEFAULTS, prior: Prior | None = None
    ) -> list[Event]: ...

    def advance(self) -> list[Event]:  # type: ignore[empty-body]
        """Decisions that are due; empty unless a crash parted an outcome from what follows from it."""

    def record(  # type: ignore[empty-body]
        self, episode_id: int, outcome: Outcome, floor_time_s: float, source: str = "judge"
    ) -> list[Event]: ...

    def record_all(self, reports: Sequence[Report]) -> list[Event]: ...  # type: ignore[empty-body]
    def void(self, episode_id: int | None = None, source: str = "operator") -> list[Event]: ...  # type: ignore[empty-body]
    def pause(self) -> list[Event]: ...  # type: ignore[empty-body]
    def resume(self) -> list[Event]: ...  # type: ignore[empty-body]
    def release(self) -> list[Event]: ...  # type: ignore[empty-body]
    def spend(self, seconds: float, why: str) -> list[Event]: ...  # type: ignore[empty-body]
    def note(self, source: str, text: str) -> list[Event]: ...  # type: ignore[empty-body]
    def stop(self, reason: str) -> list[Event]: ...  # type: ignore[empty-body]
