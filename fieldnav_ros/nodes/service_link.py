"""Putting a parameter set in service on the guidance node, and making sure that it is there."""

from __future__ import annotations

from collections.abc import Generator
from typing import Any

from rcl_interfaces.msg import Parameter as ParameterMessage
from rcl_interfaces.msg import ParameterType, ParameterValue
from rcl_interfaces.srv import GetParameters, SetParametersAtomically
from rclpy.node import Node

from fieldnav_ros.errors import WorkError
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.nodes.claim import Claim, claim_parameter
from fieldnav_ros.nodes.script import LateError, Wait
from fieldnav_ros.parameters import TABLE, ParameterSet

NAMES = [row.ros_name for row in TABLE]
MODEL = "field.model"
Values = tuple[float, ...]


class RefusedError(Exception):
    """Guidance would not take the set; ``str(error)`` is its reason."""


class ServiceLink:
    """Client of the guidance node's parameter services. Its methods are steps of a ``Script``."""

    def __init__(self, node: Node, guidance: str, patience: float, ledger: str) -> None:
        """``guidance``: name of the node, relative to ``node``'s namespace; ``patience``: s to wait for an answer.

        The claim on guidance is made in the name of ``ledger``.
        """
        self._name, self._patience = guidance, patience
        self.model = DEFAULT_MODEL
        self._set = node.create_client(SetParametersAtomically, f"{guidance}/set_parameters_atomically")
        self.claim = Claim(node, self._set, ledger)
        self._get = node.create_client(GetParameters, f"{guidance}/get_parameters")

    def there(self) -> bool:
        """Tell whether the guidance node's services can be seen."""
        return bool(self._set.service_is_ready() and self._get.service_is_ready())

    def read(self, patience: float | None = None) -> Generator[Wait, Any, Values]:
        """Return the nine values as guidance holds them, in table order. LateError where it does not answer.

        ``model`` is then the field that they belong to.
        """
        answer = yield from self._call(self._get, GetParameters.Request(names=[*NAMES, MODEL]), patience)
        values = tuple(value.double_value for value in answer.values[: len(NAMES)])
        if len(answer.values) != len(NAMES) + 1:
            raise WorkError(f"{self._name} holds {len(values)} of the {len(NAMES)} numbers; is it a guidance node?")
        self.model = answer.values[-1].string_value
        return values

    def put(self, parameters: ParameterSet, patience: float | None = None) -> Generator[Wait, Any, None]:
        """Set all nine at once and read them back. RefusedError, or LateError, or WorkError if they differ.

        ``patience`` in s, for each of the two calls, stands in for the one the link was made with.
        """
        wanted = tuple(parameters.to_ros().values())
        request = SetParametersAtomically.Request(
            parameters=[
                ParameterMessage(
                    name=name, value=ParameterValue(type=ParameterType.PARAMETER_DOUBLE, double_value=float(value))
                )
                for name, value in zip(NAMES, wanted)
            ]
            + [claim_parameter(self.claim.text)]
        )
        answer = yield from self._call(self._set, request, patience)
        if not answer.result.successful:
            raise RefusedError(answer.result.reason)
        found = yield from self.read(patience)
        if found != wanted:
            name, want, got = next(row for row in zip(NAMES, wanted, found) if row[1] != row[2])
            raise WorkError(f"{self._name} was set to {name} {want!r}, but reads back {got!r}")

    def _call(self, client: Any, request: Any, patience: float | None) -> Generator[Wait, Any, Any]:
        future = client.call_async(request)
        try:
            return (yield Wait(future, self._patience if patience is None else patience))
        except LateError:
            client.remove_pending_request(future)
            raise
