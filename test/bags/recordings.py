"""Bags for tests: episodes of the built-in world, driven and judged as in a session, written by ``Bag`` itself.

Messages are serialised by ``rosbags``, so that nothing here needs ROS.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Sequence
from functools import cache
from pathlib import Path
from typing import Any

from episodes import YARD, as_nodes_do

from fieldnav_ros.bags.bag import Bag, Channel
from fieldnav_ros.bags.definitions import typestore
from fieldnav_ros.crowd import NANO, Reading, Sighting
from fieldnav_ros.model import Layout, Outcome
from fieldnav_ros.nodes.payloads import EpisodeOutcome, RunEpisode, StopEpisode, encode
from fieldnav_ros.parameters import DEFAULTS, ParameterSet

BEGAN = 1_700_000_000 * NANO
CHANNELS = (
    Channel("episode/request", "/episode/request", "std_msgs/msg/String"),
    Channel("episode/outcome", "/episode/outcome", "std_msgs/msg/String"),
    Channel("pose", "/tracker/robot", "geometry_msgs/msg/PoseStamped"),
    Channel("obstacles", "/obstacles", "geometry_msgs/msg/PoseArray"),
)
LOCKSTEP = {"match_stamps": "true", "pose_age_from": "stamp"}
PACED = {"match_stamps": "false", "pose_age_from": "stamp"}
Line = tuple[int, int, bytes]
"""Channel, time of arrival (ns), data."""


def types() -> Any:
    return typestore().types


def pack(message: Any) -> bytes:
    return bytes(typestore().serialize_cdr(message, message.__msgtype__))


def text(payload: Any) -> bytes:
    content = payload if isinstance(payload, str) else encode(payload)
    return pack(types()["std_msgs/msg/String"](data=content))


def _header(stamp: int, frame: str) -> Any:
    time = types()["builtin_interfaces/msg/Time"](sec=stamp // NANO, nanosec=stamp % NANO)
    return types()["std_msgs/msg/Header"](stamp=time, frame_id=frame)


def _pose(x: float, y: float, yaw: float) -> Any:
    known = types()
    return known["geometry_msgs/msg/Pose"](
        position=known["geometry_msgs/msg/Point"](x=x, y=y, z=0.0),
        orientation=known["geometry_msgs/msg/Quaternion"](x=0.0, y=0.0, z=math.sin(yaw / 2), w=math.cos(yaw / 2)),
    )


def pose(reading: Reading, frame: str = "map") -> bytes:
    kind = types()["geometry_msgs/msg/PoseStamped"]
    return pack(kind(header=_header(reading.stamp, frame), pose=_pose(*reading[1:])))


def obstacles(sighting: Sighting, frame: str = "map") -> bytes:
    poses = [_pose(float(x), float(y), 0.0) for x, y in sighting.places.T]
    return pack(types()["geometry_msgs/msg/PoseArray"](header=_header(sighting.stamp, frame), poses=poses))


def asked(name: str, layout: Layout, limit: float, set_id: str = "initial") -> RunEpisode:
    return RunEpisode(
        episode=name, set=set_id, layout=layout, frame="map", time_limit=limit, arrival=YARD.arrival
    )  # fmt: skip


@cache
def drive(
    layout: Layout, limit: float, parameters: ParameterSet = DEFAULTS
) -> tuple[list[tuple[Sighting, Reading]], Outcome]:
    """Run an episode as nodes do and return what was seen at each pose, and what the judge's rules said."""
    return as_nodes_do(YARD, layout, limit, parameters)


def lines_of(
    request: RunEpisode, seen: Sequence[tuple[Sighting, Reading]], outcome: Outcome | None, stamp: float | None = None
) -> list[Line]:
    """Return a recording: the request, each moment's obstacles and pose, the outcome and the word to stop."""
    lines: list[Line] = [(0, BEGAN, text(request))]
    for sighting, reading in seen:
        now = BEGAN + reading.stamp
        lines += [(3, now, obstacles(sighting)), (2, now + 1000, pose(reading))]
    if outcome is not None:
        said = EpisodeOutcome(
            episode=request.episode, kind=outcome.kind, time=outcome.time, source="judge",
            stamp=seen[-1][1].stamp / NANO if stamp is None else stamp,
        )  # fmt: skip
        end = lines[-1][1] + 1000
        lines += [(1, end, text(said)), (0, end + 1000, text(StopEpisode(episode=request.episode)))]
    return lines


def write(
    folder: Path, name: str, lines: Iterable[Line], about: dict[str, str] | None = None, flush_every: int = 50
) -> Path:
    """Write a bag and return its MCAP file."""
    bag = Bag(folder, name, CHANNELS, {"schema": "1", "episode": name, **(about or LOCKSTEP)})
    for count, (channel, when, data) in enumerate(lines, start=1):
        bag.write(channel, when, when, data)
        if count % flush_every == 0:
            bag.flush()
    bag.close()
    return folder / name / f"{name}_0.mcap"


def recorded(
    folder: Path,
    name: str,
    layout: Layout,
    limit: float,
    parameters: ParameterSet = DEFAULTS,
    set_id: str = "initial",
    change: Callable[[list[Line]], list[Line]] = lambda lines: lines,
    about: dict[str, str] | None = None,
) -> tuple[Path, Outcome]:
    """Drive an episode and write it, its lines ``change``d; return the file and the judge's own outcome."""
    seen, outcome = drive(layout, limit, parameters)
    lines = change(lines_of(asked(name, layout, limit, set_id), seen, outcome))
    return write(folder, name, lines, about), outcome
