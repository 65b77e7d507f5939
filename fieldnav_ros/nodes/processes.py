"""Starting nodes as processes of their own, and ending them, where no launch system does it."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import tempfile
import threading
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import FrameType, TracebackType
from typing import IO, Any

from fieldnav_ros.errors import WorkError

GRACE = 5.0
"""Seconds that a node has between SIGINT and SIGKILL."""


class Processes:
    """Node processes that live and end together; a context manager.

    Inside it SIGTERM and SIGHUP end this program by SystemExit, so that no node is left behind running.
    """

    def __init__(self) -> None:
        self._before: dict[int, Any] = {}
        self._children: dict[str, tuple[subprocess.Popen[bytes], IO[bytes]]] = {}

    def start(self, node: str, parameters: Mapping[str, object], files: Sequence[Path] = ()) -> None:
        """Start ``fieldnav_ros.nodes.<node>`` with parameter files, then single parameters on top."""
        words = [sys.executable, "-m", f"fieldnav_ros.nodes.{node}", "--ros-args"]
        for file in files:
            words += ["--params-file", str(file)]
        for name, value in parameters.items():
            words += ["-p", f"{name}:={_yaml(value)}"]
        log = tempfile.TemporaryFile()  # noqa: SIM115  (closed in stop, with the child that writes to it)
        child = subprocess.Popen(
            words, stdin=subprocess.DEVNULL, stdout=log, stderr=log, start_new_session=True
        )
        self._children[node] = (child, log)

    def check(self) -> None:
        """Raise WorkError, with the node's own last words, where one has ended."""
        for node, (child, log) in self._children.items():
            if child.poll() is not None:
                raise WorkError(f"{node} ended with code {child.returncode}: {_last_words(log)}")

    def kill(self, node: str, number: int) -> None:
        """Send one node a signal and wait for its end."""
        child, log = self._children.pop(node)
        child.send_signal(number)
        child.wait(GRACE)
        log.close()

    def send(self, node: str, number: int) -> None:
        """Send one node a signal and go on."""
        self._children[node][0].send_signal(number)

    def stop(self) -> None:
        """End all: SIGINT first, SIGKILL for whoever has not gone in time."""
        for child, _ in self._children.values():
            if child.poll() is None:
                child.send_signal(signal.SIGINT)
        for child, log in self._children.values():
            try:
                child.wait(GRACE)
            except subprocess.TimeoutExpired:
                child.kill()
                child.wait()
            log.close()
        self._children.clear()

    def __enter__(self) -> Processes:
        if threading.current_thread() is threading.main_thread():
            self._before = {number: signal.signal(number, _leave) for number in (signal.SIGTERM, signal.SIGHUP)}
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number in self._before:
            signal.signal(number, signal.SIG_IGN)  # the nodes are being ended already
        self.stop()
        for number, handler in self._before.items():
            signal.signal(number, handler)


def _leave(number: int, _frame: FrameType | None) -> None:
    raise SystemExit(128 + number)


def _yaml(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, (str, Path)):
        return "'" + str(value).replace("'", "''") + "'"
    return str(value)


def _last_words(log: IO[bytes]) -> str:
    log.seek(0, os.SEEK_END)
    log.seek(max(0, log.tell() - 2000))
    lines = [line for line in log.read().decode(errors="replace").splitlines() if line.strip()]
    return lines[-1] if lines else "no message"
