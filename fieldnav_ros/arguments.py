"""What verbs do with their arguments, refused in one sentence like every other bad input."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from fieldnav_ros.errors import InputError


def make_folder(folder: Path) -> None:
    """Make a folder and those above it where they are not there; InputError where that is not possible."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"{folder}: cannot be made: {error.strerror}") from error


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
