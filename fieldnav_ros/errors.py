"""Errors that reach a user: one sentence that names the thing, its value and the bound."""

from __future__ import annotations

import re
import reprlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pydantic import ValidationError


class FieldnavError(Exception):
    """Base of all errors that this package raises on purpose.

    ``str(error)`` is one line for the person at the terminal, whatever file names and keys it quotes;
    ``exit_code`` is what the command line ends with.
    """

    exit_code = 1

    def __init__(self, sentence: str = "") -> None:
        # line breaks, terminal escapes and lone surrogates come in with names from files
        super().__init__("".join(sign if sign.isprintable() else " " for sign in sentence))


class WorkError(FieldnavError):
    """The input was sound, but the work could not be done (a node died, a service never came)."""


class InputError(FieldnavError):
    """What came from outside (a file, a message, an argument) is not usable as it stands."""

    exit_code = 2

    @classmethod
    def of(cls, name: str, value: object, bound: str) -> InputError:
        """Name the thing, show its value, state the bound: ``robot.radius is -1, must be > 0``."""
        return cls(f"{name} is {shown(value)}, must be {bound}")

    @classmethod
    def from_validation(cls, error: ValidationError, source: str) -> InputError:
        """Turn the first finding of a pydantic error into one sentence that starts with ``source``."""
        found = error.errors(include_url=False)
        sentence = f"{source}: {_sentence(found[0])}"
        if len(found) > 1:
            sentence += f" (and {len(found) - 1} more)"
        return cls(sentence)


class _Bounded(reprlib.Repr):
    """``repr`` of bounded size and effort, also for nested containers and enormous integers."""

    def repr_int(self, x: int, level: int) -> str:
        # beyond some 4300 digits Python refuses to write an integer out in decimals
        return super().repr_int(x, level) if x.bit_length() < 1024 else f"an integer of {x.bit_length()} bits"


def shown(value: object, longest: int = 60) -> str:
    """Return ``repr(value)`` cut to ``longest`` characters, so that a 10 MB string stays a sentence."""
    if isinstance(value, (str, bytes)):
        text = repr(value[:longest])
        return text + "..." if len(value) > longest else text
    return clipped(_Bounded().repr(value), longest)


def clipped(text: str, longest: int = 60) -> str:
    """Return ``text`` as it is, cut to ``longest`` characters: for names that come from outside."""
    return text if len(text) <= longest else text[:longest] + "..."


def _sentence(finding: Any) -> str:
    where = ".".join(clipped(str(part)) for part in finding["loc"]) or "value"
    kind, message = finding["type"], finding["msg"]
    if kind in ("extra_forbidden", "invalid_key"):
        return f"{where} is not a known key"
    if kind == "union_tag_invalid":
        tag, key = finding["ctx"]["tag"], finding["ctx"]["discriminator"].strip("'")
        return f"{where}: {key} is {shown(tag)}, which is not known"
    if kind == "missing":
        return f"{where} is missing"
    if kind == "value_error":
        message = message.removeprefix("Value error, ")
        return message if where == "value" else f"{where}: {message}"
    # pydantic words its bounds "Input should be ...", "String should have ..."
    bound = re.sub(r"^\w+ should ", "", message)
    return f"{where} is {shown(finding['input'])}, must {clipped(bound, 300)}"
