"""The tuner: puts sets in service between episodes, asks for episodes, records outcomes, decides by its session."""

from __future__ import annotations

import secrets
import time
from collections import deque
from collections.abc import Generator, Sequence
from typing import Any

from rclpy.callback_groups import MutuallyExclusiveCallbackGroup, ReentrantCallbackGroup
from rclpy.context import Context
from rclpy.parameter import Parameter
from rclpy.task import Future
from std_msgs.msg import String
from std_srvs.srv import Trigger

from fieldnav_ros.crowd import Reading
from fieldnav_ros.errors import FieldnavError, WorkError
from fieldnav_ros.nodes.base import ERROR, LATCHED, OK, RELIABLE, WARN, FieldnavNode, run, yard_of
from fieldnav_ros.nodes.floor_clock import FloorClock
from fieldnav_ros.nodes.in_service import TICK, InService, Steps
from fieldnav_ros.nodes.keeper import Keeper
from fieldnav_ros.nodes.observer import Observer
from fieldnav_ros.nodes.payloads import (
    DriveTo,
    EpisodeOutcome,
    ObserveEpisode,
    PastEpisode,
    RunEpisode,
    StopEpisode,
    decode_outcome,
    encode,
)
from fieldnav_ros.nodes.pose_feed import PoseFeed
from fieldnav_ros.nodes.resetting import Resetting
from fieldnav_ros.nodes.script import LateError, Script, Wait
from fieldnav_ros.nodes.telling import SILENT_POSE, Scene, status_of
from fieldnav_ros.nodes.tuner_settings import SETTINGS as SETTINGS  # read here by who asks a node's module for them
from fieldnav_ros.tuning.events import Episode

SESSION_ENDED = "session ended"
"""Message of the status when nothing more will be run and the champion is in service."""
FLOOR_TIME_UP = "floor time used up"
REMEMBERED = 8
"""Episodes that the status tells of."""
START_TIME = 5.0
"""Seconds in which the nodes find each other, and no silence is strange."""
WARNED_FOR = 15.0
"""Seconds for which the status repeats a warning."""


class TunerNode(FieldnavNode):
    """Drives one ``Session``. All that must survive this process is in the ledger."""

    def __init__(
        self,
        *,
        context: Context | None = None,
        parameter_overrides: Sequence[Parameter] = (),
        namespace: str | None = None,
    ) -> None:
        super().__init__(
            "tuner_node", SETTINGS, context=context, parameter_overrides=parameter_overrides, namespace=namespace
        )
        settings = self.settings
        self.yard = yard_of(settings["yard"])
        self.keeper = Keeper(settings, self.yard)
        self.session = self.keeper.session
        self.service = InService(self, self.keeper, settings["guidance"], self._stop_episode)
        self.floor = FloorClock(settings["floor_clock"], self.yard.reset_time)
        self._request = self.create_publisher(String, "episode/request", LATCHED)
        self._status = self.create_publisher(String, "tuner/status", LATCHED)
        self._script = Script(self._on_fault)
        self._running: tuple[RunEpisode, Episode, float] | None = None
        self._outcome: Future = Future()
        self._wake: Future = Future()
        self._message, self._began = "waiting for begin", time.monotonic()
        self._last: deque[PastEpisode] = deque(maxlen=REMEMBERED)
        # no two requests ever share a name, those of an earlier process on the same ledger included
        self._token, self._requests = secrets.token_hex(3), 0
        self.resets = Resetting(self, self.yard, self.service, self._send, self._stop_episode)
        self.feed = self._watch_poses()
        self.observer = self._observe()
        # even a session that was cut off waits for the word: a robot must not start because a process did
        self._wanted = settings["begin"] and self.observer is None
        if self._wanted:
            self.floor.start()
        self.create_subscription(String, "episode/outcome", self._on_outcome, RELIABLE)
        self._serve_triggers()
        self.create_timer(TICK, self._script.tick)
        self.create_timer(0.2, self._look_at_floor)
        self.create_timer(1.0, self._publish_status)
        self._restart_work()

    def _watch_poses(self) -> PoseFeed | None:
        """Follow the robot where that is needed: in lockstep a listener more would be one too many to wait for."""
        given = self.settings
        if not self.resets.needed and given["mode"] == "tune" and given["floor_clock"] != "pose":
            return None
        return PoseFeed(self, given["pose_type"], given["frame"] or self.yard.frame, self._on_pose)

    def _observe(self) -> Observer | None:
        if self.settings["mode"] != "observe" or self.feed is None:
            return None
        return Observer(self, self.yard, self.keeper, self.service, self.feed, self._send)

    def _on_pose(self, reading: Reading) -> None:
        self.floor.hear(reading.stamp)
        self.resets.look(reading)

    # -- the work, one step after another

    def _restart_work(self) -> None:
        self._script.start(self.observer.steps() if self.observer is not None else self._work())

    def _work(self) -> Steps:
        while True:
            yield from self.service.reach(self._tell_unreachable)
            episodes = self.session.pending() if self._wanted else []
            if episodes and self._fits():
                yield from self._one_episode(episodes[0])
                continue
            if episodes:
                self._end_session()
                continue
            if not (yield from self.service.put_champion()):
                continue
            self._message = SESSION_ENDED if self.session.ended else "champion in service"
            self._publish_status()
            self._wake = Future()
            yield Wait(self._wake)

    def _tell_unreachable(self) -> None:
        self._message = f"waiting for {self.service.guidance}"
        self._publish_status()

    def _fits(self) -> bool:
        return self.floor.by_episode or self.session.plan.fits_one_more(self.floor.since())

    def _end_session(self) -> None:
        self.keeper.commit(self.session.spend(self.floor.stop(), "the last reset, which led to no episode"))
        self.keeper.commit(self.session.stop(FLOOR_TIME_UP))

    def _one_episode(self, episode: Episode) -> Steps:
        self._requests += 1
        serial = f"{self._token}.{self._requests}"
        if self.resets.needed:
            self._message = f"getting the robot to the start of episode {episode.id}"
            if not (yield from self.resets.to(episode.layout.start, f"drive-{serial}", self._publish_status)):
                return
        if not (yield from self.service.put(episode.set_id, episode.parameters)):
            return
        self._announce(f"{episode.id:06d}.{serial}", episode)
        try:
            report = yield Wait(self._outcome, episode.time_limit + self.settings["outcome_deadline"])
        except LateError:
            self.warn("outcomes_late", f"episode {episode.id}: no outcome in time; it is run again")
            self._stop_episode()
            self.keeper.commit(self.session.note("tuner", f"episode {episode.id}: no outcome in time, run again"))
            self._spend(self.floor.book(), "an episode without outcome")
            return
        # requests are latched: who joins now must find a word to stop, not the episode that is over
        self._stop_episode()
        self._record(episode, report)

    def _announce(self, name: str, episode: Episode) -> None:
        """Send the robot off. The goal travels in the request alone: on ``goal`` it might come first, or last on."""
        request = RunEpisode(
            episode=name, set=episode.set_id, layout=episode.layout, frame=self.yard.frame,
            time_limit=episode.time_limit, arrival=self.yard.arrival, grade=self.session.config.grade,
            source=self.get_fully_qualified_name(), outcomes=self.settings["outcomes"],
        )  # fmt: skip
        self._running, self._outcome = (request, episode, time.monotonic()), Future()
        self._message = f"episode {episode.id}"
        self._send(request)
        self._publish_status()

    def _send(self, request: RunEpisode | ObserveEpisode | DriveTo | StopEpisode) -> None:
        self._request.publish(String(data=encode(request)))

    def _stop_episode(self) -> None:
        name = self._running[0].episode if self._running else "none"
        self._running = None
        self._send(StopEpisode(episode=name, source=self.get_fully_qualified_name()))

    def _record(self, episode: Episode, report: EpisodeOutcome) -> None:
        used = self.floor.book(report.time)
        self.keeper.commit(self.session.record(episode.id, report.outcome(), used, report.source))
        self._remember(episode.id, report)
        if self.session.ended:
            self.floor.stop()
        self._publish_status()

    def _remember(self, number: int, report: EpisodeOutcome) -> None:
        past = PastEpisode(episode=number, kind=report.kind, time=report.time, source=report.source)
        self._last.appendleft(past)

    def _spend(self, seconds: float, why: str) -> None:
        if seconds > 0.0:
            self.keeper.commit(self.session.spend(seconds, why))

    def _look_at_floor(self) -> None:
        """End the session when an episode can no longer end in time: resets and waits may take as long as they like."""
        if not self._wanted or self._running is not None or self.session.ended or self.floor.by_episode:
            return
        plan = self.session.plan
        if self.session.pending() and plan.floor_left_s - self.floor.since() < plan.mean_episode_s:
            self._stop_episode()
            self._end_session()
            self._restart_work()

    # -- outcomes: the first report of the source that was chosen counts, for the episode that runs

    def _on_outcome(self, message: String) -> None:
        report = self.decoded(decode_outcome, message)
        if report is None:
            return
        if self.observer is not None:
            if self.observer.report(report):
                self._remember(self.observer.count, report)
            return
        running = self._running
        if running is not None and running[0].ended_by(report) and not self._outcome.done():
            self._outcome.set_result(report)
            return
        self.counts["outcomes_not_asked_for"] += 1
        number = report.episode.split(".")[0]
        if number.isdigit():
            self._ignore(int(number), report)

    def _ignore(self, number: int, report: EpisodeOutcome) -> None:
        """Keep a report that does not count, and the reason."""
        wanted = self.settings["outcomes"]
        if report.source != wanted:
            reason = f"outcomes count from the {wanted}, not from the {report.source}"
        elif self._running is not None and self._running[1].id == number:
            reason = "it is about an earlier run of this episode, or another report came first"
        else:
            events = self.session.record(number, report.outcome(), 0.0, report.source)
            if events and events[0].kind == "report_ignored":
                self.keeper.commit(events)
            return
        self.keeper.commit(self.session.ignore(number, report.outcome(), report.source, reason))

    def _on_fault(self, fault: Exception) -> None:
        self._stop_episode()
        self._message = str(fault) if isinstance(fault, FieldnavError) else f"{type(fault).__name__}: {fault}"
        self.warn("faults", f"the session stands still: {self._message}")
        self.state(self._message, ERROR)
        self._publish_status()
        if not isinstance(fault, FieldnavError):
            raise fault

    # -- services

    def _serve_triggers(self) -> None:
        group = MutuallyExclusiveCallbackGroup()
        self.create_service(Trigger, "~/begin", self._on_begin, callback_group=group)
        self.create_service(Trigger, "~/pause", self._on_pause, callback_group=group)
        self.create_service(Trigger, "~/void_last", self._on_void_last, callback_group=group)
        # a match call that waits for guidance must not hold up a second one
        self.create_service(Trigger, "~/release", self._on_release, callback_group=ReentrantCallbackGroup())

    def _on_begin(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        if self.observer is not None or self.session.ended:
            ended = "the session has ended; name another ledger for a new one"
            response.message = ended if self.observer is None else "observe mode: there is nothing to begin"
            return response
        if self._running is not None:
            response.success, response.message = True, "an episode is running already"
            return response
        self.keeper.commit(self.session.resume())
        self.floor.start()
        self._wanted = True
        self._restart_work()
        response.success, response.message = True, "episodes begin"
        return response

    def _on_pause(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        if self.observer is not None:
            response.message = "observe mode: there is nothing to pause"
            return response
        self._cut_off(self.session.pause(), "cut off by a pause")
        self._restart_work()
        response.success, response.message = True, "paused; the champion goes back in service"
        return response

    def _on_void_last(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        try:
            events = self.session.void(self._running[1].id if self._running else None)
        except WorkError as error:
            response.message = str(error)
            return response
        self.keeper.commit(events)
        voided = any(event.kind == "episode_voided" for event in events)
        if voided:
            self._stop_episode()
            self._spend(self.floor.book(), "an episode that does not count")
            self._restart_work()
        response.success = voided
        response.message = "the last episode does not count and is run again" if voided else "there is none to void"
        return response

    async def _on_release(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        """Match call: robot stopped, champion back in service, read back; an answer within a second."""
        try:
            self._cut_off(self.session.release() if self.observer is None else [], "cut off by a match call")
        except WorkError as error:  # a full disk is no reason to send the robot into a match with another set
            self.warn("faults", f"the match call could not be recorded: {error}")
        self._message = "match call"
        answer: Future = Future()
        self._script.start(self._match_call(answer))
        self._publish_status()
        response.success, response.message = await answer
        return response

    def _match_call(self, answer: Future) -> Generator[Wait, Any, None]:
        yield from self.service.match_call(answer)
        self._publish_status()
        self._restart_work()  # which goes on trying where it was not confirmed

    def _cut_off(self, events: Any, why: str) -> None:
        self._wanted = False
        self._stop_episode()
        self.keeper.commit(events)
        self._spend(self.floor.stop(), why)

    # -- telling

    def _publish_status(self) -> None:
        summary: dict[str, Any] = self.session.summary()
        running, watched = self._running, self.observer.episode if self.observer else None
        status = status_of(
            self._scene(), summary, self.floor.since(), tuple(self._last),
            floor_time=self.session.config.floor_time_s,
            in_service=self.service.confirmed,
            episode=running[0].episode if running else watched.episode if watched else None,
            episode_time=time.monotonic() - running[2] if running else None,
            returns=self.settings["return"],
            pose_age=self.feed.age if self.feed else None,
            message=self._message[:1000],
            warnings=self._warnings(),
        )  # fmt: skip
        self._status.publish(String(data=encode(status)))
        self.state(self._message, WARN if status.state == "waiting" else OK)

    def _scene(self) -> Scene:
        champion = self.session.champion.set_id
        return Scene(
            phase=self.session.phase, mode=self.settings["mode"], wanted=self._wanted,
            reachable=self.service.link.there(), running=self._running is not None,
            reset=self.resets.phase, reset_words=self.resets.words, outcomes=self.settings["outcomes"],
            champion=champion, confirmed=self.service.confirmed == champion,
        )  # fmt: skip

    def _warnings(self) -> tuple[str, ...]:
        age = self.feed.age if self.feed else 0.0
        early = time.monotonic() - self._began < START_TIME
        if not early and (age is None or age > SILENT_POSE):
            self.warn("poses_missing", "no pose of the robot comes" if age is None else f"no pose for {age:.0f} s")
        return tuple(sentence[:1000] for sentence in self.recent_warnings(WARNED_FOR)[:20])

    def values(self) -> dict[str, object]:
        """Return the session's plain numbers for diagnostics."""
        return {**self.session.summary(), "set_in_service": self.service.confirmed or "unconfirmed"}

    def close(self) -> None:
        """Stop the episode that runs, and let go of the ledger."""
        if self._running is not None or self.resets.phase == "driving":
            self._stop_episode()
        self.keeper.close()


def main(args: Sequence[str] | None = None) -> int:
    """Run the tuner node; exit code 0, 1 the work failed, 2 bad input."""
    return run("tuner_node", lambda context: TunerNode(context=context), args)


if __name__ == "__main__":
    raise SystemExit(main())
