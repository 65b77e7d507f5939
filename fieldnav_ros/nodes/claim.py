"""One tuner at a time for a guidance node: a claim, which guidance keeps and which runs out when nobody renews it.

Guidance is what every tuner must reach, so it decides, and no two tuners need to see each other. A claim travels as
guidance's parameter ``tuned_by``: alone to take and renew it, and in each atomic set beside the numbers, so that
numbers of a tuner that has lost its claim are refused with it. It names machine and ledger: a ledger lets one writer
in, so that a tuner which was killed and started again is known as the same one, while another ledger's has to wait.
"""

from __future__ import annotations

import socket
import time
from collections.abc import Callable, Generator
from contextlib import suppress
from pathlib import Path
from typing import Any

from rcl_interfaces.msg import Parameter, ParameterType, ParameterValue
from rcl_interfaces.srv import SetParametersAtomically
from rclpy.node import Node
from rclpy.task import Future

from fieldnav_ros.errors import WorkError
from fieldnav_ros.nodes.script import LateError, Wait

CLAIM = "tuned_by"
LEASE = 5.0
"""Seconds after which a claim that is not renewed is free."""
RENEWAL = 1.0
PATIENCE = 1.0
"""Seconds to wait for guidance's answer before it is asked again."""
LONGEST = 300
HELD = "another tuner is at work: "


class ClaimedError(WorkError):
    """Another tuner sets this guidance node's numbers."""


class Lease:
    """The claim as guidance keeps it."""

    def __init__(self, now: Callable[[], float] = time.monotonic) -> None:
        """``now`` gives seconds on a clock that never goes back."""
        self._now, self._holder, self._until = now, "", 0.0

    @property
    def holder(self) -> str:
        """Who holds the claim now, empty where nobody does."""
        return self._holder if self._now() < self._until else ""

    def refusal(self, claim: object) -> str | None:
        """Return why this claim cannot be taken or renewed; None where it can."""
        if not isinstance(claim, str) or len(claim) > LONGEST:
            return f"{CLAIM} must be a text of at most {LONGEST} characters"
        return HELD + self.holder if self.holder not in ("", claim) else None

    def take(self, claim: str) -> None:
        """Let somebody hold the claim from now on, or renew it; an empty text frees it."""
        self._holder, self._until = claim, self._now() + LEASE if claim else 0.0


def claim_parameter(claim: str) -> Parameter:
    """Return the claim as it goes into a request to guidance."""
    return Parameter(name=CLAIM, value=ParameterValue(type=ParameterType.PARAMETER_STRING, string_value=claim))


class Claim:
    """The claim as a tuner holds it; renewed once a second from the first ``take`` on.

    Where another tuner turns out to hold it, the next turn of the node's timer raises ClaimedError, which ends it.
    """

    def __init__(self, node: Node, client: Any, ledger: str) -> None:
        """``client`` calls guidance's ``set_parameters_atomically``."""
        name = f"{node.get_fully_qualified_name()} on {socket.gethostname()}, ledger {Path(ledger).resolve()}"
        self.text = name if len(name) <= LONGEST else name[:40] + "..." + name[-LONGEST + 43 :]
        self._node, self._client = node, client
        self._taken, self._lost, self._asked = False, "", Future()
        self._asked.set_result(None)
        node.create_timer(RENEWAL, self._renew)

    def take(self) -> Generator[Wait, Any, None]:
        """Take the claim; where another tuner holds it, wait as long as a dead one's would last, then lose."""
        end = time.monotonic() + LEASE + RENEWAL
        while not self._taken:
            future = self._ask()
            try:
                result = (yield Wait(future, PATIENCE)).result
            except LateError:
                self._client.remove_pending_request(future)
                continue
            self._taken = bool(result.successful)
            if not self._taken and time.monotonic() > end:
                yield from self.lose(str(result.reason))
            if not self._taken:
                with suppress(LateError):
                    yield Wait(Future(), 0.2)

    def lost_by(self, reason: str) -> bool:
        """Tell whether guidance refused a set because another tuner holds the claim; then this node ends."""
        if reason.startswith(HELD):
            self._lost = reason
        return bool(self._lost)

    def lose(self, reason: str) -> Generator[Wait, Any, None]:
        """Do nothing more but wait for the end."""
        self._lost = reason
        yield Wait(Future())

    def _ask(self) -> Future:
        request = SetParametersAtomically.Request(parameters=[claim_parameter(self.text)])
        future: Future = self._client.call_async(request)
        return future

    def _renew(self) -> None:
        if self._lost:
            raise ClaimedError(f"{self._node.get_name()}: {self._lost}")
        if not self._taken or not self._client.service_is_ready():
            return
        if not self._asked.done():
            self._client.remove_pending_request(self._asked)
        self._asked = self._ask()
        self._asked.add_done_callback(self._renewed)

    def _renewed(self, future: Future) -> None:
        answer = None if future.cancelled() or future.exception() is not None else future.result()
        if answer is not None and not answer.result.successful:
            self.lost_by(answer.result.reason)
