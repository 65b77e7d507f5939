"""The tuner: puts sets in service between episodes, asks for episodes, records outcomes, decides by its session."""

from __future__ import annotations

import math
import secrets
import time
from collections.abc import Generator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from geometry_msgs.msg import PoseStamped
from rclpy.callback_groups import MutuallyExclusiveCallbackGroup, ReentrantCallbackGroup
from rclpy.context import Context
from rclpy.parameter import Parameter
from rclpy.task import Future
from std_msgs.msg import String
from std_srvs.srv import Trigger

from fieldnav_ros import __version__
from fieldnav_ros.errors import FieldnavError, InputError
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Layout
from fieldnav_ros.nodes.base import ERROR, LATCHED, OK, RELIABLE, WARN, YARD, FieldnavNode, run, yard_of
from fieldnav_ros.nodes.convert import pose_message
from fieldnav_ros.nodes.declare import Setting
from fieldnav_ros.nodes.payloads import (
    EpisodeOutcome,
    RunEpisode,
    StopEpisode,
    TunerStatus,
    decode_outcome,
    encode,
)  # fmt: skip
from fieldnav_ros.nodes.script import LateError, Script, Wait
from fieldnav_ros.nodes.service_link import RefusedError, ServiceLink
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.params_file import read_parameters, write_parameters
from fieldnav_ros.tuning.events import About, Episode, Event, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.world.layouts import draw

PATIENCE = 1.0
"""Seconds to wait for an answer of the guidance node before the call is made again."""
CALL_LIMIT = 1.0
"""Seconds within which a match call is answered, whatever the answer."""
TICK = 0.05
SESSION_ENDED = "session ended"
"""Message of the status when nothing more will be run and the champion is in service."""
LARGEST_EVIDENCE = 1e12
FROM_SUMMARY = (
    "phase", "episodes_done", "episodes_left", "champion", "champion_cost", "challenger", "challenger_cost",
)  # fmt: skip
SETTINGS = (
    YARD,
    Setting("ledger", "session.ledger", "path of the session's ledger; an existing one is gone on with"),
    Setting("champion_file", "champion.yaml", "path that the champion is written to, as a ROS parameter file"),
    Setting("initial", "", "ROS parameter file with the set to begin with; empty: the table's defaults"),
    Setting("guidance", "guidance_node", "name of the guidance node, relative to this node's namespace"),
    Setting("grade", "moving", "grade of the yard that layouts are drawn from"),
    Setting("seed", 0, "seed of everything random in the session", 0, 2**31),
    Setting("floor_time", 20.0, "floor time that the session may use, in min, resets included", 0.1, 10_000.0),
    Setting("floor_clock", "wall", "wall: floor time as the clock runs; episode: the outcomes' own times and the "
            "yard's reset time, for simulators that are not paced", choices=("wall", "episode")),
    Setting("rounds", 1, "most verdicts in the session; more share the 5 % error among them", 1, 16),
    Setting("verdict_share", 0.35, "share of the floor time kept for the verdict", 0.05, 0.95),
    Setting("place", "", "where the session is held, for the record"),
    Setting("begin", False, "begin at once, without waiting for the service ~/begin"),
    Setting("outcome_deadline", 10.0, "s of waiting beyond the time limit, before an episode is run again", 0.5, 600.0),
)  # fmt: skip


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
        self.time_limit = self.yard.grade(settings["grade"]).time_limit
        # before the ledger, so that bad input leaves no empty one behind
        self._initial = read_parameters(settings["initial"]) if settings["initial"] else DEFAULTS
        self.ledger = Ledger.open(settings["ledger"])
        self.session = Session(self._draw)
        self.link = ServiceLink(self, settings["guidance"], PATIENCE)
        self._model_written = self.link.model
        self._open_session()
        self._goal = self.create_publisher(PoseStamped, "goal", LATCHED)
        self._request = self.create_publisher(String, "episode/request", LATCHED)
        self._status = self.create_publisher(String, "tuner/status", LATCHED)
        self.create_subscription(String, "episode/outcome", self._on_outcome, RELIABLE)
        self._serve_triggers()
        self._script = Script(self._on_fault)
        self._running: tuple[str, Episode] | None = None
        self._outcome: Future = Future()
        self._wake: Future = Future()
        self._confirmed = ""
        self._last_values: tuple[float, ...] = ()
        self._message = "waiting for begin"
        self._floor_mark = time.monotonic()
        # no two requests ever share a name, those of an earlier process on the same ledger included
        self._token, self._requests = secrets.token_hex(3), 0
        # even a session that was cut off waits for the word: a robot must not start because a process did
        self._wanted = settings["begin"]
        self.create_timer(TICK, self._script.tick)
        self.create_timer(1.0, self._publish_status)
        self._script.start(self._work())

    # -- the session and its ledger

    def _draw(self, grade: str, seed: int) -> Layout:
        return draw(self.yard, grade, np.random.default_rng(seed))

    def _open_session(self) -> None:
        config = SessionConfig(
            seed=self.settings["seed"],
            floor_time_s=60.0 * self.settings["floor_time"],
            grade=self.settings["grade"],
            time_limit=self.time_limit,
            rounds=self.settings["rounds"],
            verdict_share=self.settings["verdict_share"],
            reset_guess_s=self.yard.reset_time,
        )
        self.session.apply(*self.ledger.events())
        if not self.session.begun:
            about = About(
                software=f"fieldnav_ros {__version__}", model=DEFAULT_MODEL, yard=self.yard,
                place=self.settings["place"],
            )  # fmt: skip
            self.commit(self.session.begin(config, self._initial, about=about))
            return
        if self.session.config != config:
            name = next(key for key, value in config if value != getattr(self.session.config, key))
            raise InputError.of(
                f"{self.settings['ledger']}: the session's {name}", getattr(self.session.config, name),
                f"{getattr(config, name)!r} as asked for now; name another ledger or ask for the same session",
            )  # fmt: skip
        self.commit(self.session.advance())

    def commit(self, events: Sequence[Event]) -> None:
        """Store events, then let them take effect; the champion's file follows the champion."""
        if not events:
            return
        self.ledger.append(events)
        self.session.apply(*events)
        if any(event.kind in ("session_begun", "champion_changed") for event in events):
            self._write_champion()

    def _write_champion(self) -> None:
        champion = self.session.champion
        about = f"Champion {champion.set_id} of the session in {Path(self.settings['ledger']).name}."
        self._model_written = self.link.model
        write_parameters(Path(self.settings["champion_file"]), champion.parameters, about, self.link.model)

    # -- the work, one step after another

    def _work(self) -> Generator[Wait, Any, None]:
        while True:
            yield from self._reach_guidance()
            episodes = self.session.pending() if self._wanted else []
            if episodes:
                yield from self._one_episode(episodes[0])
                continue
            yield from self._in_service()
            self._message = SESSION_ENDED if self.session.ended else "champion in service"
            self._publish_status()
            self._wake = Future()
            yield Wait(self._wake)

    def _reach_guidance(self) -> Generator[Wait, Any, None]:
        while not self.link.there():
            self._message = f"waiting for {self.settings['guidance']}"
            self._publish_status()
            yield from self._pause_for(0.2)

    def _pause_for(self, seconds: float) -> Generator[Wait, Any, None]:
        try:
            yield Wait(Future(), seconds)
        except LateError:
            return

    def _one_episode(self, episode: Episode) -> Generator[Wait, Any, None]:
        if not (yield from self._put(episode.set_id, episode.parameters)):
            return
        self._requests += 1
        name = f"{episode.id:06d}.{self._token}.{self._requests}"
        self._running, self._outcome = (name, episode), Future()
        self._announce(name, episode)
        try:
            report = yield Wait(self._outcome, episode.time_limit + self.settings["outcome_deadline"])
        except LateError:
            self.warn("outcomes_late", f"episode {episode.id}: no outcome in time; it is run again")
            self._stop_episode()
            self.commit(self.session.note("tuner", f"episode {episode.id}: no outcome in time, run again"))
            return
        # requests are latched: who joins now must find a word to stop, not the episode that is over
        self._stop_episode()
        self._record(episode, report)

    def _put(self, set_id: str, parameters: ParameterSet) -> Generator[Wait, Any, bool]:
        """Put a set in service and confirm it; False where that must be tried again."""
        try:
            if self._confirmed and (yield from self.link.read()) != self._last_values:
                sentence = f"the numbers of {self._confirmed} were changed by somebody else"
                self.warn("foreign_changes", sentence)
                self.commit(self.session.note("tuner", sentence))
            self._confirmed = ""
            yield from self.link.put(parameters)
        except RefusedError as error:
            self.warn("sets_refused", f"guidance refused set {set_id}: {error}")
            self._stop_episode()
            yield from self._pause_for(0.1)
            return False
        except LateError:
            self._confirmed = ""
            self.warn("guidance_silent", f"{self.settings['guidance']} does not answer; asking again")
            return False
        self._confirm(set_id, parameters)
        return True

    def _confirm(self, set_id: str, parameters: ParameterSet) -> None:
        self._confirmed, self._last_values = set_id, tuple(parameters.to_ros().values())
        if self.link.model != self._model_written:
            self._write_champion()  # the same numbers mean something else to another field

    def _in_service(self) -> Generator[Wait, Any, None]:
        """See to it that the champion is in service, however long guidance takes to be there."""
        while True:
            yield from self._reach_guidance()
            champion = self.session.champion
            if (yield from self._put(champion.set_id, champion.parameters)):
                return

    def _announce(self, name: str, episode: Episode) -> None:
        goal = episode.layout.goal
        now = self.get_clock().now().nanoseconds
        self._goal.publish(pose_message(goal.x, goal.y, goal.yaw, self.yard.frame, now))
        request = RunEpisode(
            episode=name, set=episode.set_id, layout=episode.layout, frame=self.yard.frame,
            time_limit=episode.time_limit, arrival=self.yard.arrival, grade=self.session.config.grade,
            source=self.get_fully_qualified_name(),
        )  # fmt: skip
        self._request.publish(String(data=encode(request)))
        self._message = f"episode {episode.id} with set {episode.set_id}"

    def _stop_episode(self) -> None:
        name = self._running[0] if self._running else "none"
        self._running = None
        self._request.publish(String(data=encode(StopEpisode(episode=name, source=self.get_fully_qualified_name()))))

    def _record(self, episode: Episode, report: EpisodeOutcome) -> None:
        now = time.monotonic()
        used = report.time + self.yard.reset_time if self._by_episode else now - self._floor_mark
        self._floor_mark = now
        self.commit(self.session.record(episode.id, report.outcome(), used, report.source))
        self._publish_status()

    @property
    def _by_episode(self) -> bool:
        return bool(self.settings["floor_clock"] == "episode")

    def _on_outcome(self, message: String) -> None:
        report = self.decoded(decode_outcome, message)
        if report is None:
            return
        if self._running is not None and report.episode == self._running[0] and not self._outcome.done():
            self._outcome.set_result(report)
            return
        self.counts["outcomes_not_asked_for"] += 1
        number = report.episode.split(".")[0]
        if number.isdigit() and self.session.begun:
            events = self.session.record(int(number), report.outcome(), 0.0, report.source)
            if events and events[0].kind == "report_ignored":
                self.commit(events)

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
        if self.session.ended:
            response.message = "the session has ended; name another ledger for a new one"
            return response
        self.commit(self.session.resume())
        if not self._wanted:
            self._floor_mark = time.monotonic()
        self._wanted = True
        self._restart_work()
        response.success, response.message = True, "episodes begin"
        return response

    def _on_pause(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        self.commit(self.session.pause())
        self._spend_until_now("episode cut off by a pause")
        self._wanted = False
        self._stop_episode()
        self._restart_work()
        response.success, response.message = True, "paused; the champion goes back in service"
        return response

    def _on_void_last(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        events = self.session.void(self._running[1].id if self._running else None)
        self.commit(events)
        voided = any(event.kind == "episode_voided" for event in events)
        if voided:
            self._stop_episode()
            self._restart_work()
        response.success = voided
        response.message = "the last episode does not count and is run again" if voided else "there is none to void"
        return response

    async def _on_release(self, _request: Trigger.Request, response: Trigger.Response) -> Trigger.Response:
        """Match call: robot stopped, champion back in service, read back; an answer within CALL_LIMIT."""
        self.commit(self.session.release())
        self._spend_until_now("episode cut off by a match call")
        self._wanted = False
        self._stop_episode()
        answer: Future = Future()
        self._script.start(self._release_work(answer))
        response.success, response.message = await answer
        return response

    def _release_work(self, answer: Future) -> Generator[Wait, Any, None]:
        end = time.monotonic() + 0.9 * CALL_LIMIT
        while time.monotonic() < end:
            if self.link.there() and (yield from self._put_quickly(end)):
                answer.set_result((True, f"champion {self.session.champion.set_id} is in service, read back"))
                break
            yield from self._pause_for(TICK)
        else:
            sentence = "guidance does not answer; the champion goes in service as soon as it is there"
            answer.set_result((False, sentence))
            self.warn("releases_unconfirmed", sentence)
        self._restart_work()

    def _put_quickly(self, end: float) -> Generator[Wait, Any, bool]:
        champion = self.session.champion
        self._confirmed = ""
        try:
            yield from self.link.put(champion.parameters, patience=max(TICK, end - time.monotonic()))
        except (RefusedError, LateError):
            return False
        self._confirm(champion.set_id, champion.parameters)
        return True

    def _spend_until_now(self, why: str) -> None:
        if self._running is not None and not self._by_episode:
            self.commit(self.session.spend(time.monotonic() - self._floor_mark, why))

    def _restart_work(self) -> None:
        self._script.start(self._work())

    # -- telling

    def _publish_status(self) -> None:
        summary: dict[str, Any] = self.session.summary()
        status = TunerStatus(
            state=self._state_word(),
            floor_time_left=summary["floor_time_left_s"],
            evidence=_e_value(summary["log_evidence"]),
            threshold=_e_value(summary["log_threshold"]),
            message=self._message[:1000],
            **{name: summary[name] for name in FROM_SUMMARY},
        )
        self._status.publish(String(data=encode(status)))
        self.state(self._message, WARN if status.state == "waiting" else OK)

    def _state_word(self) -> str:
        if self.session.ended or self.session.phase in ("paused", "released"):
            return self.session.phase
        if not self._wanted:
            return "idle"
        return "running" if self.link.there() else "waiting"

    def values(self) -> dict[str, object]:
        """Return the session's plain numbers for diagnostics."""
        return {**self.session.summary(), "set_in_service": self._confirmed or "unconfirmed"}

    def close(self) -> None:
        """Stop the episode that runs, and let go of the ledger."""
        if self._running is not None:
            self._stop_episode()
        self.ledger.close()


def _e_value(logarithm: float | None) -> float | None:
    """Return evidence on its plain scale, bounded so that it stays a number that any reader takes."""
    return None if logarithm is None else min(math.exp(min(logarithm, 700.0)), LARGEST_EVIDENCE)


def main(args: Sequence[str] | None = None) -> int:
    """Run the tuner node; exit code 0, 1 the work failed, 2 bad input."""
    return run("tuner_node", lambda context: TunerNode(context=context), args)


if __name__ == "__main__":
    raise SystemExit(main())
