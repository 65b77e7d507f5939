"""Judging episodes from what is reported of them, live or from a record: one code for both. Pure.

``world.watch`` rules on one episode; this adds what lies around it: obstacles brought together with poses, lockstep,
and the patience with a robot that is not seen. The caller brings the time.
"""

from __future__ import annotations

from pydantic import Field

from fieldnav_ros.crowd import NANO, Crowd, Pairing, Reading, Sighting
from fieldnav_ros.model import Frozen, Layout, Positive
from fieldnav_ros.pilot import LOCKSTEP_PAUSE
from fieldnav_ros.tracking import Rules as TrackingRules
from fieldnav_ros.world.watch import START_SLACK, EpisodeWatch, Rules, Ruling
from fieldnav_ros.yard import Arrival, Yard


class Patience(Frozen):
    """How a judge hears: lockstep, and how long (s) and how far off (m) it puts up with a robot."""

    match_stamps: bool = Field(default=False, description="lockstep: poses count with obstacles of the same stamp")
    start_slack: float = Field(default=START_SLACK, ge=0, description="m by which the first pose may be off the start")
    start_timeout: Positive = Field(default=30.0, description="s without a pose near the start: the episode is void")
    silence_limit: Positive = Field(default=10.0, description="s without a pose in an episode: it is void")


class Judging:
    """Judges one episode after another; ``now`` is any clock in s that only goes forward."""

    def __init__(self, yard: Yard, tracking: TrackingRules, radius: float, patience: Patience) -> None:
        """``radius`` is that of the obstacles (m)."""
        self._yard, self._patience = yard, patience
        self._crowd = Crowd(tracking, radius)
        self._pairing = Pairing()
        self._watch: EpisodeWatch | None = None
        self._last_stamp = 0
        self._heard = self._asked = 0.0

    @property
    def running(self) -> bool:
        """Whether an episode is being judged."""
        return self._watch is not None

    @property
    def start(self) -> int | None:
        """Stamp (ns) of the pose that the episode began with; None before it."""
        return self._watch.start if self._watch is not None else None

    def begin(self, layout: Layout, arrival: Arrival, time_limit: float, now: float) -> None:
        """Judge this episode from here on."""
        self._crowd.forget()
        self._pairing = Pairing()
        self._asked_for = layout, arrival, time_limit
        self._watch = self._new_watch()
        self._last_stamp = 0
        self._heard = self._asked = now

    def drop(self) -> None:
        """Judge nothing until the next ``begin``."""
        self._watch = None

    def give_up(self, why: str) -> Ruling | None:
        """Return a void ruling on the episode, if there is one."""
        return self._watch.give_up(why) if self._watch is not None else None

    def pose(self, reading: Reading, moment: int, now: float) -> Ruling | None:
        """Take in a pose; ``moment`` (ns) as for the crowd, in lockstep the stamp. The ruling if that ends it."""
        self._heard = now
        return self._paired(reading) if self._patience.match_stamps else self._look(reading, moment)

    def sighting(self, sighting: Sighting, moment: int) -> Ruling | None:
        """Take in obstacles; in lockstep that may complete a pose and end the episode."""
        if self._patience.match_stamps:
            return self._paired(sighting)
        self._crowd.see(sighting, moment)
        return None

    def silence(self, now: float) -> float:
        """Return for how long no pose has come (s)."""
        return now - self._heard

    def clock(self, now: float) -> Ruling | None:
        """Return a void ruling where patience has run out."""
        if self._watch is None:
            return None
        if not self._watch.begun and now - self._asked > self._patience.start_timeout:
            start = self._asked_for[0].start
            limit = self._patience.start_timeout
            return self._watch.give_up(f"no pose near the start ({start.x:.2f}, {start.y:.2f}) for {limit:g} s")
        if self._watch.begun and self.silence(now) > self._patience.silence_limit:
            return self._watch.give_up(f"no pose for {self.silence(now):.1f} s")
        return None

    def _new_watch(self) -> EpisodeWatch:
        layout, arrival, time_limit = self._asked_for
        rules = Rules(
            robot=self._yard.robot,
            floor=self._yard.floor,
            arrival=arrival,
            time_limit=time_limit,
            start_slack=self._patience.start_slack,
        )
        return EpisodeWatch(layout, rules, self._crowd)

    def _paired(self, item: Reading | Sighting) -> Ruling | None:
        pair = self._pairing.put(item)
        if pair is None:
            return None
        reading, sighting = pair
        self._crowd.see(sighting, sighting.stamp)
        if reading.stamp - self._last_stamp > LOCKSTEP_PAUSE * NANO and self._watch is not None:
            self._watch = self._new_watch()  # what came before belongs to the episode before
        self._last_stamp = reading.stamp
        return self._look(reading, reading.stamp)

    def _look(self, reading: Reading, moment: int) -> Ruling | None:
        return self._watch.look_at(reading, moment) if self._watch is not None else None
