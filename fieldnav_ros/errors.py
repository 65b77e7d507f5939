"""Errors that reach a user: one sentence that names the thing, its value and the bound."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pydantic import ValidationError


class FieldnavError(Exception):
    """Base of all errors that this package raises on purpose.

    ``str(error)`` is one sentence for the person at the terminal; ``exit_code`` is what the
    command line ends with.
    """

    exit_code = 1


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


def shown(value: object, longest: int = 60) -> str:
    """Return ``repr(value)`` cut to ``longest`` characters, so that a 10 MB string stays a sentence."""
    if isinstance(value, str) and len(value) > longest:
        return repr(value[:longest]) + "..."
    text = repr(value)
    return text if len(text) <= longest else text[:longest] + "..."


def _sentence(finding: Any) -> str:
    where = ".".join(str(part) for part in finding["loc"]) or "value"
    kind, message = finding["type"], finding["msg"]
    if kind == "extra_forbidden":
        return f"{where} is not a known key"
    if kind == "missing":
        return f"{where} is missing"
    message = message.removeprefix("Value error, ").removeprefix("Input should be ")
    if kind == "value_error":
        return message if where == "value" else f"{where}: {message}"
    return f"{where} is {shown(finding['input'])}, must be {message}"
