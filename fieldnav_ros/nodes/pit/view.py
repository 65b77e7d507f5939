"""What the terminal beside the floor says, as plain words: no terminal, no ROS, no clock in here."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.nodes.payloads import PastEpisode, TunerStatus

SILENCE = 3.0
"""Seconds without a status after which the tuner counts as not heard."""
OLD_POSE = 0.5
"""Seconds from which on the age of the pose is something to look at."""
BAR = 20
RULES = "The yard's limits bind every set that is tried. Local rules and the marshals come first."
BANNERS = {
    "idle": "READY TO BEGIN",
    "waiting": "WAITING FOR GUIDANCE",
    "running": "EPISODES RUN",
    "driving": "ROBOT DRIVES TO ITS START",
    "placing": "PLACE THE ROBOT",
    "paused": "PAUSED",
    "released": "MATCH: CHAMPION IS IN SERVICE",
    "ended": "SESSION OVER: CHAMPION IS IN SERVICE",
    "observing": "MATCH: WATCHING ONLY",
}
OUTCOME_KEYS = {
    "a": OutcomeKind.ARRIVED, "c": OutcomeKind.CONTACT, "t": OutcomeKind.TIMEOUT, "o": OutcomeKind.OFF_FLOOR,
}  # fmt: skip
SERVICE_KEYS = {"b": "begin", "p": "pause", "v": "void_last", "r": "release"}
WORDS = {"arrived": "arrived", "timeout": "timeout", "contact": "contact", "off_floor": "off floor", "void": "void"}


@dataclass(frozen=True)
class Heard:
    """What the terminal has to go by: the newest status, its age (s), other nodes' troubles, the last key's answer."""

    status: TunerStatus | None
    age: float = 0.0
    troubles: tuple[str, ...] = ()
    answer: str = ""
    calling: bool = False
    """Whether a match call is on its way and has not been confirmed."""
    watch_only: bool = False


class Row(NamedTuple):
    """A labelled line; where room is short those with the smallest weight go first."""

    label: str
    text: str
    weight: int


class View(NamedTuple):
    """The whole of what is shown."""

    banner: str
    alarm: bool
    clock: str
    of: str
    todo: str
    rows: tuple[Row, ...]
    warnings: tuple[str, ...]
    answer: str
    keys: str


def view_of(heard: Heard) -> View:
    """Return what to show."""
    status = heard.status
    if status is None:
        return View(
            "NO TUNER HEARD", True, "--:--", "", "Waiting for tuner/status: is tuner_node running, in this ROS domain "
            "and namespace?", (), heard.troubles, heard.answer, keys_of(None, heard.watch_only),
        )  # fmt: skip
    banner, alarm = _banner(heard, status)
    of = "" if status.floor_time is None else f"of {clock_of(status.floor_time)} floor time left"
    todo = f"Nothing heard from the tuner for {heard.age:.0f} s." if heard.age > SILENCE else status.todo
    return View(
        banner, alarm, clock_of(status.floor_time_left), of, todo, tuple(_rows(status)),
        (*status.warnings, *heard.troubles), heard.answer, keys_of(status, heard.watch_only),
    )  # fmt: skip


def keys_of(status: TunerStatus | None, watch_only: bool) -> str:
    """Return the keys that do something now."""
    if watch_only:
        return "watching only    q leave"
    words = ["r MATCH CALL", "b begin", "p pause", "v does not count"]
    if status is not None and status.outcomes == "operator":
        words += ["a arrived", "c contact", "t timeout", "o off floor"]
    return "   ".join([*words, "q leave"])


def clock_of(seconds: float) -> str:
    """Return minutes and seconds, as 8:05; overdrawn time with a minus."""
    whole = math.ceil(abs(seconds) - 1e-9) if seconds >= 0 else math.floor(abs(seconds))
    sign = "-" if seconds < 0 and whole else ""
    return f"{sign}{whole // 60}:{whole % 60:02d}"


def line_of(heard: Heard) -> str:
    """Return all that matters in one line, for terminals without a screen."""
    view, status = view_of(heard), heard.status
    if status is None:
        return view.banner
    cost = "-" if status.champion_cost is None else f"{status.champion_cost:.2f} s"
    last = f", last {_past(status.last[0])}" if status.last else ""
    return (
        f"{view.clock} left | {view.banner} | {status.episodes_done} done, {status.episodes_left} to go"
        f" | champion {status.champion} {cost}{last}"
    )


def bar_of(evidence: float, threshold: float) -> str:
    """Return evidence against its threshold as a bar on a logarithmic scale, as evidence multiplies."""
    share = math.log(max(evidence, 1.0)) / math.log(threshold) if threshold > 1.0 else 1.0
    full = round(BAR * min(max(share, 0.0), 1.0))
    return "[" + "#" * full + "-" * (BAR - full) + "]"


def _banner(heard: Heard, status: TunerStatus) -> tuple[str, bool]:
    if heard.age > SILENCE:
        return f"TUNER NOT HEARD FOR {heard.age:.0f} s", True
    if status.state in ("released", "ended") and status.in_service != status.champion:
        return "MATCH CALL NOT CONFIRMED" if status.state == "released" else "CHAMPION NOT CONFIRMED", True
    if heard.calling:
        return "MATCH CALL SENT, NOT CONFIRMED YET", True
    if status.state == "running" and status.episode is not None:
        return f"EPISODE {_number(status.episode)} IS RUNNING", False
    return BANNERS.get(status.state, status.state.upper()), status.state == "waiting"


def _rows(status: TunerStatus) -> list[Row]:
    rows = [Row("PLAN", _plan(status), 4)]
    if status.mode == "tune" and status.state != "ended":
        rows.append(Row("PACE", _pace(status), 1))
    if status.state in ("idle", "paused"):
        rows.append(Row("SAFETY", RULES, 5))
    rows += [Row("CHAMPION", _cost(status.champion, status.champion_cost), 6), Row("AGAINST", _challenger(status), 6)]
    if status.evidence is not None and status.threshold is not None:
        shown = f"{status.evidence:.3g} of {status.threshold:.3g} needed {bar_of(status.evidence, status.threshold)}"
        rows.append(Row("EVIDENCE", shown, 5))
    if status.verdict:
        rows.append(Row("VERDICT", status.verdict, 7))
    if status.last:
        rows.append(Row("LAST", ", ".join(_past(past) for past in status.last[:5]), 2))
    return [*rows, Row("ROBOT", _robot(status), 8)]


def _plan(status: TunerStatus) -> str:
    if status.mode == "observe":
        return f"{len(status.last)} episodes watched lately"
    if status.state == "ended":
        return f"{status.episodes_done} episodes done"
    parts = f": {status.search_left} search, {status.verdict_left} verdict" if status.search_left is not None else ""
    return f"{status.episodes_done} done, about {status.episodes_left} to go{parts}"


def _pace(status: TunerStatus) -> str:
    if status.mean_episode is None or status.mean_reset is None:
        return "unknown yet"
    return f"{status.mean_episode:.1f} s an episode, {status.mean_reset:.1f} s a reset"


def _cost(name: str, cost: float | None) -> str:
    return f"{name}, no episode yet" if cost is None else f"{name}, costs {cost:.2f} s an episode"


def _challenger(status: TunerStatus) -> str:
    if status.challenger is None:
        return "no challenger yet: the search goes on" if status.phase == "search" else "no challenger"
    pairs = f", {status.pairs} pairs" if status.pairs else ""
    return _cost(status.challenger, status.challenger_cost) + pairs


def _past(past: PastEpisode) -> str:
    word = WORDS[past.kind.value]
    return f"{word} {past.time:.1f} s" if past.kind is OutcomeKind.ARRIVED else word


def _robot(status: TunerStatus) -> str:
    age = status.pose_age
    link = "pose not watched" if age is None else f"pose {age:.2f} s old"
    if age is not None and age > OLD_POSE:
        link = f"NO POSE FOR {age:.1f} s"
    # which set an episode runs with is not shown: who may take it back must not know
    return link if status.in_service != status.champion else f"{link}, holds the champion {status.champion}"


def _number(episode: str) -> str:
    return episode.split(".")[0].lstrip("0") or episode
