"""Whole sessions over DDS: simulator, judge, guidance and tuner, each a process of its own.

All figures are small, so that the file takes well under a minute; what a session decides is tested without ROS.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

import rclpy
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.parameter_client import AsyncParameterClient

from fieldnav_ros.nodes.demo import Files, tuner_parameters
from fieldnav_ros.nodes.processes import Processes
from fieldnav_ros.nodes.watch import Watch
from fieldnav_ros.params_file import read_parameters
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.events import EpisodeScored, Event
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Session

pytestmark = pytest.mark.ros
FLOOR_TIME, SEED = 3.0, 5
DEADLINE = 120.0
WORLD = ("simulator_node", "judge_node", "guidance_node")


def events_of(ledger: Path) -> list[Event]:
    with Ledger.read(ledger) as reader:
        return list(reader.events())


def scored(events: list[Event]) -> list[tuple[int, str, float, float]]:
    return [
        (event.episode_id, event.outcome.kind.value, event.outcome.time, event.cost)
        for event in events
        if isinstance(event, EpisodeScored)
    ]


def start(processes: Processes, node: str, folder: Path) -> None:
    """Start a node as the demo does; the tuner on the folder's ledger."""
    own = tuner_parameters(Files(folder), FLOOR_TIME, SEED) if node == "tuner_node" else {}
    files = [config_path(f"{node.removesuffix('_node')}.yaml"), config_path("lockstep.yaml")]
    processes.start(node, own, files)


@pytest.fixture
def world() -> Iterator[Processes]:
    with Processes() as processes:
        for node in WORLD:
            start(processes, node, Path())
        yield processes


@pytest.fixture
def watch() -> Iterator[Watch]:
    watch = Watch(Context())
    yield watch
    watch.close()


def until(condition: Callable[[], Any], watch: Watch, processes: Processes) -> None:
    end = time.monotonic() + DEADLINE
    while not condition():
        processes.check()
        watch.spin(0.05)
        assert time.monotonic() < end, "waited too long"


def begin(watch: Watch, processes: Processes) -> None:
    until(lambda: watch.call("begin", 1.0), watch, processes)


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> tuple[dict[str, Any], Path, str]:
    """A session run by the command line alone, from begin to end."""
    folder = tmp_path_factory.mktemp("undisturbed")
    words = [sys.executable, "-m", "fieldnav_ros.cli", "demo", "--out", str(folder), "--floor-time", str(FLOOR_TIME)]
    done = subprocess.run(
        [*words, "--seed", str(SEED), "--json"], capture_output=True, text=True, timeout=2 * DEADLINE, check=False
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1]), folder, done.stdout


def test_demo_tells_what_was_gained_and_where_the_files_are(undisturbed: tuple[dict[str, Any], Path, str]) -> None:
    summary, folder, shown = undisturbed
    assert summary["episodes"] == len(scored(events_of(folder / "session.ledger"))) > 10
    assert summary["cost_change"] == pytest.approx(summary["cost_champion"] / summary["cost_default"] - 1.0)
    for name in ("champion", "ledger"):
        assert Path(summary[name]).is_file()
        assert summary[name] in shown
    assert "layouts the search never saw" in shown


def test_champion_file_holds_the_ledgers_champion(undisturbed: tuple[dict[str, Any], Path, str]) -> None:
    session = Session()
    session.apply(*events_of(undisturbed[1] / "session.ledger"))
    assert session.ended
    assert read_parameters(undisturbed[1] / "champion.yaml") == session.champion.parameters


def test_champion_file_puts_its_numbers_in_service_by_params_file(
    undisturbed: tuple[dict[str, Any], Path, str],
) -> None:
    """What ``--params-file`` is for; the numbers are read back over DDS."""
    champion = undisturbed[1] / "champion.yaml"
    context = Context()
    rclpy.init(args=[], context=context)
    node = rclpy.create_node("reader", context=context)
    executor = SingleThreadedExecutor(context=context)
    executor.add_node(node)
    client = AsyncParameterClient(node, "guidance_node")
    with Processes() as processes:
        processes.start("guidance_node", {}, [champion])
        assert client.wait_for_services(DEADLINE)
        wanted = read_parameters(champion).to_ros()
        future = client.get_parameters(list(wanted))
        executor.spin_until_future_complete(future, timeout_sec=DEADLINE)
        assert [value.double_value for value in future.result().values] == list(wanted.values())
        processes.check()
    executor.shutdown()
    node.destroy_node()
    context.try_shutdown()


def test_tuner_killed_twice_goes_on_to_the_very_same_episodes(
    undisturbed: tuple[dict[str, Any], Path, str], world: Processes, watch: Watch, tmp_path: Path
) -> None:
    """Same seed, same episodes with the same outcomes, to the last bit, although the tuner was killed in between."""
    ledger = tmp_path / "session.ledger"
    for kill_after in (3, 9, None):
        start(world, "tuner_node", tmp_path)
        begin(watch, world)
        if kill_after is None:
            until(lambda: watch.status and watch.status.message == "session ended", watch, world)
        else:
            until(lambda: len(scored(events_of(ledger))) >= kill_after, watch, world)  # noqa: B023  (called at once)
            world.kill("tuner_node", signal.SIGKILL)
            watch.status = None
    want, got = events_of(undisturbed[1] / "session.ledger"), events_of(ledger)
    assert scored(got) == scored(want)
    assert (tmp_path / "champion.yaml").read_text() == (undisturbed[1] / "champion.yaml").read_text()


def test_match_call_puts_the_champion_back_while_an_episode_runs(
    world: Processes, watch: Watch, tmp_path: Path
) -> None:
    start(world, "tuner_node", tmp_path)
    begin(watch, world)
    until(lambda: len(scored(events_of(tmp_path / "session.ledger"))) >= 2, watch, world)
    answer = watch.call("release", 10.0)
    assert answer is not None
    assert "champion initial is in service" in answer
    until(lambda: watch.status and watch.status.state == "released", watch, world)
    session = Session()
    session.apply(*events_of(tmp_path / "session.ledger"))
    assert session.pending() == []
    assert os.path.exists(tmp_path / "champion.yaml")
