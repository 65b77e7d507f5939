"""What every node here shares: QoS, plain warnings, diagnostics once a second, and how its process starts and ends."""

from __future__ import annotations

import gc
import signal
import sys
import time
import traceback
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from pathlib import Path
from types import FrameType
from typing import Any, TypeVar

import rclpy
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue
from rclpy.context import Context
from rclpy.executors import Executor, SingleThreadedExecutor
from rclpy.node import Node
from rclpy.parameter import Parameter
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy, qos_profile_sensor_data
from rclpy.signals import SignalHandlerOptions
from rclpy.utilities import remove_ros_args
from std_msgs.msg import String

from fieldnav_ros.errors import FieldnavError, InputError
from fieldnav_ros.nodes.declare import Setting, declare
from fieldnav_ros.resources import config_path
from fieldnav_ros.yard import Yard, load_yard

RELIABLE = QoSProfile(depth=10, reliability=ReliabilityPolicy.RELIABLE)
LATCHED = QoSProfile(
    depth=1, reliability=ReliabilityPolicy.RELIABLE, durability=DurabilityPolicy.TRANSIENT_LOCAL
)  # fmt: skip
DEEP = QoSProfile(depth=2000, reliability=ReliabilityPolicy.RELIABLE)
"""For lockstep: simulator and guidance do not wait for the judge, whose queue must hold what it has not yet seen."""
SENSOR = qos_profile_sensor_data
NEWEST = QoSProfile(depth=1, reliability=ReliabilityPolicy.BEST_EFFORT)
"""For guidance: where poses come faster than it can think, it takes the newest, not one that has waited."""
EARLY = 4000
"""Messages from before a request that lockstep keeps: an episode's first ones may overtake it."""
QUIET_TIME = 5.0
"""Seconds for which the same warning is not logged again."""
OK, WARN, ERROR = DiagnosticStatus.OK, DiagnosticStatus.WARN, DiagnosticStatus.ERROR
YARD = Setting("yard", "", "path of the yard file; empty: the parcel yard that comes with the package")
RELIABLE_INPUT = Setting(
    "reliable", False, "subscribe to pose and obstacles reliably; needed in lockstep, harmful over a poor radio"
)
MATCH_STAMPS = Setting(
    "match_stamps", False, "lockstep simulation only: wait for obstacles that carry the pose's own stamp"
)
Decoded = TypeVar("Decoded")
Made = TypeVar("Made", bound="FieldnavNode")


class FieldnavNode(Node):
    """A node with settings from a table and a state that it tells on ``/diagnostics`` once a second."""

    def __init__(
        self,
        name: str,
        settings: Iterable[Setting],
        *,
        context: Context | None = None,
        parameter_overrides: Sequence[Parameter] = (),
        namespace: str | None = None,
    ) -> None:
        super().__init__(
            name, context=context, namespace=namespace, parameter_overrides=list(parameter_overrides)
        )  # fmt: skip
        self.log: Any = self.get_logger()
        try:
            self.settings: dict[str, Any] = declare(self, settings)
        except BaseException:
            self.leave()
            raise
        self.counts: Counter[str] = Counter()
        self._said: dict[str, float] = {}
        self._warned: dict[str, tuple[float, str]] = {}
        self._level: bytes = OK
        self._summary = "started"
        self._diagnostics = self.create_publisher(DiagnosticArray, "/diagnostics", 10)
        self.create_timer(1.0, self._publish_diagnostics)

    def state(self, summary: str, level: bytes = OK) -> None:
        """Set the sentence and level that diagnostics show from now on."""
        self._summary, self._level = summary, level

    def values(self) -> dict[str, object]:
        """Return what diagnostics show besides the counts; nodes add their own."""
        return {}

    def warn(self, kind: str, sentence: str) -> None:
        """Count a fault and log it in plain words, at most once in QUIET_TIME for each kind."""
        self.counts[kind] += 1
        now = time.monotonic()
        self._warned[kind] = now, sentence
        if now - self._said.get(kind, -QUIET_TIME) >= QUIET_TIME:
            self._said[kind] = now
            self.log.warning(sentence)

    def recent_warnings(self, seconds: float) -> tuple[str, ...]:
        """Return the newest warning of each kind that came within the last ``seconds``, newest first."""
        since = time.monotonic() - seconds
        return tuple(sentence for when, sentence in sorted(self._warned.values(), reverse=True) if when >= since)

    def decoded(self, decode: Callable[[str], Decoded], message: String) -> Decoded | None:
        """Return the payload of a message; a malformed one is counted, warned about and None."""
        return self.usable("malformed_messages", decode, message.data)

    def usable(self, kind: str, read: Callable[..., Decoded], *given: Any) -> Decoded | None:
        """Return what ``read`` makes of what came; what it refuses is counted under ``kind``, warned about and None."""
        try:
            return read(*given)
        except InputError as error:
            self.warn(kind, f"ignored: {error}")
            return None

    def close(self) -> None:
        """Do what must be done before the process ends; guidance stops the robot here."""

    def leave(self) -> None:
        """Take the node off the graph."""
        self.destroy_node()

    def _publish_diagnostics(self) -> None:
        shown = {**self.values(), **self.counts}
        status = DiagnosticStatus(level=self._level, name=self.get_fully_qualified_name(), message=self._summary)
        status.hardware_id = self.get_namespace()
        status.values = [KeyValue(key=key, value=str(value)) for key, value in shown.items()]
        message = DiagnosticArray(status=[status])
        message.header.stamp = self.get_clock().now().to_msg()
        self._diagnostics.publish(message)


def incoming_qos(settings: Mapping[str, Any], otherwise: QoSProfile = SENSOR) -> QoSProfile:
    """Return the QoS of pose and obstacles: as ``match_stamps`` or ``reliable`` asks, else ``otherwise``."""
    if settings["match_stamps"]:
        return DEEP
    return RELIABLE if settings["reliable"] else otherwise


def yard_of(path: str) -> Yard:
    """Load the yard that the parameter ``yard`` names."""
    return load_yard(Path(path) if path else config_path("yards/parcel_yard.yaml"))


def run(
    name: str, make: Callable[[Context], FieldnavNode], args: Sequence[str] | None = None, events: bool = False
) -> int:
    """Run one node until SIGINT or SIGTERM; return the exit code (0, 1 the node failed, 2 bad input).

    ``events`` takes rclpy's executor that is woken by events where there is one: it costs half as much, but is no
    match for coroutines and callbacks that ask for message infos.

    rclpy's own signal handlers would take the context away before a last message can leave: so ours only set a flag.
    """
    words = list(sys.argv if args is None else args)
    context = Context()
    stop: list[int] = []

    def on_signal(number: int, _frame: FrameType | None) -> None:
        stop.append(number)

    before = {number: signal.signal(number, on_signal) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        return _run(make, words, context, stop, events)
    except FieldnavError as error:
        print(f"{name}: {error}", file=sys.stderr)
        return error.exit_code
    finally:
        context.try_shutdown()
        for number, handler in before.items():
            signal.signal(number, handler)


def _run(
    make: Callable[[Context], FieldnavNode], words: list[str], context: Context, stop: list[int], events: bool
) -> int:
    try:
        rest = remove_ros_args(words)[1:]
        rclpy.init(args=words, context=context, signal_handler_options=SignalHandlerOptions.NO)
    except RuntimeError as error:  # rcl has no narrower class for arguments and parameter files that it cannot read
        raise InputError(_first_clause(error)) from error
    if rest:
        raise InputError(f"{rest[0]!r} is not a known argument; parameters come after --ros-args as -p NAME:=VALUE")
    node = make(context)
    executor = _executor(context, events)
    executor.add_node(node)
    gc.collect()
    gc.freeze()  # all that is loaded stays: looking through it again and again would hold up commands by milliseconds
    try:
        while not stop:
            executor.spin_once(timeout_sec=0.1)
        return 0
    except FieldnavError:
        raise  # said in one sentence by who started this
    except Exception as error:  # noqa: BLE001  # whatever went wrong in a callback, the robot is stopped below
        where = traceback.extract_tb(error.__traceback__)[-1]
        node.log.fatal(
            f"stopped by a fault in this program: {error!r} at {Path(where.filename).name}:{where.lineno}"
        )  # fmt: skip
        return 1
    finally:
        node.close()
        executor.shutdown()
        node.leave()


def _executor(context: Context, events: bool) -> Executor:
    if events:
        try:
            from rclpy.experimental.events_executor import EventsExecutor  # not in every rclpy that this runs with
        except ImportError:
            pass
        else:
            executor: Executor = EventsExecutor(context=context)
            return executor
    return SingleThreadedExecutor(context=context)


def _first_clause(error: RuntimeError) -> str:
    """Return rcl's message without its own source files."""
    text = str(error).split(", at /")[0]
    for start in ("failed to initialize rcl: ", "Failed to parse ROS arguments: "):
        text = text.removeprefix(start)
    return " ".join(text.split())
