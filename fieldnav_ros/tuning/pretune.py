"""Preparing at home: a session whose floor is the batched simulator. Pure; workers and files are the caller's.

A generation is one ``Work``: all its sets on all its layouts, each layout with a plant of its own from the yard's
ranges, so that what is learnt covers robots like this one. A work can be run whole or in parts, here or elsewhere;
the outcomes are the same, bit for bit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Outcome
from fieldnav_ros.tuning.config import LEAST_EPISODES, SessionConfig, Stage
from fieldnav_ros.tuning.events import Episode, Event
from fieldnav_ros.tuning.session import Report, Session
from fieldnav_ros.world import layouts
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Yard

MODEL = DEFAULT_MODEL
POPULATIONS = (10, 16)
"""Sets in a generation, below LARGE episodes and from there on."""
LARGE = 10_000
LAYOUTS = (4, 32)
"""Layouts in a generation: few where the budget is small, so that there are generations enough.

With 1,875 episodes 10 sets on 4 layouts end at 2.05 and 1.86 s (two seeds), 16 on 8 at 2.21 and 2.16 s, and without
the easier grades 10 on 8 at 2.27 s (``test/benchmark/sample_efficiency.py`` has the scene).
"""
GENERATIONS = 75
VERDICT_SHARE = 0.1


Runner = Callable[[Work], Sequence[BatchResult]]
"""Runs a work, in parts or whole, and returns the results of its parts in order."""


def pretune_config(yard: Yard, episodes: int, seed: int) -> SessionConfig:
    """Return the configuration for preparing on a yard: its grades from the easiest on, in the yard's order."""
    if episodes < LEAST_EPISODES:
        raise InputError.of("number of episodes", episodes, f"at least {LEAST_EPISODES}")
    stages = [Stage(grade=name, time_limit=grade.time_limit) for name, grade in yard.grades.items()]
    last = stages[-1]
    population = POPULATIONS[episodes >= LARGE]
    places = min(max(episodes // (GENERATIONS * population), LAYOUTS[0]), LAYOUTS[1])
    return SessionConfig(
        seed=seed, floor_time_s=episodes * last.time_limit, episodes=episodes, grade=last.grade,
        time_limit=last.time_limit, lead_in=tuple(stages[:-1]), population=population, layouts=places, control=False,
        rounds=1, verdict_share=VERDICT_SHARE, pairs_at_once=100, least_pairs=8, reset_guess_s=0.0,
    )  # fmt: skip


def session_on(yard: Yard) -> Session:
    """Return a session whose layouts come from the yard, each from its own seed."""
    return Session(lambda grade, seed: layouts.draw(yard, grade, np.random.default_rng(seed)))


def pretune(session: Session, yard: Yard, store: Callable[[list[Event]], None], run: Runner) -> None:
    """Drive a session that has begun to its end: run what is pending, ``store`` the events, apply them, again."""
    _follow(session, store, session.advance())
    while episodes := session.pending():
        work = work_of(yard, session, episodes)
        outcomes = _outcomes(work, run(work), episodes)
        _follow(session, store, session.record_all([
            Report(episode.id, outcome, outcome.time, "simulation") for episode, outcome in zip(episodes, outcomes)
        ]))  # fmt: skip


def work_of(yard: Yard, session: Session, episodes: Sequence[Episode]) -> Work:
    """Return the work that covers the episodes: every set of theirs on every layout of theirs."""
    sets = {episode.set_id: episode.parameters for episode in episodes}
    places = {episode.layout.seed: episode.layout for episode in episodes}
    stage = session.state.stage
    return Work(yard, stage.grade, stage.time_limit, tuple(places.values()), tuple(sets.values()), MODEL)


def _outcomes(work: Work, results: Sequence[BatchResult], episodes: Sequence[Episode]) -> list[Outcome]:
    rows: dict[str, int] = {}
    for episode in episodes:
        rows.setdefault(episode.set_id, len(rows))
    places = [(result, column) for result in results for column in range(result.code.shape[1])]
    columns = {layout.seed: place for layout, place in zip(work.layouts, places)}
    found = []
    for episode in episodes:
        result, column = columns[episode.layout.seed]
        found.append(result.outcome(rows[episode.set_id], column))
    return found


def _follow(session: Session, store: Callable[[list[Event]], None], events: list[Event]) -> None:
    store(events)
    session.apply(*events)
