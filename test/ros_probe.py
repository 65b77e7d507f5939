"""What tests of running nodes need: node processes, and a node of the test's own that sends, collects and waits."""

from __future__ import annotations

import signal
import subprocess
import sys
import time
from collections import defaultdict
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, TypeVar

import rclpy
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.qos import QoSProfile

DEADLINE = 60.0
Self = TypeVar("Self", bound="Probe")


class NodeProcess:
    """One node in a process of its own; a context manager that leaves nothing behind."""

    def __init__(
        self, name: str, words: Sequence[str] = (), files: Sequence[Path] = (), namespace: str = ""
    ) -> None:
        given = [word for file in files for word in ("--params-file", str(file))]
        given += [word for value in words for word in ("-p", value)]
        given += ["-r", f"__ns:={namespace}"] if namespace else []
        self.child = subprocess.Popen(
            [sys.executable, "-m", f"fieldnav_ros.nodes.{name}", "--ros-args", *given], stdin=subprocess.DEVNULL
        )

    def __enter__(self) -> NodeProcess:
        return self

    def __exit__(self, *_: object) -> None:
        if self.child.poll() is None:
            self.child.kill()
        self.child.wait()

    def end(self, number: signal.Signals = signal.SIGTERM) -> int:
        """Ask the node to end and return its exit code."""
        self.child.send_signal(number)
        return self.child.wait(DEADLINE)


class Probe:
    """A node that keeps every message it hears and waits for things to become true, with a deadline."""

    def __init__(self) -> None:
        self.context = Context()
        rclpy.init(context=self.context)
        self.node = rclpy.create_node("probe", context=self.context)
        self._executor = SingleThreadedExecutor(context=self.context)
        self._executor.add_node(self.node)
        self.heard: dict[str, list[Any]] = defaultdict(list)

    def __enter__(self: Self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self._executor.shutdown()
        self.node.destroy_node()
        self.context.try_shutdown()

    def hear(self, kind: Any, topic: str, qos: QoSProfile | int) -> list[Any]:
        """Subscribe; the list returned grows with each message."""
        kept = self.heard[topic]
        self.node.create_subscription(kind, topic, kept.append, qos)
        return kept

    def now(self) -> int:
        """Return the clock in ns."""
        return int(self.node.get_clock().now().nanoseconds)

    def spin(self, seconds: float) -> None:
        """Take in one message or timer that comes within this time."""
        self._executor.spin_once(timeout_sec=seconds)

    def until(self, condition: Callable[[], Any], doing: Callable[[], None] = lambda: None, every: float = 0.02) -> Any:
        """Wait for a condition, ``doing`` something every so many seconds meanwhile; return what it gave."""
        end, due = time.monotonic() + DEADLINE, 0.0
        while not (found := condition()):
            now = time.monotonic()
            assert now < end, "waited too long"
            if now >= due:
                doing()
                due = now + every
            self.spin(min(every, 0.02))
        return found

    def call(self, kind: Any, service: str, request: Any) -> Any:
        """Call a service and return its answer."""
        client = self.node.create_client(kind, service)
        assert client.wait_for_service(DEADLINE)
        future = client.call_async(request)
        self.until(future.done)
        self.node.destroy_client(client)
        return future.result()
