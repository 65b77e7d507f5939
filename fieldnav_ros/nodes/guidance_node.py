"""The guidance node: pose, obstacles and goal in; heading and velocity command out, on the arrival of each pose."""

from __future__ import annotations

import sys
import time
from collections.abc import Sequence
from functools import partial
from typing import Any

from geometry_msgs.msg import PoseArray, PoseStamped, Twist, TwistStamped
from nav_msgs.msg import Odometry
from rcl_interfaces.msg import SetParametersResult
from rclpy.parameter import Parameter
from std_msgs.msg import Bool, String
from visualization_msgs.msg import MarkerArray

from fieldnav_ros.crowd import Crowd
from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Robot
from fieldnav_ros.nodes import convert, markers
from fieldnav_ros.nodes.base import (
    ERROR,
    LATCHED,
    NEWEST,
    OK,
    RELIABLE,
    WARN,
    FieldnavNode,
    incoming_qos,
    run,
    yard_of,
)
from fieldnav_ros.nodes.claim import CLAIM, Lease
from fieldnav_ros.nodes.declare import tunable_settings
from fieldnav_ros.nodes.guidance_settings import SETTINGS
from fieldnav_ros.nodes.payloads import DriveTo, ObserveEpisode, RunEpisode, decode_outcome, decode_request
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.pilot import Halt, Order, Pilot, PilotRules
from fieldnav_ros.tracking import Rules
from fieldnav_ros.yard import Arrival, Yard

STOP_REPEATS = 5
"""How often the zero command is repeated where nothing is left to do: then cmd_vel is free for others."""
_TUNABLE = {setting.name: setting for setting in SETTINGS if setting.live and setting.name != CLAIM}


class GuidanceNode(FieldnavNode):
    """Wires topics and parameters to a ``Pilot`` and publishes what it says."""

    def __init__(self, **options: Any) -> None:
        super().__init__("guidance_node", SETTINGS, **options)
        yard = yard_of(self.settings["yard"])
        self.frame: str = self.settings["frame"] or yard.frame
        self._by_arrival = self.settings["pose_age_from"] == "arrival" or self.settings["match_stamps"]
        self._by_poses = self.settings["pose_age_from"] == "poses" and not self._by_arrival
        self._newest = (0, 0)  # of the poses: stamp, and when it came on the steady clock (ns)
        self._running: RunEpisode | DriveTo | None = None
        self._floor, self._arrival, self._robot = yard.floor, self._arrival_of(yard), self._robot_of(yard)
        self.pilot = self._make_pilot(yard)
        self._ended, self._lease = "", Lease()
        self._zeros_left = 0
        self._moving_on_said = False
        self._order: Order | None = None
        self._open_topics()
        self.add_on_set_parameters_callback(self._on_set)
        self.add_post_set_parameters_callback(self._post_set)
        self.create_timer(max(0.01, 0.2 * self.settings["pose_timeout"]), self._watch)
        if self.settings["field_rate"] > 0.0:
            self.create_timer(1.0 / self.settings["field_rate"], self._draw)
        self.log.info(
            f"guiding on {yard.name!r}: wheels to {self._robot.wheel_speed:g} m/s, {self._robot.wheel_accel:g} m/s^2,"
            f" field {self.pilot.model}, poses in frame {self.frame!r}"
        )

    # making

    def _robot_of(self, yard: Yard) -> Robot:
        return Robot(
            **{name: self.settings[f"robot.{name}"] or getattr(yard.robot, name) for name in Robot.model_fields}
        )  # fmt: skip

    def _arrival_of(self, yard: Yard) -> Arrival:
        return Arrival(
            **{name: self.settings[f"arrival.{name}"] or getattr(yard.arrival, name) for name in Arrival.model_fields}
        )  # fmt: skip

    def _make_pilot(self, yard: Yard) -> Pilot:
        given = self.settings
        rules = PilotRules(
            robot=self._robot, floor=self._floor, arrival=self._arrival,
            pose_timeout=given["pose_timeout"], pose_period=given["pose_period"],
            command_delay=given["command_delay"], match_stamps=given["match_stamps"],
        )  # fmt: skip
        tracker = Rules(
            fastest=given["obstacle_speed"], patience=given["obstacle_timeout"], alpha=given["obstacle_trust"]
        )  # fmt: skip
        crowd = Crowd(tracker, given["obstacle_radius"] or yard.cart_radius)
        numbers = ParameterSet.from_ros({row.name: given[row.name] for row in tunable_settings()}).numbers()
        return Pilot(rules, crowd, numbers, given["field.model"])

    def _open_topics(self) -> None:
        given = self.settings
        incoming = incoming_qos(given, NEWEST)
        self._heading = self.create_publisher(PoseStamped, "heading", RELIABLE)
        command = TwistStamped if given["stamped_cmd"] else Twist
        self._command = self.create_publisher(command, "cmd_vel", RELIABLE) if given["publish_cmd"] else None
        self._field = self.create_publisher(MarkerArray, "field", RELIABLE)
        self.create_subscription(convert.POSE_TYPES[given["pose_type"]], "pose", self.on_pose, incoming)
        self.create_subscription(PoseArray, "obstacles", self.on_obstacles, incoming)
        for topic in filter(None, given["obstacle_odometry"]):
            self.create_subscription(Odometry, topic, partial(self.on_mover, topic), incoming)
        self.create_subscription(PoseStamped, "goal", self.on_goal, LATCHED)
        self.create_subscription(Bool, "hold", self.on_hold, LATCHED)
        self.create_subscription(String, "episode/request", self.on_request, LATCHED)
        self.create_subscription(String, "episode/outcome", self.on_outcome, RELIABLE)

    # messages in

    def on_pose(self, message: Any) -> None:
        """Guide: the pose is where a command starts from."""
        try:
            reading = convert.reading_from(message, self.frame)
        except InputError as error:
            self._stop(self.pilot.refuse(Halt("bad_pose", str(error))))
            return
        if reading.stamp != self._newest[0]:
            self._newest = reading.stamp, time.monotonic_ns()
        now = self._now()
        self._act(self.pilot.on_pose(reading, now if self._by_arrival else reading.stamp, now))

    def on_obstacles(self, message: PoseArray) -> None:
        """Take in where obstacles are."""
        try:
            sighting = convert.sighting_from(message, self.frame)
        except InputError as error:
            self._stop(self.pilot.on_bad_obstacles("obstacles", str(error)))
            return
        self.pilot.crowd.see(sighting, self._moment(sighting.stamp))
        self._act(self.pilot.on_obstacles("obstacles"))

    def on_mover(self, topic: str, message: Odometry) -> None:
        """Take in what one obstacle says of itself."""
        try:
            mover = convert.mover_from(message, self.frame, topic)
        except InputError as error:
            self._stop(self.pilot.on_bad_obstacles(topic, str(error)))
            return
        self.pilot.crowd.hear(topic, mover, self._moment(mover.stamp))
        self._act(self.pilot.on_obstacles(topic))

    def on_goal(self, message: PoseStamped) -> None:
        """Take a goal outside episodes; one that cannot be used loses the goal."""
        if self.pilot.episode is not None:
            self.warn("goals_ignored", f"goal ignored: episode {self.pilot.episode} is running with its own")
            return
        try:
            self.pilot.take_goal(convert.goal_from(message, self.frame))
        except InputError as error:
            self.pilot.take_goal(None)
            self._stop(self.pilot.refuse(Halt("bad_goal", f"goal lost: {error}")))

    def on_hold(self, message: Bool) -> None:
        """Stand while the operator holds."""
        self.pilot.held = bool(message.data)
        if self.pilot.held:
            self._watch()

    def on_request(self, message: String) -> None:
        """Begin or end an episode, or a drive to where the next one starts."""
        request = self.decoded(decode_request, message)
        if isinstance(request, (RunEpisode, DriveTo)):
            self._begin(request)
        elif isinstance(request, ObserveEpisode):
            return  # somebody else's goal, judged by others
        elif request is not None and self.pilot.episode is not None:
            self._end(self.pilot.episode, f"stopped by {request.source or 'request'}")

    def on_outcome(self, message: String) -> None:
        """End the episode that the outcome is about."""
        outcome = self.decoded(decode_outcome, message)
        if outcome is not None and isinstance(self._running, RunEpisode) and self._running.ended_by(outcome):
            self._end(outcome.episode, outcome.kind.value)

    def _begin(self, request: RunEpisode | DriveTo) -> None:
        running = self.pilot.episode
        if request.episode == self._ended or (request.episode == running):
            return  # a repeated message
        if request.frame != self.frame:
            self.pilot.end_episode()
            reason = f"episode {request.episode} not begun: frame is {request.frame!r}, must be {self.frame!r}"
            self._stop(self.pilot.refuse(Halt("bad_goal", reason)))
            return
        if isinstance(request, DriveTo):
            self.pilot.start_episode(request.episode, request.goal, request.time_limit, stay=True)
        else:
            self.pilot.start_episode(request.episode, request.layout.goal, request.time_limit)
        self._running = request
        self._order = None
        self._send(0.0, 0.0, self.get_clock().now().nanoseconds)  # an episode starts from rest: say so to the base

    def _end(self, episode: str, how: str) -> None:
        if self.pilot.episode != episode:
            return
        self._ended = episode
        self.pilot.end_episode()
        self._stop(self.pilot.refuse(Halt("episode_over", f"episode {episode} is over: {how}", fault=False)))

    # commands out

    def _act(self, what: Order | Halt | None) -> None:
        if isinstance(what, Order):
            self._drive(what)
        elif what is not None:
            self._stop(what)

    def _drive(self, order: Order) -> None:
        reading = order.reading
        self._heading.publish(convert.pose_message(reading.x, reading.y, order.heading, self.frame, reading.stamp))
        self._send(order.v, order.w, reading.stamp)
        self._order, self._zeros_left = order, STOP_REPEATS
        self.state("guiding", OK)
        if order.view.left_out:
            names = ", ".join(order.view.left_out)
            sentence = f"guiding without {names}: nothing for {self.settings['obstacle_timeout']:g} s"
            self.state(sentence, WARN)
            self.warn("obstacles_left_out", sentence)
        elif abs(order.view.lag) > 0.5 * self.settings["pose_period"] and not self._moving_on_said:
            self._moving_on_said = True
            self.log.info(
                f"obstacles and poses come from different moments (now {1e3 * order.view.lag:.0f} ms apart):"
                " obstacles are moved on to the pose's; diagnostics show obstacle_lag_s"
            )

    def _stop(self, halt: Halt) -> None:
        """Command zero; where nothing is wanted of the robot only a few times, so that others may drive it."""
        self._order = None
        self.state(halt.sentence, ERROR if halt.fault else OK)
        if halt.fault:
            self.warn(f"stopped_{halt.kind}", f"robot stopped: {halt.sentence}")
        if halt.kind == "no_goal" and self._zeros_left == 0:
            return
        self._zeros_left = max(0, self._zeros_left - 1) if halt.kind == "no_goal" else STOP_REPEATS
        self._send(0.0, 0.0, self.get_clock().now().nanoseconds)

    def _send(self, v: float, w: float, stamp: int) -> None:
        if self._command is not None:
            stamped = self.settings["stamped_cmd"]
            self._command.publish(convert.command_message(v, w, self.settings["base_frame"], stamp, stamped))

    def _watch(self) -> None:
        halt = self.pilot.watch(self._now())
        if halt is not None:
            self._stop(halt)

    def _now(self) -> int:
        if self._by_poses:
            stamp, came = self._newest
            return stamp + time.monotonic_ns() - came
        return time.monotonic_ns() if self._by_arrival else int(self.get_clock().now().nanoseconds)

    def _moment(self, stamp: int) -> int:
        """Return when obstacles were so, on the clock of the poses' moments."""
        return self._now() if self._by_arrival and not self.settings["match_stamps"] else stamp

    def close(self) -> None:
        """Stop the robot: three times, 30 ms apart, so that one is seen to leave before the context goes."""
        for _ in range(3):
            self._send(0.0, 0.0, self.get_clock().now().nanoseconds)
            time.sleep(0.03)

    # parameters, pictures, diagnostics

    def _on_set(self, parameters: list[Parameter]) -> SetParametersResult:
        claim = next((parameter.value for parameter in parameters if parameter.name == CLAIM), None)
        if claim is not None and (reason := self._lease.refusal(claim)):
            return SetParametersResult(successful=False, reason=reason)
        episode = self.pilot.episode
        if episode is not None and any(parameter.name in _TUNABLE for parameter in parameters):
            return SetParametersResult(
                successful=False, reason=f"refused: an episode is running ({episode}); try again after it"
            )  # fmt: skip
        try:
            for parameter in parameters:
                if parameter.name in _TUNABLE:
                    _TUNABLE[parameter.name].check(parameter.value)
        except InputError as error:
            return SetParametersResult(successful=False, reason=f"refused: {error}")
        return SetParametersResult(successful=True)

    def _post_set(self, parameters: list[Parameter]) -> None:
        changed = {parameter.name: parameter.value for parameter in parameters if parameter.name in _TUNABLE}
        for parameter in parameters:
            if parameter.name == CLAIM:
                self._lease.take(parameter.value)
        self.settings.update(changed)
        self.pilot.model = self.settings["field.model"]
        self.pilot.numbers = ParameterSet.from_ros(
            {row.name: self.settings[row.name] for row in tunable_settings()}
        ).numbers()  # fmt: skip

    def _draw(self) -> None:
        if self._field.get_subscription_count() == 0:
            return
        pilot = self.pilot
        stamp = int(self.get_clock().now().nanoseconds)
        picture = markers.Picture(
            self.frame, stamp, self._floor, self._robot, self._arrival, pilot.goal, pilot.seen(self._now()).obstacles,
            pilot.numbers, pilot.model, round(self.settings["field_arrows"]),
        )  # fmt: skip
        self._field.publish(markers.draw(picture))

    def values(self) -> dict[str, object]:
        """Return what diagnostics show of guidance."""
        order, episode = self._order, self.pilot.episode
        return {
            "episode": episode or "",
            "model": self.pilot.model,
            "held": self.pilot.held,
            "tuned_by": self._lease.holder,
            "obstacles": order.view.obstacles.x.shape[0] if order else "",
            "obstacle_lag_s": f"{order.view.lag:.3f}" if order else "",
        }


def main(args: Sequence[str] | None = None) -> int:
    """Run the guidance node; return the exit code."""
    return run("guidance_node", lambda context: GuidanceNode(context=context), args, events=True)


if __name__ == "__main__":
    sys.exit(main())
