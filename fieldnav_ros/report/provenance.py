"""Where a record comes from: software, seed, yard, plant, hash; and several sessions side by side."""

from __future__ import annotations

from typing import Any

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import TABLE
from fieldnav_ros.report.facts import Facts
from fieldnav_ros.report.record import Record
from fieldnav_ros.report.style import WORDS
from fieldnav_ros.report.values import (
    Name,
    Sentence,
    Value,
    bound,
    evidence,
    minutes,
    seconds,
    setting,
    share,
    title_of,
    unit_of,
    whole,
)
from fieldnav_ros.report.wording import time_sentence
from fieldnav_ros.tuning.config import SessionConfig

Rows = list[tuple[str, Sentence]]


def title_block(record: Record) -> Rows:
    """Return what stands at the head of the page."""
    found, origin = record.facts, record.origin
    about = found.about
    return [
        ("yard", [Name(about.yard.name)] if about.yard else ["not recorded"]),
        ("place", [Name(about.place)] if about.place else ["not recorded"]),
        ("in service", [Name(found.after.id)] if found.after else ["nothing"]),
        ("episodes that count", [whole("episodes", len(found.episodes))]),
        ("floor time used", time_sentence(found)),
        ("recorded", [Name(_span(origin.first, origin.last))] if origin.first else ["never"]),
    ]


def _day(wall_time: str) -> str:
    return wall_time[:16].replace("T", " ") + " UTC"


def _span(first: str, last: str) -> str:
    first, last = _day(first), _day(last)
    same = first[:10] == last[:10]
    return f"{first.removesuffix(' UTC')} to {last[11:] if same else last}"


def groups(record: Record) -> list[tuple[str, Rows]]:
    """Return everything the record says of its making, in groups."""
    return [("Ledger", _file(record)), *_session(record.facts), *_yard(record.facts)]


def _file(record: Record) -> Rows:
    origin, about = record.origin, record.facts.about
    return [
        ("file", [Name(origin.file)]),
        ("events", [whole("events", origin.events)]),
        ("first event", [Name(origin.first or "none")]),
        ("last event", [Name(origin.last or "none")]),
        ("hash of the last event, which seals all before it", [Name(origin.head or "none")]),
        ("SHA-256 of the file", [Name(origin.sha256)]),
        ("software", [Name(about.software or "not recorded")]),
        ("field", [Name(about.model or "not recorded")]),
        ("place", [Name(about.place or "not recorded")]),
    ]


def _session(facts: Facts) -> list[tuple[str, Rows]]:
    config, begun = facts.config, facts.begun
    if config is None or begun is None:
        return []
    rows: Rows = [
        ("seed", [whole("config.seed", config.seed)]),
        ("grade", [Name(config.grade)]),
        ("time limit", [seconds("config.time_limit", config.time_limit)]),
        (
            "floor time",
            [minutes("config.floor_time", config.floor_time_s)] if config.episodes is None else ["unbounded"],
        ),
        ("episodes", ["unbounded"] if config.episodes is None else [whole("config.episodes", config.episodes)]),
        ("grades before that", _lead_in(config)),
        ("share of it kept for the verdict", [share("config.verdict_share", config.verdict_share)]),
        ("bound on false acceptance, whole session", [share("config.alpha", config.alpha)]),
        ("most verdicts", [whole("config.rounds", config.rounds)]),
        ("fewest pairs", [whole("config.least_pairs", config.least_pairs)]),
        (
            "sets per generation",
            [whole("config.population", config.population)] if config.population else ["the search's own"],
        ),
        ("layouts per generation", [whole("config.layouts", config.layouts)]),
        ("first step of the search", [bound("config.sigma", config.sigma)]),
        ("control in every block", ["yes" if config.control else "no"]),
        (
            "prior",
            [bound("prior.episodes", begun.prior.episodes), " episodes: ", Name(begun.prior.learnt_from or "not said")]
            if begun.prior
            else ["none"],
        ),
        ("earlier recordings", _recordings(facts)),
        ("ended", [Name(facts.ended)] if facts.ended is not None else ["not in this record"]),
    ]
    return [("Session", rows)]


def _recordings(facts: Facts) -> Sentence:
    found = facts.recordings
    if not found.episodes:
        return ["none"]
    names: Sentence = [part for name in found.sources for part in (", ", Name(name))]
    return [
        whole("recordings.episodes", found.episodes), " episodes of ", whole("recordings.sets", found.sets),
        " sets, from ", *names[1:], "; ", whole("recordings.used", found.used),
        " under this session's conditions, for its plan and the start of its search; no verdict rests on them",
    ]  # fmt: skip


def _lead_in(config: SessionConfig) -> Sentence:
    if not config.lead_in:
        return ["none"]
    parts = list[str | Value | Name]()
    for number, stage in enumerate(config.lead_in):
        parts += [", " if number else "", Name(stage.grade), " to ", seconds(f"lead_in.{number}", stage.time_limit)]
    return parts


def _yard(facts: Facts) -> list[tuple[str, Rows]]:
    yard = facts.about.yard
    if yard is None:
        return []
    floor, robot, plant = yard.floor, yard.robot, yard.plant
    n = bound
    return [
        (
            "Yard",
            [
                ("name", [Name(yard.name)]),
                (
                    "floor",
                    [
                        n("yard.x0", floor.x[0]),
                        " to ",
                        n("yard.x1", floor.x[1], "m"),
                        " by ",
                        n("yard.y0", floor.y[0]),
                        " to ",
                        n("yard.y1", floor.y[1], "m"),
                        ", walled" if floor.walled else ", without walls",
                    ],
                ),
                ("robot's radius", [n("yard.radius", robot.radius, "m")]),
                ("track", [n("yard.track", robot.track, "m")]),
                ("wheel speed, at most", [n("yard.wheel_speed", robot.wheel_speed, "m/s")]),
                ("wheel acceleration, at most", [n("yard.wheel_accel", robot.wheel_accel, "m/s²")]),
                (
                    "arrived within",
                    [
                        n("yard.position", yard.arrival.position, "m"),
                        " and ",
                        n("yard.heading", yard.arrival.heading, "rad"),
                    ],
                ),
                ("reset", [seconds("yard.reset_time", yard.reset_time)]),
            ],
        ),
        (
            "Plant, in simulation",
            [
                ("wheel acceleration, real over nominal", [n("plant.accel_scale", plant.accel_scale)]),
                ("command delay", [n("plant.command_delay", plant.command_delay, "s")]),
                ("wheel mismatch", [n("plant.wheel_mismatch", plant.wheel_mismatch)]),
                ("slip", [n("plant.slip", plant.slip)]),
                ("noise of position", [n("plant.pose_noise", plant.pose_noise, "m")]),
                ("noise of yaw", [n("plant.yaw_noise", plant.yaw_noise, "rad")]),
                ("share of poses lost", [n("plant.pose_loss", plant.pose_loss)]),
                ("poses", [n("plant.pose_rate", plant.pose_rate, "1/s")]),
            ],
        ),
    ]


def letter(index: int) -> str:
    """Return a session's letter: A for the ledger that the page is about."""
    return chr(ord("A") + index) if index < 26 else f"session {index + 1}"


def side_by_side(records: list[Record]) -> list[dict[str, Any]]:
    """Return one column for each session, all with the same rows."""
    return [
        {"letter": letter(i), "file": item.origin.file, "rows": _column(letter(i), item)}
        for i, item in enumerate(records)
    ]


def _column(key: str, record: Record) -> Rows:
    found, origin = record.facts, record.origin
    about, last = found.about, found.rounds[-1] if found.rounds else None
    failed = [
        (WORDS[kind], found.count(kind)) for kind in OutcomeKind if kind not in (OutcomeKind.ARRIVED, OutcomeKind.VOID)
    ]
    mean = last.mean_difference if last else None
    control = [item.cost for item in found.episodes if item.role == "control"]
    rows: Rows = [
        ("place", [Name(about.place or "not recorded")]),
        ("yard", [Name(about.yard.name if about.yard else "not recorded")]),
        ("recorded", [Name(_day(origin.first))] if origin.first else ["never"]),
        ("last event's hash", [Name(origin.head[:12] or "none")]),
        ("in service", [Name(found.after.id)] if found.after else ["nothing"]),
        ("last verdict", [_verdict_of(found)]),
        ("mean difference", [seconds(f"{key}.mean_difference", mean, sign=True)] if mean is not None else ["none"]),
        (
            "evidence",
            [
                evidence(f"{key}.log_evidence", last.log_evidence),
                " of ",
                evidence(f"{key}.log_threshold", last.log_threshold),
            ]
            if last
            else ["none"],
        ),
        (
            "episodes",
            [whole(f"{key}.episodes", len(found.episodes)), ", void ", whole(f"{key}.voids", len(found.voids))],
        ),
        (
            "failures",
            [
                part
                for word, count in failed
                for part in (f"{word} ", whole(f"{key}.{word.replace(' ', '_')}", count), ", ")
            ][:-1],
        ),
        ("mean cost of the control", [seconds(f"{key}.control", sum(control) / len(control))] if control else ["none"]),
        ("floor time used", [minutes(f"{key}.floor_time_used", found.spending.total)]),
    ]
    for row in TABLE:
        value: Sentence = ["none"]
        if found.after:
            number = setting(f"{key}.{row.name}", getattr(found.after.values, row.name))
            value = [Value(number.fact, number.full, number.text, unit_of(row))]
        rows.append((title_of(row), value))
    return rows


def _verdict_of(found: Facts) -> str:
    last = found.rounds[-1] if found.rounds else None
    return "none" if last is None else last.verdict.verdict if last.verdict else "open"
