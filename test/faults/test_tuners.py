"""Two tuners where there must be one, and strangers who change numbers in the middle of a session."""

from __future__ import annotations

import re
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="starts real nodes")

from faults.conftest import Tell
from nodes.test_tuner_on_site import YARD, Site, events_of, tuner
from rcl_interfaces.msg import Parameter, ParameterType, ParameterValue
from rcl_interfaces.srv import GetParameters, SetParameters
from ros_probe import DEADLINE, NodeProcess
from std_msgs.msg import String

from fieldnav_ros.model import Pose
from fieldnav_ros.nodes.base import LATCHED
from fieldnav_ros.nodes.claim import CLAIM
from fieldnav_ros.nodes.payloads import StopEpisode

pytestmark = pytest.mark.ros


class Watcher(Site):
    """A site that can forget what it heard of an earlier tuner."""

    def forget(self) -> None:
        self._requests.clear()
        self._statuses.clear()


@pytest.fixture
def site() -> Iterator[Watcher]:
    with NodeProcess("guidance_node"), Watcher() as site:
        yield site


@contextmanager
def second(folder: Path, name: str, ledger: str) -> Iterator[subprocess.Popen[str]]:
    """Run another tuner beside the first, under a name of its own; its standard error is kept."""
    values = (f"ledger:={folder / ledger}", f"champion_file:={folder / name}.yaml", "begin:=true", "outcomes:=referee")
    words = [word for value in values for word in ("-p", value)]
    remap = ["-r", f"__node:={name}", "-r", f"tuner/status:={name}/status", "-r", "episode/request:=second/request"]
    with subprocess.Popen(
        [sys.executable, "-m", "fieldnav_ros.nodes.tuner_node", "--ros-args", *remap, *words],
        stdin=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True,
    ) as child:  # fmt: skip
        try:
            yield child
        finally:
            child.kill()


def sentence_of(child: subprocess.Popen[str], site: Site) -> str:
    """Wait for a tuner to end with code 1 and return the one sentence that it ends with."""
    site.wait(lambda: child.poll() is not None)
    assert child.stderr is not None
    said = [line for line in child.stderr.read().splitlines() if not line.startswith("[INFO]")]
    assert child.returncode == 1, said
    assert len(said) == 1, said
    return said[0]


def holder(site: Site) -> str:
    answer = site.call(GetParameters, "guidance_node/get_parameters", GetParameters.Request(names=[CLAIM]))
    return str(answer.values[0].string_value)


def test_a_second_tuner_is_refused_and_disturbs_nothing_and_a_dead_ones_claim_runs_out(
    site: Watcher, tmp_path: Path, tell: Tell
) -> None:
    """On the same ledger and on the same guidance node; the first is then killed, as is guidance."""
    with tuner(tmp_path, outcomes="referee", outcome_deadline=600.0) as first:
        site.begin()
        running = site.wait(lambda: site.running)
        numbers = site.numbers()
        requests = site.hear(String, "second/request", LATCHED)
        with second(tmp_path, "tuner_b", "s.ledger") as same, second(tmp_path, "tuner_c", "other.ledger") as other:
            said = sentence_of(same, site)
            assert f"process {first.child.pid} on " in said
            assert "writes to this ledger already" in said
            said = sentence_of(other, site)
            assert re.match(rf"tuner_node: .*another tuner is at work: /tuner_node on .*{tmp_path / 's.ledger'}$", said)
        assert requests == [], "it asked for nothing"
        assert site.numbers() == numbers
        assert site.running == running
        assert not isinstance(site.requests[-1], StopEpisode)
        assert first.child.poll() is None
        first.child.kill()
        first.child.wait(DEADLINE)
    tell("tuner: a second one on the same ledger", 1, "refused, the first named by its process")
    site.forget()
    with tuner(tmp_path, outcomes="referee") as again:
        site.begin()
        site.wait(lambda: site.running)
        again.child.kill()
        again.child.wait(DEADLINE)
    with second(tmp_path, "tuner_d", "other.ledger"):
        site.wait(lambda: "other.ledger" in holder(site))
    tell("tuner: a second one on the same guidance node", 1, "refused, the first named; a dead one's claim runs out")


def stranger_sets(site: Site, name: str, value: float) -> str:
    """Set one number as any tool may; return guidance's reason, empty where it was taken."""
    number = ParameterValue(type=ParameterType.PARAMETER_DOUBLE, double_value=value)
    request = SetParameters.Request(parameters=[Parameter(name=name, value=number)])
    result = site.call(SetParameters, "guidance_node/set_parameters", request).results[0]
    return "" if result.successful else str(result.reason)


def test_a_strangers_number_is_refused_in_an_episode_and_found_said_and_recorded_between_episodes(
    site: Watcher, tmp_path: Path, tell: Tell
) -> None:
    """Between episodes means here: the tuner waits for a robot to be carried to its start."""
    words = {"outcomes": "referee", "return": "operator", "starts": "marks", "start_rest": 0.2}
    with tuner(tmp_path, **words):
        site.wait(lambda: site.status and site.status.in_service)
        site.begin()
        site.wait(lambda: site.status and site.status.state == "placing" and site.status.in_service)
        assert stranger_sets(site, "field.turn_radius", 0.21) == ""
        assert stranger_sets(site, "field.turn_radius", 9.0) != "", "out of its range"
        site.at = start_of(site)
        first = site.wait(lambda: site.running)
        assert 0.21 not in site.numbers(), "the set asked for is in service, not the stranger's"
        (noted,) = [event for event in events_of(tmp_path, "noted") if "changed by somebody else" in event.text]
        assert noted.source == "tuner"
        assert site.wait(lambda: site.status and [word for word in site.status.warnings if "somebody else" in word])
        before = site.numbers()
        assert "refused: an episode is running" in stranger_sets(site, "field.turn_radius", 0.22)
        assert site.numbers() == before
        site.report(first.episode, "referee")
        site.wait(lambda: site.status and site.status.episodes_done == 1)
    tell("guidance: a stranger's number", 3, "refused in an episode; found, said and recorded between episodes")


def start_of(site: Site) -> Pose:
    site.wait(lambda: site.status and re.search(r"mark (\S+) ", site.status.todo))
    assert site.status is not None
    mark = next(mark for mark in YARD.marks if f"mark {mark.name} " in site.status.todo)
    return Pose(x=mark.x, y=mark.y, yaw=mark.yaw)
