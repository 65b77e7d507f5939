"""Following a tuner from outside its process: its status, and its services."""

from __future__ import annotations

import time
from typing import Any

import rclpy
from rclpy.context import Context
from rclpy.executors import SingleThreadedExecutor
from rclpy.signals import SignalHandlerOptions
from rclpy.task import Future
from std_msgs.msg import String
from std_srvs.srv import Trigger

from fieldnav_ros.errors import InputError
from fieldnav_ros.nodes.base import LATCHED
from fieldnav_ros.nodes.payloads import TunerStatus, decode_status


class Watch:
    """A node that listens to ``tuner/status`` and calls the tuner's services; spin it from one thread."""

    def __init__(self, context: Context, tuner: str = "tuner_node", namespace: str = "") -> None:
        rclpy.init(args=[], context=context, signal_handler_options=SignalHandlerOptions.NO)
        self._context, self._tuner = context, tuner
        self._node = rclpy.create_node("fieldnav_watch", context=context, namespace=namespace or None)
        self._executor = SingleThreadedExecutor(context=context)
        self._executor.add_node(self._node)
        self._node.create_subscription(String, "tuner/status", self._on_status, LATCHED)
        self._services = {
            name: self._node.create_client(Trigger, f"{tuner}/{name}")
            for name in ("begin", "pause", "void_last", "release")
        }
        self._fresh = False
        self.status: TunerStatus | None = None

    def spin(self, seconds: float = 0.2) -> bool:
        """Wait for at most ``seconds``; tell whether a status came."""
        self._fresh = False
        end = time.monotonic() + seconds
        while not self._fresh and time.monotonic() < end:
            self._executor.spin_once(timeout_sec=max(0.0, end - time.monotonic()))
        return self._fresh

    def call(self, service: str, seconds: float = 2.0) -> str | None:
        """Call a service of the tuner; its message where it succeeded, None where it refused or was late."""
        if not self._services[service].wait_for_service(timeout_sec=seconds):
            return None
        future = self._services[service].call_async(Trigger.Request())
        self._executor.spin_until_future_complete(future, timeout_sec=seconds)
        answer: Any = future.result() if future.done() else None
        return str(answer.message) if answer is not None and answer.success else None

    def ask(self, service: str) -> Future | None:
        """Call a service without waiting for its answer; None where nobody offers it."""
        client = self._services[service]
        return client.call_async(Trigger.Request()) if client.service_is_ready() else None

    def close(self) -> None:
        """Leave the graph."""
        self._executor.shutdown()
        self._node.destroy_node()
        self._context.try_shutdown()

    def _on_status(self, message: String) -> None:
        try:
            self.status = decode_status(message.data)
        except InputError:
            return  # the tuner's own words are sound; somebody else's are not worth a line here
        self._fresh = True
