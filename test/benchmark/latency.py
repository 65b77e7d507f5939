"""From a pose to the command made from it, across processes, beside a bare relay of the same messages.

    python test/benchmark/latency.py [--seconds 10] [--rounds 3] [--rates 50 200 500]

This process publishes obstacles (10) and a pose, the guidance node answers with a stamped command; a relay in rclpy
that does nothing but copy the stamp answers in the same way. The two take turns, rate by rate, round by round, so that
a busy machine costs both. Default QoS of a tracking system (best effort): a pose without an answer within half a
second counts as missed. Times in ms; the figures are medians over the rounds; the last line is JSON.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import subprocess
import sys
import time
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve()
sys.path.insert(0, str(HERE.parents[2]))

import rclpy
from geometry_msgs.msg import PoseArray, PoseStamped, TwistStamped
from rclpy.context import Context
from rclpy.executors import Executor
from rclpy.experimental.events_executor import EventsExecutor
from rclpy.qos import qos_profile_sensor_data

from fieldnav_ros.nodes.base import LATCHED, RELIABLE
from fieldnav_ros.nodes.convert import command_message, nanoseconds, obstacles_message, pose_message
from fieldnav_ros.nodes.domain import Domain

OBSTACLES = 10
FRAME = "map"
LATE = 0.5
START_LIMIT = 30.0
SIDES = ("guidance", "relay")
FIGURES = ("p50", "p99", "worst", "missed")


class Relay:
    """Answers a pose with a command that carries its stamp, and listens to obstacles: what messages alone cost."""

    def __init__(self, context: Context) -> None:
        self.node = rclpy.create_node("relay", context=context)
        self._command = self.node.create_publisher(TwistStamped, "cmd_vel", RELIABLE)
        self._heading = self.node.create_publisher(PoseStamped, "heading", RELIABLE)
        self.node.create_subscription(PoseStamped, "pose", self._answer, qos_profile_sensor_data)
        self.node.create_subscription(PoseArray, "obstacles", lambda _: None, qos_profile_sensor_data)

    def _answer(self, pose: PoseStamped) -> None:
        stamp = nanoseconds(pose.header.stamp)
        self._heading.publish(pose)
        self._command.publish(command_message(0.1, 0.1, "base_link", stamp, True))


class Side:
    """One of the two that answer, seen from here: publishers, and when each stamp was sent and answered."""

    def __init__(self, node: rclpy.node.Node, name: str) -> None:
        self.name = name
        self._pose = node.create_publisher(PoseStamped, f"{name}/pose", qos_profile_sensor_data)
        self._obstacles = node.create_publisher(PoseArray, f"{name}/obstacles", qos_profile_sensor_data)
        goal = node.create_publisher(PoseStamped, f"{name}/goal", LATCHED)
        goal.publish(pose_message(1.8, 0.7, 0.3, FRAME, 0))
        node.create_subscription(TwistStamped, f"{name}/cmd_vel", self._hear, RELIABLE)
        self.sent: dict[int, float] = {}
        self.took: dict[int, float] = {}
        self._number = 0

    def _hear(self, message: TwistStamped) -> None:
        stamp = nanoseconds(message.header.stamp)
        if stamp in self.sent and stamp not in self.took:
            self.took[stamp] = time.perf_counter() - self.sent[stamp]

    def send(self) -> None:
        """Publish ten obstacles that circle and a pose that hardly moves."""
        self._number += 1
        stamp = time.time_ns()
        angle = 2.0 * np.pi * np.arange(OBSTACLES) / OBSTACLES + 1e-3 * self._number
        x, y = 1.2 + 0.4 * np.cos(angle), 0.7 + 0.4 * np.sin(angle)
        obstacles = obstacles_message(x, y, angle, FRAME, stamp)
        pose = pose_message(0.3 + 1e-4 * math.sin(0.1 * self._number), 0.7, 0.0, FRAME, stamp)
        self._obstacles.publish(obstacles)
        self.sent[stamp] = time.perf_counter()
        self._pose.publish(pose)

    def clear(self) -> None:
        """Forget what was sent."""
        self.sent.clear()
        self.took.clear()


def drive(side: Side, executor: Executor, rate: float, seconds: float) -> dict[str, float]:
    """Send poses at a rate (Hz) and return the figures (ms) of the answers."""
    side.clear()
    due = time.perf_counter()
    for _ in range(round(rate * seconds)):
        side.send()
        due += 1.0 / rate
        while (left := due - time.perf_counter()) > 0.0:
            executor.spin_once(timeout_sec=left)
    end = time.perf_counter() + LATE
    while len(side.took) < len(side.sent) and time.perf_counter() < end:
        executor.spin_once(timeout_sec=0.01)
    took = 1e3 * np.array(list(side.took.values()))
    return {
        "p50": float(np.percentile(took, 50)), "p99": float(np.percentile(took, 99)), "worst": float(took.max()),
        "missed": float(len(side.sent) - np.count_nonzero(took < 1e3 * LATE)),
    }  # fmt: skip


def wait_for(side: Side, executor: Executor) -> None:
    """Send until an answer comes."""
    end = time.monotonic() + START_LIMIT
    while len(side.took) < 20:
        side.send()
        executor.spin_once(timeout_sec=0.02)
        if time.monotonic() > end:
            raise SystemExit(f"{side.name} did not answer within {START_LIMIT:g} s")


def start() -> list[subprocess.Popen[bytes]]:
    """Start the guidance node and the relay, each in a namespace of its own."""
    words = {
        "guidance": ["-m", "fieldnav_ros.nodes.guidance_node", "--ros-args", "-p", "pose_period:=0.005"],
        "relay": [str(HERE), "--relay", "--ros-args"],
    }
    everything = {**os.environ, "PYTHONPATH": str(HERE.parents[2])}
    return [
        subprocess.Popen([sys.executable, *words[side], "-r", f"__ns:=/{side}"], env=everything) for side in SIDES
    ]  # fmt: skip


def relay() -> None:
    """Be the relay until SIGTERM."""
    context = Context()
    rclpy.init(args=sys.argv, context=context)
    executor = EventsExecutor(context=context)
    executor.add_node(Relay(context).node)
    while context.ok():
        executor.spin_once(timeout_sec=0.1)


def main() -> None:
    """Measure, print the table, and JSON last."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--seconds", type=float, default=10.0, help="of each rate, side and round")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--rates", type=float, nargs="+", default=[50.0, 200.0, 500.0])
    given = parser.parse_args()
    domain = Domain()
    domain.enter()
    context = Context()
    rclpy.init(args=[], context=context)
    node = rclpy.create_node("latency", context=context)
    executor = EventsExecutor(context=context)
    executor.add_node(node)
    children = start()
    try:
        sides = [Side(node, name) for name in SIDES]
        for side in sides:
            wait_for(side, executor)
        found: dict[tuple[float, str], list[dict[str, float]]] = {}
        for _ in range(given.rounds):
            for rate in given.rates:
                for side in sides:
                    found.setdefault((rate, side.name), []).append(drive(side, executor, rate, given.seconds))
    finally:
        for child in children:
            child.terminate()
        for child in children:
            child.wait()
        context.try_shutdown()
    report(found, given.rates)


def report(found: dict[tuple[float, str], list[dict[str, float]]], rates: list[float]) -> None:
    """Print medians over the rounds (missed: the sum) and the JSON line."""
    summary: dict[str, float] = {}
    print(f"{'Hz':>5s} {'':9s}" + "".join(f"{name:>9s}" for name in FIGURES))
    for rate in rates:
        p99 = {}
        for side in SIDES:
            rounds = found[rate, side]
            middle = {name: float(np.median([each[name] for each in rounds])) for name in FIGURES}
            middle["missed"] = sum(each["missed"] for each in rounds)
            p99[side] = middle["p99"]
            summary[f"missed_{rate:g}hz" if side == "guidance" else f"relay_missed_{rate:g}hz"] = middle["missed"]
            print(f"{rate:5g} {side:9s}" + "".join(f"{middle[name]:9.3f}" for name in FIGURES))
        summary[f"p99_ratio_{rate:g}hz"] = round(p99["guidance"] / p99["relay"], 3)
    print(json.dumps(summary))


if __name__ == "__main__":
    relay() if "--relay" in sys.argv else main()
