"""The recorder at 1,000 messages per second: what it loses, and what share of a core it takes.

    python test/benchmark/recorder.py [--rate 1000] [--seconds 10] [--repeats 3]

A quarter of the rate each of pose, obstacles (four carts), heading and cmd_vel, published by this process and recorded
by ``recorder_node`` in one of its own. Processor time is the recorder's own, from /proc, over the time of the sending;
share is that time over the time passed. Lost are messages that were sent and are in no bag, by ``mcap``'s reader.
"""

from __future__ import annotations

import argparse
import json
import os
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT.parent)]

import numpy as np
from geometry_msgs.msg import PoseArray, PoseStamped, TwistStamped
from mcap.reader import make_reader
from ros_probe import NodeProcess, Probe
from std_msgs.msg import String

from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.nodes.base import LATCHED, RELIABLE, SENSOR
from fieldnav_ros.nodes.convert import command_message, obstacles_message, pose_message
from fieldnav_ros.nodes.domain import claim_domain
from fieldnav_ros.nodes.payloads import RunEpisode, StopEpisode, encode

LAYOUT = Layout(start=Pose(x=0.5, y=0.8, yaw=0.0), goal=Pose(x=2.0, y=0.8, yaw=0.0))
CARTS = np.array([[0.4, 0.8, 1.2, 1.6], [0.3, 0.6, 0.9, 1.2], [0.0, 1.0, 2.0, 3.0]])
SETTLING = 2.0
"""Seconds that the middleware has for messages on their way."""


def cpu_seconds(pid: int) -> float:
    """Return user and system time of a process and its threads (proc(5))."""
    parts = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
    return (int(parts[11]) + int(parts[12])) / os.sysconf("SC_CLK_TCK")


def run(rate: float, seconds: float, name: str, bags: Path) -> dict[str, float]:
    """Record one episode at this rate (messages per s) and return what it took."""
    with NodeProcess("recorder_node", [f"bags:={bags}", "tail:=0.2"]) as node, Probe() as probe:
        make = probe.node.create_publisher
        request = make(String, "episode/request", LATCHED)
        moving: list[tuple[Any, Any]] = [
            (make(PoseStamped, "pose", SENSOR), lambda n: pose_message(0.1, 0.2, 0.3, "map", n)),
            (make(PoseArray, "obstacles", SENSOR), lambda n: obstacles_message(CARTS[0], CARTS[1], CARTS[2], "map", n)),
            (make(PoseStamped, "heading", RELIABLE), lambda n: pose_message(0.1, 0.2, 0.3, "map", n)),
            (make(TwistStamped, "cmd_vel", RELIABLE), lambda n: command_message(0.5, 0.1, "base_link", n, True)),
        ]
        probe.until(lambda: request.get_subscription_count() and all(p.get_subscription_count() for p, _ in moving))
        asked = RunEpisode(episode=name, set="s", layout=LAYOUT, frame="map", time_limit=600.0)
        request.publish(String(data=encode(asked)))
        probe.until(lambda: list((bags / name).glob("*.mcap")))
        sent, began, before = 0, time.monotonic(), cpu_seconds(node.child.pid)
        while (now := time.monotonic() - began) < seconds:
            while sent < now * rate:
                publisher, message = moving[sent % 4]
                publisher.publish(message(sent + 1))
                sent += 1
            time.sleep(0.0005)
        took, used = time.monotonic() - began, cpu_seconds(node.child.pid) - before
        end = time.monotonic() + SETTLING
        while time.monotonic() < end:
            probe.spin(0.1)
        request.publish(String(data=encode(StopEpisode(episode=name))))
        [file] = (bags / name).glob("*.mcap")
        probe.until(lambda: file.read_bytes()[-8:] == b"\x89MCAP0\r\n" and file.stat().st_size > 1000)
        node.end()
    with file.open("rb") as stream:
        topics = ["/pose", "/obstacles", "/heading", "/cmd_vel"]
        kept = sum(1 for _ in make_reader(stream).iter_messages(topics=topics))
    return {"rate": sent / took, "sent": sent, "lost": sent - kept, "core_share": used / took}


def main() -> None:
    """Measure some times and print a line of JSON last."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--rate", type=float, default=1000.0, help="messages per s")
    parser.add_argument("--seconds", type=float, default=10.0, help="of sending")
    parser.add_argument("--repeats", type=int, default=3)
    given = parser.parse_args()
    domain, claim = claim_domain(os.getpid())
    with claim, tempfile.TemporaryDirectory(prefix="fieldnav-recorder-") as folder:
        os.environ.update(
            ROS_DOMAIN_ID=str(domain), ROS_AUTOMATIC_DISCOVERY_RANGE="LOCALHOST", ROS_LOG_DIR=folder,
            FASTDDS_BUILTIN_TRANSPORTS="UDPv4", PYTHONPATH=os.pathsep.join(sys.path[:2]),
        )  # fmt: skip
        results = [run(given.rate, given.seconds, f"bench.{n}", Path(folder)) for n in range(given.repeats)]
    for item in results:
        print(
            f"{item['rate']:7.0f} messages/s   lost {item['lost']:.0f} of {item['sent']:.0f}   "
            f"{item['core_share']:.1%} of a core"
        )
    shares = sorted(item["core_share"] for item in results)
    print(json.dumps({
        "rate": round(min(item["rate"] for item in results), 1), "sent": sum(item["sent"] for item in results),
        "lost": sum(item["lost"] for item in results), "core_share": round(shares[len(shares) // 2], 4),
        "core_share_least": round(shares[0], 4),
    }))  # fmt: skip


if __name__ == "__main__":
    main()
