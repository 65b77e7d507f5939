"""Types for arguments on the command line, refused in one sentence like every other bad input."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from fieldnav_ros.errors import InputError


def number(name: str, low: float, high: float, kind: Callable[[str], float] = float) -> Callable[[str], Any]:
    """Return an argument type that takes numbers from ``low`` to ``high`` only."""

    def convert(text: str) -> float:
        try:
            value = kind(text)
        except ValueError:
            value = float("nan")
        if not low <= value <= high:
            noun = "a whole number" if kind is int else "a number"
            raise InputError.of(name, text, f"{noun} from {low:g} to {high:g}")
        return value

    return convert
