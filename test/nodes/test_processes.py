"""Nodes that a program starts never outlive it, however it is asked to go."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

pytestmark = pytest.mark.ros
# A build server may have started all this deaf to SIGINT, which is inherited; who sits at a terminal is not.
PROGRAM = """
import signal, time
signal.signal(signal.SIGINT, signal.default_int_handler)
from fieldnav_ros.nodes.processes import Processes
with Processes() as processes:
    processes.start("judge_node", {})
    ((child, _),) = processes._children.values()
    print(child.pid, flush=True)
    time.sleep(60)
"""


def gone(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] == "Z"
    except FileNotFoundError:
        return True


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGINT])
def test_a_program_that_is_told_to_go_takes_its_nodes_along(root: Path, number: signal.Signals) -> None:
    environment = {**os.environ, "PYTHONPATH": str(root)}
    with subprocess.Popen(
        [sys.executable, "-c", PROGRAM], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment
    ) as program:
        assert program.stdout is not None
        pid = int(program.stdout.readline())
        program.send_signal(number)
        program.wait(30)
    end = time.monotonic() + 10
    while not gone(pid):
        assert time.monotonic() < end, "the node lives on"
        time.sleep(0.05)
