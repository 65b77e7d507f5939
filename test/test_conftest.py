"""The test environment itself: domains are not shared, and nothing is skipped unseen on a build server."""

from __future__ import annotations

import json
import os
import shutil
import socket
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from fieldnav_ros.nodes.domain import claim_domain

PRINT_ENVIRONMENT = """
import json, os, pytest

@pytest.mark.ros
def test_needs_ros():
    pass

def test_needs_nothing():
    names = ("ROS_DOMAIN_ID", "ROS_AUTOMATIC_DISCOVERY_RANGE", "FASTDDS_BUILTIN_TRANSPORTS", "ROS_LOG_DIR",
             "ROS_PYTHON_CHECK_FIELDS")
    print("SEEN" + json.dumps({name: os.environ[name] for name in names}))
"""

Runner = Callable[[str, bool], "subprocess.CompletedProcess[str]"]


@pytest.fixture
def run_pytest(root: Path, tmp_path: Path) -> Runner:
    """Return a function that runs the suite's conftest on a small module, with ROS hidden if wanted."""
    shutil.copy(root / "test" / "conftest.py", tmp_path)
    (tmp_path / "test_small.py").write_text(PRINT_ENVIRONMENT)
    (tmp_path / "pytest.ini").write_text("[pytest]\nmarkers =\n    ros: needs rclpy\n")
    (tmp_path / "hide_ros.py").write_text(
        "import importlib.util as u\nfound = u.find_spec\n"
        "u.find_spec = lambda name, package=None: None if name == 'rclpy' else found(name, package)\n"
    )

    def run(ci: str, hide: bool) -> subprocess.CompletedProcess[str]:
        options = ["-p", "hide_ros"] if hide else []
        return subprocess.run(
            [sys.executable, "-m", "pytest", "-s", "-rs", "-p", "no:cacheprovider", *options],
            cwd=tmp_path,
            env={**os.environ, "CI": ci, "PYTEST_ADDOPTS": "", "PYTHONPATH": f"{root}:{root / 'test'}"},
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )

    return run


def test_without_ros_tests_of_nodes_are_skipped_with_the_reason(run_pytest: Runner) -> None:
    result = run_pytest("", True)
    assert result.returncode == 0, result.stdout
    assert "1 passed, 1 skipped" in result.stdout
    assert "rclpy cannot be imported" in result.stdout


def test_without_ros_a_build_server_fails(run_pytest: Runner) -> None:
    result = run_pytest("true", True)
    assert result.returncode == pytest.ExitCode.USAGE_ERROR
    assert "rclpy cannot be imported" in result.stderr


@pytest.mark.ros
def test_processes_get_different_domains_and_the_same_settings(run_pytest: Runner) -> None:
    result = run_pytest("true", False)
    assert "2 passed" in result.stdout, result.stdout + result.stderr
    (line,) = [line for line in result.stdout.splitlines() if "SEEN" in line]
    seen = json.loads(line.partition("SEEN")[2].rstrip("."))
    assert 1 <= int(seen["ROS_DOMAIN_ID"]) <= 101
    assert seen["ROS_DOMAIN_ID"] != os.environ["ROS_DOMAIN_ID"]
    assert seen["ROS_AUTOMATIC_DISCOVERY_RANGE"] == "LOCALHOST"
    assert seen["FASTDDS_BUILTIN_TRANSPORTS"] == "UDPv4"
    assert seen["ROS_PYTHON_CHECK_FIELDS"] == "1"
    assert not Path(seen["ROS_LOG_DIR"]).exists(), "logs are left behind"


def test_a_domain_is_held_until_its_socket_closes() -> None:
    first, held = claim_domain(40)
    second, other = claim_domain(40)
    with held, other:
        assert second != first
    third, again = claim_domain(first - 1)
    with again:
        assert third == first


def test_a_domain_that_a_participant_uses_is_passed_over() -> None:
    """Participant 0 listens on port 7410 + 250 * domain (OMG DDSI-RTPS, default port numbers)."""
    free, held = claim_domain(60)
    held.close()
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as participant:
        participant.bind(("", 7410 + 250 * free))
        taken, held = claim_domain(free - 1)
        with held:
            assert taken != free
