"""Judging a recorded episode once more, by the judge that judges live, under its own rules or others."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple, Protocol

import numpy as np

from fieldnav_ros.bags.reading import Content, Entry, read_bag
from fieldnav_ros.crowd import NANO, Reading
from fieldnav_ros.errors import InputError
from fieldnav_ros.incoming import reading_from, sighting_from
from fieldnav_ros.judging import Judging, Patience
from fieldnav_ros.model import Layout, Outcome
from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.tracking import Rules as TrackingRules
from fieldnav_ros.world.watch import Ruling
from fieldnav_ros.yard import Arrival, Yard

TRUST = 1.0
"""Of new positions of obstacles, the judge's own default."""
LOCKSTEP_PATIENCE = 120.0
ROUNDING = 1e-3
"""Seconds; stamps in outcomes are numbers of double precision, poses lie further apart."""
JUDGED = ("run", "observe")
"""Actions of requests that are episodes."""


class Request(Protocol):
    """What an ``episode/request`` to run or to observe says."""

    @property
    def action(self) -> str:
        """``run``, ``observe``, or what is no episode."""

    @property
    def episode(self) -> str:
        """Name of the episode."""

    @property
    def set(self) -> str:
        """Id of the parameter set in service."""

    @property
    def layout(self) -> Layout:
        """Where it begins."""

    @property
    def frame(self) -> str:
        """Frame of all poses."""

    @property
    def time_limit(self) -> float:
        """Time limit (s)."""

    @property
    def arrival(self) -> Arrival:
        """How close counts as arrived."""


Decode = Callable[[str], Any]
"""Turns the JSON of ``episode/request`` into a Request; InputError where it is none."""


class OtherRules(NamedTuple):
    """Rules to judge by instead of those of the request (m, rad, s); None: as it says."""

    arrival_position: float | None = None
    arrival_heading: float | None = None
    time_limit: float | None = None

    @property
    def any(self) -> bool:
        """Whether there is one."""
        return any(value is not None for value in self)

    def arrival(self, asked: Arrival) -> Arrival:
        """Return how close counts as arrived."""
        return Arrival(
            position=asked.position if self.arrival_position is None else self.arrival_position,
            heading=asked.heading if self.arrival_heading is None else self.arrival_heading,
        )


SAME_RULES = OtherRules()


@dataclass(frozen=True)
class Scored:
    """A recorded episode judged once more.

    ``ruling`` is None where the recording ends, or was stopped, before the episode did. ``t`` (s), ``x``, ``y`` (m),
    each (N,), are the poses from its start to that end. ``bad`` counts poses and obstacles that were unusable.
    """

    path: Path
    begun: int
    request: Any
    time_limit: float
    ruling: Ruling | None
    complete: bool
    bad: int
    t: FloatArray
    x: FloatArray
    y: FloatArray

    @property
    def number(self) -> int | None:
        """The ledger's id of the episode, which its name begins with; None where it does not."""
        return number_of(self.request.episode)

    @property
    def outcome(self) -> Outcome | None:
        """How it ended; None where the recording does not say."""
        return self.ruling.outcome if self.ruling is not None else None


def number_of(name: str) -> int | None:
    """Return the ledger's id in an episode's name such as ``000012.ab12cd.3``; None where there is none."""
    found = re.match(r"0*(\d{1,12})\.", name, re.ASCII)
    return int(found.group(1)) if found else None


def score_bag(path: Path, yard: Yard, decode: Decode, rules: OtherRules = SAME_RULES) -> Scored:
    """Read a bag and judge it; InputError where it cannot be read or holds no request to run."""
    return score(read_bag(path), yard, decode, rules)


def score(content: Content, yard: Yard, decode: Decode, rules: OtherRules = SAME_RULES) -> Scored:
    """Judge what a bag holds."""
    return _Scorer(content, yard, decode, rules).run()


def _start_by_report(content: Content) -> int:
    """Return the stamp (ns) of the pose that the live judge began with, as its outcome tells; 0 where none does.

    The request reached the judge at another moment than the recorder, so that the one may have seen a pose more.
    """
    for entry in content.entries:
        if entry.role == "episode/outcome":
            try:
                said = json.loads(entry.message.data)
                if said["source"] == "judge":
                    return int((float(said["stamp"]) - float(said["time"]) - ROUNDING) * NANO)
            except (ValueError, TypeError, KeyError, OverflowError, RecursionError):
                continue
    return 0


class _Scorer:
    def __init__(self, content: Content, yard: Yard, decode: Decode, rules: OtherRules) -> None:
        self._content, self._decode, self._rules = content, decode, rules
        lockstep = content.about.get("match_stamps") == "true"
        self._by_arrival = content.about.get("pose_age_from") == "arrival" and not lockstep
        patience = Patience(match_stamps=lockstep)
        if lockstep:
            patience = Patience(
                match_stamps=True, start_timeout=LOCKSTEP_PATIENCE, silence_limit=LOCKSTEP_PATIENCE
            )  # fmt: skip
        self._judging = Judging(yard, TrackingRules(alpha=TRUST), yard.cart_radius, patience)
        self._request: Request | None = None
        self._begun, self._reported = 0, False
        self._not_before = 0 if lockstep else _start_by_report(content)
        self._readings: list[Reading] = []
        self._bad = 0

    def run(self) -> Scored:
        ruling: Ruling | None = None
        start: int | None = None
        for entry in self._content.entries:
            if entry.role == "episode/request":
                if self._over(entry):
                    break
            elif self._request is not None:
                self._reported = self._reported or entry.role == "episode/outcome"
                ruling = self._take(self._request, entry)
            start = self._judging.start
            if ruling is not None:
                break
        if self._request is None:
            raise InputError(f"{self._content.path}: holds no request to run an episode")
        return self._scored(self._request, ruling, start)

    def _over(self, entry: Entry) -> bool:
        """Take in a request; tell whether it ends the episode."""
        try:
            request: Request = self._decode(entry.message.data)
        except InputError:
            self._bad += 1
            return False
        if request.action not in JUDGED:
            # the word to stop that follows a report may overtake the very pose that was reported on
            return self._request is not None and not self._reported
        if self._request is not None:
            return request.episode != self._request.episode
        self._request, self._begun = request, entry.logged
        limit = self._rules.time_limit or request.time_limit
        self._judging.begin(request.layout, self._rules.arrival(request.arrival), limit, entry.logged / NANO)
        return False

    def _take(self, request: Request, entry: Entry) -> Ruling | None:
        now = entry.logged / NANO
        try:
            if entry.role == "pose":
                reading = reading_from(entry.message, request.frame)
                if reading.stamp < self._not_before:
                    return None
                self._readings.append(reading)
                return self._judging.pose(reading, self._moment(entry, reading.stamp), now)
            if entry.role == "obstacles":
                sighting = sighting_from(entry.message, request.frame)
                return self._judging.sighting(sighting, self._moment(entry, sighting.stamp))
        except InputError:
            self._bad += 1
        return self._judging.clock(now)

    def _moment(self, entry: Entry, stamp: int) -> int:
        return entry.logged if self._by_arrival else stamp

    def _scored(self, request: Request, ruling: Ruling | None, start: int | None) -> Scored:
        end = ruling.stamp if ruling is not None else None
        kept = [
            item for item in self._readings
            if start is not None and start <= item.stamp and (end is None or item.stamp <= end)
        ]  # fmt: skip
        table = np.array([((item.stamp - (start or 0)) / NANO, item.x, item.y) for item in kept]).reshape(-1, 3)
        return Scored(
            path=self._content.path,
            begun=self._begun,
            request=request,
            time_limit=self._rules.time_limit or request.time_limit,
            ruling=ruling,
            complete=self._content.complete,
            bad=self._bad,
            t=table[:, 0],
            x=table[:, 1],
            y=table[:, 2],
        )
