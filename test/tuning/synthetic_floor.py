"""A floor without a robot: costs from the distance to a best set in the unit cube, with noise and failures."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from fieldnav_ros.model import Layout, Outcome, OutcomeKind, Pose
from fieldnav_ros.tuning.events import Episode, Event, SessionConfig
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.tuning.space import SPACE, Prior

BEST = np.array([0.3, 0.7, 0.4, 0.5, 0.7, 0.3, 0.8, 0.6, 0.3])
RESET_S = 2.0


def draw(grade: str, seed: int) -> Layout:
    """Draw a layout that is a function of its seed alone."""
    rng = np.random.default_rng(seed)
    y = rng.uniform(0.2, 1.4, 2)
    return Layout(start=Pose(x=0.3, y=float(y[0]), yaw=0.0), goal=Pose(x=2.0, y=float(y[1]), yaw=0.0), seed=seed)


def run(episode: Episode) -> Outcome:
    """Run an episode: slower and more often failing the farther its set is from BEST; the same again each time."""
    far = float(((SPACE.to_unit(episode.parameters) - BEST) ** 2).sum())
    chance, kind, time = np.random.default_rng((episode.layout.seed, 1)).random(3)
    if chance < min(0.9, 0.01 + 0.5 * far):
        timeout = kind < 0.3
        return Outcome(
            kind=OutcomeKind.TIMEOUT if timeout else OutcomeKind.CONTACT,
            time=episode.time_limit if timeout else float(1 + 3 * time),
        )
    return Outcome(kind=OutcomeKind.ARRIVED, time=float(min(1.2 + time + 2 * far, episode.time_limit)))


def finish(
    session: Session, log: list[Event], runner: Callable[[Episode], Outcome] = run, at_most: int = 100_000
) -> None:
    """Drive a session episode by episode as a node does, to its end or for so many episodes."""
    commit(session, log, session.advance())
    for _ in range(at_most):
        if not (episodes := session.pending()):
            return
        outcome = runner(episodes[0])
        commit(session, log, session.record(episodes[0].id, outcome, outcome.time + RESET_S))


def commit(session: Session, log: list[Event], events: list[Event]) -> None:
    """Store, then apply."""
    log.extend(events)
    session.apply(*events)


def started(config: SessionConfig, prior: Prior | None = None) -> tuple[Session, list[Event]]:
    """Begin a session; return it with its events."""
    session, log = Session(draw), list[Event]()
    commit(session, log, session.begin(config, prior=prior))
    return session, log


def replayed(log: list[Event]) -> Session:
    """Return a session folded from events."""
    session = Session(draw)
    session.apply(*log)
    return session
