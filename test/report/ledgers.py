"""Ledgers for the report's tests: sessions driven in the built-in simulator, and made-up ones."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.events import (
    About,
    Episode,
    Event,
    EvidenceImported,
    PairCompared,
    RecordedEpisode,
    SessionConfig,
    VerdictReached,
)
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
        result = batch.simulate(yard, grade, list(places.values()), list(sets.values()), model=DEFAULT_MODEL)
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


def begun(
    config: SessionConfig, about: About | None = None, champion: ParameterSet = DEFAULTS
) -> tuple[Session, list[Event]]:
    """Return a session that has begun on the parcel yard, and its events."""
    yard = parcel_yard()
    session, log = session_of(yard), list[Event]()
    known = about or About(software="fieldnav_ros test", model=DEFAULT_MODEL, yard=yard, place="test bench")
    keep(session, log, session.begin(config, champion, about=known))
    return session, log


def stored(path: Path, log: Sequence[Event]) -> Path:
    """Write events to a ledger, one second of wall time apart."""
    ticks = iter(range(10**9))
    with Ledger.open(
        path, now=lambda: f"2026-01-01T00:{(n := next(ticks)) // 60 % 60:02d}:{n % 60:02d}+00:00"
    ) as ledger:
        ledger.append(log)
    return path


def small(seed: int = 1, minutes: float = 8.0, **told: Any) -> SessionConfig:
    """Return the configuration of a session that the tests can afford."""
    numbers = {"population": 4, "layouts": 2, "least_pairs": 4, "rounds": 2, **told}
    return SessionConfig.model_validate({"seed": seed, "floor_time_s": 60.0 * minutes, "grade": "moving", **numbers})


HASTY = DEFAULTS.model_copy(update={"motion_lead": 0.02, "guard_distance": 0.08, "guard_fade": 0.01})
"""A set that hits carts, so that there are failures to show."""


def by_simulation() -> list[Event]:
    session, log = begun(small(minutes=6.0, pairs_at_once=16, rounds=1), champion=HASTY)
    return drive(session, log, simulated(parcel_yard(), "moving"))


def accepted() -> list[Event]:
    session, log = begun(small(seed=2, minutes=30.0))
    return drive(session, log, made_up(failing=0.05, gain=3.5))


def kept() -> list[Event]:
    session, log = begun(small(seed=3, minutes=12.0, rounds=1))
    return drive(session, log, made_up(failing=0.3, gain=-1.0))


def only_begun() -> list[Event]:
    return begun(small())[1]


def one_episode() -> list[Event]:
    session, log = begun(small())
    return drive(session, log, made_up(failing=0.0), at_most=1)


def only_void() -> list[Event]:
    session, log = begun(small())
    for _ in range(5):
        void = Outcome(kind=OutcomeKind.VOID, time=1.5)
        keep(session, log, session.record(session.pending()[0].id, void, 3.5, "/judge_node"))
    return log


def only_failures() -> list[Event]:
    session, log = begun(small(minutes=10.0))
    return drive(session, log, made_up(failing=1.0))


def cut_in_search() -> list[Event]:
    session, log = begun(small(minutes=20.0))
    return drive(session, log, made_up(), at_most=17)


def cut_in_verdict() -> list[Event]:
    session, log = begun(small(seed=5, minutes=12.0))
    runner = made_up(failing=0.1, gain=0.5)
    while sum(event.kind == "pair_compared" for event in log) < 3:
        drive(session, log, runner, at_most=1)
    return drive(session, log, runner, at_most=1)


def troubled() -> list[Event]:
    """Return a session with everything that can happen beside plain episodes."""
    session, log = begun(small(seed=6, minutes=14.0))
    runner = made_up(failing=0.2, gain=0.5)
    drive(session, log, runner, at_most=3)
    keep(session, log, session.void(session.pending()[0].id, "operator at the pit"))
    keep(session, log, session.spend(45.0, "battery changed"))
    keep(session, log, session.note("tuner", f"episode {session.pending()[0].id}: no outcome in time, run again"))
    keep(session, log, session.record(1, Outcome(kind=OutcomeKind.ARRIVED, time=2.0), 4.0, "judge"))
    keep(session, log, session.pause())
    keep(session, log, session.resume())
    while not (session.state.last_scored and session.state.generations):
        drive(session, log, runner, at_most=1)
    keep(session, log, session.void(source="operator"))  # takes the closed generation back
    drive(session, log, runner)
    return log


def verdict_taken_back() -> list[Event]:
    """Return a session whose accepting pair was voided: what followed from it is gone, the round is open again."""
    session, log = begun(small(seed=2, minutes=30.0))
    runner = made_up(failing=0.0, gain=3.5)
    while not any(event.kind == "champion_changed" for event in log):
        drive(session, log, runner, at_most=1)
    keep(session, log, session.void(source="marshal"))
    void = Outcome(kind=OutcomeKind.VOID, time=1.5)
    keep(session, log, session.record(session.pending()[0].id, void, 3.5, "/judge_node"))
    return log


def without_about() -> list[Event]:
    yard = parcel_yard()
    session, log = session_of(yard), list[Event]()
    keep(session, log, session.begin(small(seed=8)))
    return drive(session, log, made_up(), at_most=40)


def curriculum() -> list[Event]:
    """Return a session bounded by episodes that goes through an easier grade first."""
    lead_in = ({"grade": "parked", "time_limit": 7.0},)
    session, log = begun(small(seed=10, episodes=80, lead_in=lead_in, pairs_at_once=20))
    run = {grade: simulated(parcel_yard(), grade) for grade in ("parked", "moving")}
    while episodes := session.pending():
        grade = "parked" if episodes[0].time_limit == 7.0 else "moving"
        drive(session, log, run[grade], at_most=len(episodes))
    return log


def huge_evidence() -> list[Event]:
    """Return a session whose e-values no float holds: the fold takes the evidence as it stands in the record."""
    result = list[Event]()
    for event in accepted():
        if isinstance(event, (PairCompared, VerdictReached)):
            event = event.model_copy(update={"log_evidence": 1e3 * event.log_evidence})
        result.append(event)
    return result


def hostile() -> list[Event]:
    """Return a session whose every free text tries to get out of the page."""
    bad = "</style></title><script>alert(1)</script><img src=x onerror=alert(2)>\"'&{{7*7}}{% raw %}"
    yard = parcel_yard().model_copy(update={"name": bad[:80]})
    session, log = begun(small(seed=11), About(software=bad, model=bad, yard=yard, place=bad))
    keep(session, log, session.note(bad, "long word: " + "x" * 1500))
    keep(session, log, session.note("\u202e right to left", bad + "\n\x00\x1b[31m"))
    keep(session, log, session.void(session.pending()[0].id, bad))
    keep(session, log, session.record(10**6, Outcome(kind=OutcomeKind.ARRIVED, time=1.0), 1.0, bad))
    keep(session, log, session.stop(bad))
    return log


def with_recordings() -> list[Event]:
    """Return a session that began with recordings of three sets, one of them on another grade."""
    yard = parcel_yard()
    session, log = session_of(yard), list[Event]()
    for number, grade in enumerate(("moving", "moving", "empty")):
        parameters = DEFAULTS.model_copy(update={"steer_gain": 5.0 + number})
        episodes = tuple(
            RecordedEpisode(bag=f"{n}.a.1", outcome=Outcome(kind=OutcomeKind.ARRIVED, time=4.5 + n), cost=4.5 + n)
            for n in range(3 + number)
        )
        event = EvidenceImported(
            source="home.ledger", model=DEFAULT_MODEL, grade=grade, time_limit=10.0, set_id=f"s{number}",
            parameters=parameters, episodes=episodes,
        )  # fmt: skip
        keep(session, log, [event])
    about = About(software="fieldnav_ros test", model=DEFAULT_MODEL, yard=yard, place="test bench")
    keep(session, log, session.begin(small(seed=12), about=about))
    return drive(session, log, made_up(), at_most=1)


ZOO: dict[str, Callable[[], list[Event]]] = {
    "empty": list,
    "only_begun": only_begun,
    "one_episode": one_episode,
    "only_void": only_void,
    "only_failures": only_failures,
    "cut_in_search": cut_in_search,
    "cut_in_verdict": cut_in_verdict,
    "kept": kept,
    "accepted": accepted,
    "troubled": troubled,
    "verdict_taken_back": verdict_taken_back,
    "without_about": without_about,
    "curriculum": curriculum,
    "huge_evidence": huge_evidence,
    "hostile": hostile,
    "with_recordings": with_recordings,
    "by_simulation": by_simulation,
}
