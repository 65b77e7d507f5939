"""What every test process gets: a ROS domain of its own, logs out of the way, and no quiet skips on a build server."""

from __future__ import annotations

import importlib.util
import os
import shutil
import tempfile
from pathlib import Path

import pytest
from faults.table import pytest_terminal_summary as pytest_terminal_summary  # a hook: the table of faults
from hypothesis import settings

from fieldnav_ros.nodes.domain import claim_domain

# A busy machine is no fault: nothing here asserts how long a single example takes.
settings.register_profile("fieldnav", settings.default, deadline=None)
settings.load_profile("fieldnav")


def on_build_server() -> bool:
    """Tell whether a test that cannot run counts as a fault."""
    return os.environ.get("CI", "").lower() in {"1", "true"}


def pytest_configure(config: pytest.Config) -> None:
    """Set up the environment that this process and all it starts see."""
    if on_build_server() and not has_ros():
        # Said here, not test by test, so that a module which skips itself as a whole is no way around it.
        raise pytest.UsageError("CI is set, but rclpy cannot be imported: tests of the nodes would be skipped")
    logs = tempfile.mkdtemp(prefix="fieldnav-ros-log-")
    domain, claim = claim_domain(os.getpid())
    config.add_cleanup(claim.close)
    config.add_cleanup(lambda: shutil.rmtree(logs, ignore_errors=True))
    os.environ.update(
        ROS_DOMAIN_ID=str(domain),
        ROS_AUTOMATIC_DISCOVERY_RANGE="LOCALHOST",
        FASTDDS_BUILTIN_TRANSPORTS="UDPv4",  # killed processes would leave files of shared memory behind
        ROS_LOG_DIR=logs,
        ROS_PYTHON_CHECK_FIELDS="1",
    )


def has_ros() -> bool:
    """Tell whether rclpy can be imported, without importing it."""
    return importlib.util.find_spec("rclpy") is not None


def pytest_runtest_setup(item: pytest.Item) -> None:
    """Skip what needs ROS where there is none."""
    if item.get_closest_marker("ros") and not has_ros():
        pytest.skip("rclpy cannot be imported: source a ROS 2 installation or install the extra 'ros'")


@pytest.fixture(scope="session")
def root() -> Path:
    """The folder of the checkout."""
    return Path(__file__).resolve().parent.parent
