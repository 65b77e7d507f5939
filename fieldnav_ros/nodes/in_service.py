"""Which set guidance holds: put there, read back, and put back at a match call."""

from __future__ import annotations

import time
from collections.abc import Callable, Generator
from typing import Any

from rclpy.task import Future

from fieldnav_ros.nodes.base import FieldnavNode
from fieldnav_ros.nodes.keeper import Keeper
from fieldnav_ros.nodes.script import LateError, Wait
from fieldnav_ros.nodes.service_link import RefusedError, ServiceLink
from fieldnav_ros.parameters import ParameterSet

PATIENCE = 1.0
"""Seconds to wait for an answer of the guidance node before the call is made again."""
CALL_LIMIT = 1.0
"""Seconds within which a match call is answered, whatever the answer."""
CALL_PATIENCE = 0.3
"""Seconds to wait for an answer during a match call: one that hangs must leave time for others."""
TICK = 0.05
Steps = Generator[Wait, Any, None]


def pause(seconds: float) -> Steps:
    """Let time pass."""
    yield from pause_until(Future(), seconds)


def pause_until(wake: Future, seconds: float) -> Steps:
    """Let time pass until ``wake`` is done, at most ``seconds``."""
    try:
        yield Wait(wake, seconds)
    except LateError:
        return


class InService:
    """Puts sets in service on the guidance node. Its methods are steps of a ``Script``."""

    def __init__(self, node: FieldnavNode, keeper: Keeper, guidance: str, stop: Callable[[], None]) -> None:
        """``stop`` sends the word that ends whatever episode runs."""
        self._node, self._keeper, self._stop, self.guidance = node, keeper, stop, guidance
        self.link = ServiceLink(node, guidance, PATIENCE, node.settings["ledger"])
        self.confirmed = ""
        """Id of the set that was read back last; empty where that is not sure any more."""
        self._values: tuple[float, ...] = ()

    def reach(self, tell: Callable[[], None]) -> Steps:
        """Wait until guidance can be reached, ``tell``ing of it meanwhile."""
        while not self.link.there():
            self.confirmed = ""
            tell()
            yield from pause(0.2)
        yield from self.link.claim.take()

    def put(self, set_id: str, parameters: ParameterSet) -> Generator[Wait, Any, bool]:
        """Put a set in service and confirm it; False where that must be tried again."""
        node = self._node
        try:
            if self.confirmed and (yield from self.link.read()) != self._values:
                sentence = f"the numbers of {self.confirmed} were changed by somebody else"
                node.warn("foreign_changes", sentence)
                self._keeper.commit(self._keeper.session.note("tuner", sentence))
            self.confirmed = ""
            yield from self.link.put(parameters)
        except RefusedError as error:
            if self.link.claim.lost_by(str(error)):
                return False
            node.warn("sets_refused", f"guidance refused set {set_id}: {error}")
            self._stop()
            yield from pause(0.1)
            return False
        except LateError:
            self.confirmed = ""
            node.warn("guidance_silent", f"{self.guidance} does not answer; asking again")
            return False
        self._confirm(set_id, parameters)
        return True

    def put_champion(self) -> Generator[Wait, Any, bool]:
        """Put the champion in service and confirm it; False as for ``put``."""
        champion = self._keeper.session.champion
        return (yield from self.put(champion.set_id, champion.parameters))

    def match_call(self, answer: Future) -> Steps:
        """Put the champion in service at once; ``answer`` gets (done, sentence) within CALL_LIMIT."""
        end = time.monotonic() + 0.75 * CALL_LIMIT
        while time.monotonic() < end:
            if self.link.there() and (yield from self._put_quickly(end)):
                set_id = self._keeper.session.champion.set_id
                answer.set_result((True, f"champion {set_id} is in service, read back"))
                return
            yield from pause(TICK)
        sentence = "match call not confirmed: guidance does not answer; the champion goes in as soon as it does"
        self._node.warn("releases_unconfirmed", sentence)
        answer.set_result((False, sentence))

    def _put_quickly(self, end: float) -> Generator[Wait, Any, bool]:
        champion = self._keeper.session.champion
        self.confirmed = ""
        try:
            yield from self.link.put(champion.parameters, min(CALL_PATIENCE, max(TICK, end - time.monotonic())))
        except RefusedError as error:
            if not self.link.claim.lost_by(str(error)):
                self._stop()  # the word to stop and the numbers go different ways: guidance had not heard it yet
            return False
        except LateError:
            return False
        self._confirm(champion.set_id, champion.parameters)
        return True

    def look(self) -> Steps:
        """Read what guidance holds, changing nothing: ``confirmed`` is then the champion, or empty."""
        champion = self._keeper.session.champion
        try:
            found = yield from self.link.read()
        except LateError:
            self.confirmed = ""
            self._node.warn("guidance_silent", f"{self.guidance} does not answer; asking again")
            return
        if found != tuple(champion.parameters.to_ros().values()):
            self.confirmed = ""
            self._node.warn("other_numbers", f"guidance does not hold the numbers of champion {champion.set_id}")
            return
        self._confirm(champion.set_id, champion.parameters)

    def _confirm(self, set_id: str, parameters: ParameterSet) -> None:
        self.confirmed, self._values = set_id, tuple(parameters.to_ros().values())
        self._keeper.guided_by(self.link.model)
