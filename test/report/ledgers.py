"""Ledgers for the report's tests: sessions driven in the built-in simulator, and made-up ones."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

import numpy as np

from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.events import About, Episode, Event, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Report, Session
from fieldnav_ros.world import batch, layouts
from fieldnav_ros.yard import Yard, load_yard

RESET_S = 2.0
Runner = Callable[[Sequence[Episode]], list[Outcome]]


def parcel_yard() -> Yard:
    return load_yard(config_path("yards/parcel_yard.yaml"))


def simulated(yard: Yard, grade: str) -> Runner:
    """Return a runner that runs episodes in the built-in simulator."""

    def run(episodes: Sequence[Episode]) -> list[Outcome]:
        sets = {item.set_id: item.parameters for item in episodes}
        places = {item.layout.seed: item.layout for item in episodes}
        names, seeds = list(sets), list(places)
        result = batch.simulate(yard, grade, list(places.values()), list(sets.values()))
        return [result.outcome(names.index(item.set_id), seeds.index(item.layout.seed)) for item in episodes]

    return run


def made_up(failing: float = 0.3, gain: float = 1.0) -> Runner:
    """Return a runner without a robot: challengers are faster by ``gain`` s; ``failing`` is the share of failures."""
    failures = (OutcomeKind.TIMEOUT, OutcomeKind.CONTACT, OutcomeKind.OFF_FLOOR)

    def run(episodes: Sequence[Episode]) -> list[Outcome]:
        result = []
        for item in episodes:
            chance, which, time = np.random.default_rng((item.layout.seed, item.id)).random(3)
            faster = gain if item.role == "challenger" else 0.0
            if chance < failing:
                kind = failures[int(3 * which)]
                seconds = item.time_limit if kind is OutcomeKind.TIMEOUT else 1.0 + time
            else:
                kind, seconds = OutcomeKind.ARRIVED, max(4.0 + time - faster, 0.1)
            result.append(Outcome(kind=kind, time=float(seconds)))
        return result

    return run


def session_of(yard: Yard) -> Session:
    def draw(grade: str, seed: int) -> Layout:
        return layouts.draw(yard, grade, np.random.default_rng(seed))

    return Session(draw)


def drive(
    session: Session, log: list[Event], runner: Runner, at_most: int = 100_000, together: int = 1000
) -> list[Event]:
    """Run pending episodes, at most so many and so many at once, and return the log."""
    done = 0
    while done < at_most and (episodes := session.pending()[: min(together, at_most - done)]):
        reports = [
            Report(item.id, outcome, outcome.time + RESET_S) for item, outcome in zip(episodes, runner(episodes))
        ]
        keep(session, log, session.record_all(reports))
        done += len(reports)
    return log


def keep(session: Session, log: list[Event], events: Iterable[Event]) -> None:
    for event in events:
        log.append(event)
        session.apply(event)


def begun(config: SessionConfig, about: About | None = None) -> tuple[Session, list[Event]]:
    """Return a session that has begun on the parcel yard, and its events."""
    yard = parcel_yard()
    session, log = session_of(yard), list[Event]()
    known = about or About(software="fieldnav_ros test", model="published", yard=yard, place="test bench")
    keep(session, log, session.begin(config, about=known))
    return session, log


def stored(path: Path, log: Sequence[Event]) -> Path:
    """Write events to a ledger, one second of wall time apart."""
    ticks = iter(range(10**9))
    with Ledger.open(
        path, now=lambda: f"2026-01-01T00:{(n := next(ticks)) // 60 % 60:02d}:{n % 60:02d}+00:00"
    ) as ledger:
        ledger.append(log)
    return path
