"""Where the executables begin: an interrupt that comes while they still import ends them without a traceback."""

from __future__ import annotations

import importlib
import os
import signal
from types import FrameType
from typing import NoReturn

INTERRUPTED = 128 + signal.SIGINT


def _leave(_number: int, _frame: FrameType | None) -> NoReturn:
    os._exit(INTERRUPTED)  # there is nothing to put in order yet


def _start(module: str) -> int:
    before = signal.signal(signal.SIGINT, _leave)
    main = importlib.import_module(f"fieldnav_ros.{module}").main
    signal.signal(signal.SIGINT, before)
    code: int = main()
    return code


def fieldnav() -> int:
    """Run the command line; return the exit code."""
    return _start("cli")


def guidance_node() -> int:
    """Run the guidance node; return the exit code."""
    return _start("nodes.guidance_node")


def judge_node() -> int:
    """Run the judge node; return the exit code."""
    return _start("nodes.judge_node")


def recorder_node() -> int:
    """Run the recorder node; return the exit code."""
    return _start("nodes.recorder_node")


def simulator_node() -> int:
    """Run the simulator node; return the exit code."""
    return _start("nodes.simulator_node")


def tuner_node() -> int:
    """Run the tuner node; return the exit code."""
    return _start("nodes.tuner_node")
