"""The page's sentences: what was decided and why, and what to know before trusting it."""

from __future__ import annotations

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import TABLE
from fieldnav_ros.report.drift import Drift
from fieldnav_ros.report.facts import Facts, Round
from fieldnav_ros.report.scenes import FailureScene
from fieldnav_ros.report.values import (
    Cite,
    Name,
    Sentence,
    Value,
    evidence,
    minutes,
    plain,
    seconds,
    share,
    title_of,
    whole,
)

MANY_VOIDS = 0.1
NEAR_EDGE = 0.02


def decision(facts: Facts) -> list[Sentence]:
    """Return two sentences: what was decided, and why."""
    if facts.begun is None or facts.after is None or facts.before is None:
        return [["No session is recorded in this ledger."], ["Nothing was decided, because nothing was begun."]]
    if facts.changed:
        telling = [item for item in facts.rounds if item.accepted][-1]
        return [
            [Name(facts.after.id), " went into service in place of ", Name(facts.before.id), "."],
            [*_on_average(telling), "; ", *_passed(telling), "."],
        ]
    stays: Sentence = [Name(facts.after.id), " stays in service: ", *_why_not(facts), "."]
    return [stays, _so_far(facts)]


def _why_not(facts: Facts) -> Sentence:
    last = facts.rounds[-1] if facts.rounds else None
    if last is None:
        return ["no challenger was put to the test"] if facts.ended is not None else ["nothing is decided yet"]
    if last.verdict is None:
        return ["the verdict on ", Name(last.challenger.id), " is still open"]
    return [Name(last.challenger.id), " was not shown to be better (", Name(last.verdict.reason), ")"]


def _so_far(facts: Facts) -> Sentence:
    last = facts.rounds[-1] if facts.rounds else None
    if last is not None and last.pairs:
        reached = "passed" if last.log_evidence >= last.log_threshold else "did not reach"
        key = f"round.{last.number}"
        return [
            *_on_average(last),
            "; the evidence, an e‑value of ",
            evidence(f"{key}.log_evidence", last.log_evidence),
            f", {reached} the threshold of ",
            evidence(f"{key}.log_threshold", last.log_threshold),
            ".",
        ]
    if facts.ended is not None:
        return ["The session ended with ", _episodes(facts), " that count: ", Name(facts.ended), "."]
    return ["The record stops after ", _episodes(facts), " that count, before any pair was compared."]


def _episodes(facts: Facts) -> Value:
    return whole("episodes", len(facts.episodes), "episode" if len(facts.episodes) == 1 else "episodes")


def _on_average(item: Round) -> Sentence:
    mean, key = item.mean_difference, f"round.{item.number}"
    pairs = whole(f"{key}.pairs", len(item.pairs), "pair" if len(item.pairs) == 1 else "pairs")
    if mean is None:
        return ["No pair was compared"]
    size = Value(f"{key}.mean_difference", mean, plain(abs(mean)), "s")
    way = "less" if mean >= 0 else "more"
    return ["Over ", pairs, " on the same layouts ", Name(item.challenger.id), " cost ", size, f" {way} on average"]


def _passed(item: Round) -> Sentence:
    key = f"round.{item.number}"
    return [
        "the evidence, an e‑value of ",
        evidence(f"{key}.log_evidence", item.log_evidence),
        ", passed the threshold of ",
        evidence(f"{key}.log_threshold", item.log_threshold),
        ", which a challenger that is no better passes in at most ",
        share(f"{key}.alpha", item.alpha),
        " of sessions",
    ]


def cautions(facts: Facts, scene: FailureScene, drift: Drift | None) -> list[Sentence]:
    """Return what the one who is about to trust the result must know; the order is by weight."""
    if facts.begun is None:
        return []
    found = [*_unfinished(facts), *_simulated(facts, scene), *_rare_failures(facts), *_voids(facts), *_drifting(drift)]
    return [*found, *_at_the_edge(facts), *_reports(facts)]


def _unfinished(facts: Facts) -> list[Sentence]:
    if facts.ended is not None:
        return []
    return [
        [
            "The session has not ended in this record: ",
            whole("open_episodes", facts.open_episodes),
            " opened and not yet run. What stands here may change.",
        ]
    ]


def _simulated(facts: Facts, scene: FailureScene) -> list[Sentence]:
    if scene.repeated:
        return [
            [
                "These are simulated episodes: the built-in simulator repeats ",
                whole("replay.agreed", scene.agreed),
                " of ",
                whole("replay.checked", scene.checked),
                " checked ones to the step. A floor, tyres and a camera of the real kind have had no say in them.",
            ]
        ]
    if facts.about.place == "simulation":
        return [["These are simulated episodes, as the record says. Nothing here has been tried on a robot."]]
    if not facts.about.place:
        return [["The record does not say where it was made. Numbers hold for one floor on one day."]]
    return []


def _rare_failures(facts: Facts) -> list[Sentence]:
    telling = [item for item in facts.rounds if item.accepted]
    if not telling or not telling[-1].pairs:
        return []
    last, key = telling[-1], f"round.{telling[-1].number}"
    runs = [item for item in facts.episodes if item.role == "challenger" and item.set.id == last.challenger.id]
    failed = sum(item.kind is not OutcomeKind.ARRIVED for item in runs)
    if failed:
        return [
            [
                Name(last.challenger.id),
                " failed ",
                whole(f"{key}.challenger_failed", failed),
                " of ",
                whole(f"{key}.challenger_runs", len(runs)),
                " episodes of its verdict: better than the set before is not good.",
            ]
        ]
    if not runs:
        return []
    bound = min(3.0 / len(runs), 1.0)
    return [
        [
            Name(last.challenger.id),
            " failed none of ",
            whole(f"{key}.challenger_runs", len(runs)),
            " episodes of its verdict; that does not rule out that it fails up to ",
            share(f"{key}.rule_of_three", bound),
            " of the time (rule of three: ",
            Cite("Hanley and Lippman-Hand, JAMA 249, 1983"),
            ").",
        ]
    ]


def _voids(facts: Facts) -> list[Sentence]:
    total = len(facts.episodes) + len(facts.voids)
    if len(facts.voids) <= MANY_VOIDS * total:
        return []
    return [
        [
            whole("voids", len(facts.voids)),
            " of ",
            whole("episodes_with_voids", total),
            " episodes are void (",
            share("void_share", len(facts.voids) / total),
            "). The verdict holds only if they were called void before anybody knew which set ran.",
        ]
    ]


def _drifting(drift: Drift | None) -> list[Sentence]:
    if drift is None or not drift.seen:
        return []
    return [
        [
            "The floor drifted: the control's cost changed by ",
            seconds("drift.slope", drift.slope, sign=True),
            " per hundred episodes (standard error ",
            seconds("drift.error", drift.error),
            "). Pairs cancel that; comparisons across the session do not.",
        ]
    ]


def _at_the_edge(facts: Facts) -> list[Sentence]:
    if facts.after is None or not facts.changed:
        return []
    units = {row: row.to_unit(getattr(facts.after.values, row.name)) for row in TABLE}
    edge = [title_of(row) for row, unit in units.items() if min(unit, 1.0 - unit) < NEAR_EDGE]
    if not edge:
        return []
    return [["At the edge of the range: ", ", ".join(edge), ". A better value may lie beyond it."]]


def _reports(facts: Facts) -> list[Sentence]:
    found = list[Sentence]()
    if facts.ignored:
        found.append(
            [whole("ignored", len(facts.ignored)), " reports of outcomes were not counted; they are listed below."]
        )
    if facts.notes:
        found.append([whole("notes", len(facts.notes)), " notes were left in the record; they are listed below."])
    return found


def time_sentence(facts: Facts) -> Sentence:
    """Return what was used of the session's budget: floor time, or episodes where those bound it."""
    config, used = facts.config, facts.spending.total
    if config is None:
        return ["none"]
    if config.episodes is not None:
        run = len(facts.episodes)
        return [
            minutes("floor_time_used", used),
            "; ",
            whole("episodes", run),
            " of ",
            whole("config.episodes", config.episodes),
            " episodes",
        ]
    given = config.floor_time_s
    return [
        minutes("floor_time_used", used),
        " of ",
        minutes("floor_time_given", given),
        " (",
        share("floor_time_share", used / given),
        ")",
    ]
