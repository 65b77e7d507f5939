"""The simulator node: the built-in world on a real floor's topics, in lockstep with guidance or paced by the clock.

In lockstep the world stands until the command for its last pose has come: a session runs as fast as the machine
allows and is the same every time. Paced, it runs on by itself, as a floor does.
"""

from __future__ import annotations

import sys
import time
from collections import deque
from collections.abc import Sequence
from typing import Any

import numpy as np
from geometry_msgs.msg import PoseArray, PoseStamped, Twist, TwistStamped
from std_msgs.msg import String

from fieldnav_ros.crowd import NANO
from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.nodes.base import DEEP, LATCHED, OK, RELIABLE, WARN, YARD, FieldnavNode, run, yard_of
from fieldnav_ros.nodes.convert import nanoseconds, obstacles_message, pose_message, speeds_from
from fieldnav_ros.nodes.declare import Setting
from fieldnav_ros.nodes.payloads import RunEpisode, decode_outcome, decode_request
from fieldnav_ros.world.layouts import draw
from fieldnav_ros.world.plant import STEP
from fieldnav_ros.world.stage import Stage

SETTINGS: tuple[Setting, ...] = (
    YARD,
    Setting(
        "mode",
        "lockstep",
        "lockstep: step when the command for the last pose has come; paced: by the clock",
        choices=("lockstep", "paced"),
    ),
    Setting("listeners", 2.0, "subscribers to pose without which an episode does not start, lockstep only", 0.0, 100.0),
    Setting("speed", 1.0, "multiple of real time, at most, paced mode only", 0.05, 20.0),
    Setting("stamped_cmd", True, "cmd_vel as TwistStamped; false: Twist, paced mode only"),
    Setting(
        "resets", True, "place robot and carts where an episode starts; false: a floor that knows of no episodes, "
        "on which only commands move the robot, paced mode only",
    ),
    Setting("grade", "moving", "grade of the yard for such a floor's carts"),
    Setting(
        "command_lag", 0.0, "s by which a command may come after the pose it answers before the world waits for it; "
        "0: it waits for nobody, as a real one, paced mode only", 0.0, 1.0,
    ),
    Setting("seed", 0, "seed of where everything stands at first on such a floor", 0, 2**31),
    Setting("command_timeout", 0.3, "s without a command after which the robot stops, paced mode only", 0.02, 10.0),
)
REPEAT = 0.02
"""Seconds without an answer after which a state is published again, rarer as time goes on."""
SLOWEST_REPEAT = 0.5
SETTLE_TIME = 0.2
"""Seconds between the two sides' knowing of a new subscription, at most."""
PATIENCE = 10.0
"""Seconds without an answer after which a warning says so."""
OVERTIME = 1.0
"""Seconds past the time limit for which an episode goes on if nobody ends it."""
FIRST_STAMP = NANO
STEP_NS = round(STEP * NANO)
PAUSE_NS = NANO
"""Time between the stamps of two episodes, so that nobody takes the reset for driving."""
MOST_STEPS = 50
KEPT_STAMPS = 200
LONGEST_WAIT = 1.0
"""Seconds that a world which waits for commands waits for one."""
NOISE_TIME = 300.0
"""Seconds after which the noise of a floor without episodes repeats itself."""


class SimulatorNode(FieldnavNode):
    """Topics around a ``Stage``; the two modes are in ``Lockstep`` and ``Paced``."""

    def __init__(self, **options: Any) -> None:
        super().__init__("simulator_node", SETTINGS, **options)
        self.yard = yard_of(self.settings["yard"])
        paced = self.settings["mode"] == "paced"
        stamped = self.settings["stamped_cmd"]
        if not paced and not stamped:
            self.leave()
            raise InputError.of("stamped_cmd", stamped, "true in lockstep, which needs the commands' stamps")
        if not paced and not self.settings["resets"]:
            self.leave()
            raise InputError.of("resets", False, "true in lockstep, which starts each episode anew")
        self.episode: RunEpisode | None = None
        self._ended = ""
        self._pose = self.create_publisher(PoseStamped, "pose", RELIABLE if paced else DEEP)
        self._obstacles = self.create_publisher(PoseArray, "obstacles", RELIABLE if paced else DEEP)
        self.mode: Lockstep | Paced = Paced(self) if paced else Lockstep(self)
        self.create_subscription(TwistStamped if stamped else Twist, "cmd_vel", self._on_command, RELIABLE)
        if self.settings["resets"]:
            self.create_subscription(String, "episode/request", self._on_request, LATCHED)
            self.create_subscription(String, "episode/outcome", self._on_outcome, RELIABLE)
        self.log.info(f"simulating {self.yard.name!r}, {self.settings['mode']}")

    def publish(self, stage: Stage, stamp: int) -> None:
        """Publish obstacles, then the pose, so that who gets the pose last has the whole moment."""
        shown = stage.show()
        there = [part[:, 0] for part in shown.obstacles]
        course = np.arctan2(there[3], there[2])
        self._obstacles.publish(obstacles_message(there[0], there[1], course, self.yard.frame, stamp))
        self._pose.publish(pose_message(shown.x, shown.y, shown.yaw, self.yard.frame, stamp))

    def pose_listeners(self) -> int:
        """Return how many subscribe to the pose."""
        return int(self._pose.get_subscription_count())

    def stage_of(self, request: RunEpisode) -> Stage:
        """Return the world at the start of an episode."""
        return Stage(self.yard, request.layout, request.time_limit + OVERTIME)

    def overdue(self, stage: Stage) -> bool:
        """Tell whether the episode has gone on past its limit with nobody to end it."""
        return self.episode is not None and stage.number * STEP > self.episode.time_limit + OVERTIME

    def end(self, why: str) -> None:
        """End the running episode."""
        if self.episode is not None:
            self._ended = self.episode.episode
            self.state(f"episode {self._ended} ended: {why}")
            self.episode = None
            self.mode.end()

    def values(self) -> dict[str, object]:
        """Return what diagnostics show of the simulator."""
        return {"episode": self.episode.episode if self.episode else "", "mode": self.settings["mode"]}

    def _on_command(self, message: Any) -> None:
        speeds = self.usable("bad_commands", speeds_from, message)
        if speeds is not None:
            self.mode.command(*speeds, nanoseconds(message.header.stamp) if isinstance(message, TwistStamped) else 0)

    def _on_request(self, message: String) -> None:
        request = self.decoded(decode_request, message)
        if request is None:
            return
        running = self.episode.episode if self.episode else ""
        if not isinstance(request, RunEpisode):
            self.end("stopped by request")
            return
        if request.episode in (running, self._ended):
            return  # a repeated message
        self.end(f"episode {request.episode} was asked for")
        if request.frame != self.yard.frame:
            wrong = InputError.of("frame of the request", request.frame, repr(self.yard.frame))
            self.warn("bad_requests", f"ignored: {wrong}")
            return
        self.episode = request
        self.state(f"running episode {request.episode}")
        self.mode.begin(request)

    def _on_outcome(self, message: String) -> None:
        outcome = self.decoded(decode_outcome, message)
        if outcome is not None and self.episode is not None and self.episode.ended_by(outcome):
            self.end(outcome.kind.value)


class Lockstep:
    """Steps from pose to pose, each time when the command for the last one has come.

    The start is shown again and again, nothing moving, until guidance has answered it: a command carries its pose's
    stamp only when guidance drives, so goal and parameters have reached it then. A late joiner or a lost message only
    costs time.
    """

    def __init__(self, node: SimulatorNode) -> None:
        self._node = node
        self._stage: Stage | None = None
        self._base = self._pending = FIRST_STAMP - PAUSE_NS
        self._waiting_since = self._shown = 0.0
        self._first = 0
        self._complete_since: float | None = None
        self._timer = node.create_timer(REPEAT, self._repeat)
        self._timer.cancel()

    def begin(self, request: RunEpisode) -> None:
        """Place everything at the start and show it."""
        self._stage = self._node.stage_of(request)
        self._base = self._pending + PAUSE_NS
        if self._stage.lost:
            self._to_next_pose(self._stage)
        self._first = self._stage.number
        self._show(self._stage)

    def end(self) -> None:
        """Stand still."""
        self._stage = None
        self._timer.cancel()

    def command(self, v: float, w: float, stamp: int) -> None:
        """Step on if this is the command for the last pose."""
        stage = self._stage
        if stage is None or stamp != self._pending or (stage.number == self._first and not self._heard_by_all()):
            return
        stage.command(v, w)
        self._to_next_pose(stage)
        if self._node.overdue(stage):
            self._node.warn("overdue_episodes", "episode ended by the simulator: its time limit passed, nobody judged")
            self._node.end("overdue")
            return
        self._show(stage)

    def _heard_by_all(self) -> bool:
        """Tell whether all who have to see the start are there, and have been long enough to have seen it."""
        if self._node.pose_listeners() < self._node.settings["listeners"]:
            self._complete_since = None
            return False
        now = time.monotonic()
        self._complete_since = self._complete_since or now
        return now - self._complete_since >= SETTLE_TIME

    def _to_next_pose(self, stage: Stage) -> None:
        while not (stage.step() and not stage.lost):
            pass

    def _show(self, stage: Stage) -> None:
        self._pending = self._base + stage.number * STEP_NS
        self._waiting_since = self._shown = time.monotonic()
        self._timer.reset()
        self._node.publish(stage, self._pending)

    def _repeat(self) -> None:
        if self._stage is None:
            return
        now = time.monotonic()
        waited = now - self._waiting_since
        if now - self._shown < min(0.5 * waited, SLOWEST_REPEAT):
            return  # rarer and rarer: on a busy machine repeating only adds to the load
        self._shown = now
        self._node.counts["repeated_states"] += 1
        if waited > PATIENCE:
            self._node.warn("waits", f"no command for the newest pose for {waited:.0f} s: is guidance running?")
            self._node.state("waiting for guidance", WARN)
        self._node.publish(self._stage, self._pending)


class Paced:
    """Runs on by itself at a multiple of real time; outside episodes too, so that a goal sent by hand works.

    Stamps are the node's clock at the beginning plus the time simulated since: at another speed than 1 they leave the
    clock, and guidance must take a pose's age from the poses' own time.
    """

    def __init__(self, node: SimulatorNode) -> None:
        self._node = node
        self._v = self._w = 0.0
        self._heard = -1e9
        self._lag = round(node.settings["command_lag"] * NANO)
        self._answered: int | None = None
        self._stamps: deque[int] = deque(maxlen=KEPT_STAMPS)
        floor = not node.settings["resets"]
        layout = _floor_layout(node) if floor else _idle_layout(node)
        self._place(Stage(node.yard, layout, NOISE_TIME, walls_hold=floor))
        node.create_timer(STEP / node.settings["speed"], self._tick)

    def begin(self, request: RunEpisode) -> None:
        """Place everything at the start."""
        self._place(self._node.stage_of(request))
        self._node.publish(self._stage, self._base)

    def end(self) -> None:
        """Let the world go on: the robot stops when commands do."""

    def command(self, v: float, w: float, stamp: int) -> None:
        """Drive by this command until another comes or it has grown old."""
        self._v, self._w, self._heard = v, w, time.monotonic()
        # while it drives, guidance answers a pose with that pose's stamp; where it stops it gives its own time
        self._answered = stamp if stamp in self._stamps else None

    def _place(self, stage: Stage) -> None:
        self._stage = stage
        self._base = int(self._node.get_clock().now().nanoseconds)
        self._began = time.monotonic()
        self._v = self._w = 0.0

    def _tick(self) -> None:
        speed = self._node.settings["speed"]
        stage = self._stage
        due = int((time.monotonic() - self._began) * speed / STEP) - stage.number
        if due > MOST_STEPS:  # the machine stood still: the world did too
            lost = (due - MOST_STEPS) * STEP / speed
            self._began += lost
            self._base += round(lost * NANO)
            due = MOST_STEPS
        for _ in range(due):
            if self._late():
                self._began = time.monotonic() - stage.number * STEP / speed
                return
            old = (time.monotonic() - self._heard) > self._node.settings["command_timeout"]
            stage.command(*((0.0, 0.0) if old else (self._v, self._w)))
            if stage.step() and not stage.lost:
                self._stamps.append(self._base + stage.number * STEP_NS)
                self._node.publish(stage, self._stamps[-1])
        if self._node.overdue(stage):
            self._node.warn("overdue_episodes", "episode ended by the simulator: its time limit passed, nobody judged")
            self._node.end("overdue")
            self._node.state("idle", OK)


    def _late(self) -> bool:
        """Tell whether guidance drives and is further behind than it may be; not for ever, as it may have died."""
        if not self._lag or self._answered is None or time.monotonic() - self._heard > LONGEST_WAIT:
            return False
        return bool(self._stamps[-1] - self._answered > self._lag)


def _idle_layout(node: SimulatorNode) -> Layout:
    """Return the robot in the middle of the start region, no carts: what a paced floor shows before any episode."""
    region, goal = node.yard.start, node.yard.goal
    start = Pose(x=sum(region.x) / 2.0, y=sum(region.y) / 2.0, yaw=sum(region.yaw) / 2.0)
    return Layout(start=start, goal=Pose(x=sum(goal.x) / 2.0, y=sum(goal.y) / 2.0, yaw=sum(goal.yaw) / 2.0))


def _floor_layout(node: SimulatorNode) -> Layout:
    """Return where robot and carts stand when a floor that knows of no episodes is opened."""
    return draw(node.yard, node.settings["grade"], np.random.default_rng(node.settings["seed"]))


def main(args: Sequence[str] | None = None) -> int:
    """Run the simulator node; return the exit code."""
    return run("simulator_node", lambda context: SimulatorNode(context=context), args, events=True)


if __name__ == "__main__":
    sys.exit(main())
