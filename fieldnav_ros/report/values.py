"""Numbers as the page shows them: each carries the name of the fact, its full value and its text."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from fieldnav_ros.parameters import Parameter

MINUS = "\N{MINUS SIGN}"
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_UNITS = {"s^-1 rad^-1/2": "1/(s √rad)", "s^-1": "1/s", "m s^-2": "m/s²"}


@dataclass(frozen=True)
class Value:
    """One number on the page. ``fact`` names it, ``full`` is what the ledger says, ``text`` what is read."""

    fact: str
    full: float
    text: str
    unit: str = ""


@dataclass(frozen=True)
class Name:
    """An identifier or other short text out of the record, shown as it stands."""

    text: str


@dataclass(frozen=True)
class Cite:
    """A published source."""

    text: str


Sentence = Sequence[str | Value | Name | Cite]


def raised(exponent: int) -> str:
    """Return ``10ⁿ``; from a million on the exponent is itself rounded to a power."""
    if abs(exponent) < 1_000_000:
        return "10" + str(exponent).translate(_RAISED)
    return f"10^{exponent:.1e}".replace("e+", "e")


def plain(value: float, digits: int = 2, sign: bool = False) -> str:
    """Return the number with so many decimals; very large ones as a power of ten."""
    if abs(value) >= 1e6:
        return _power(math.log10(abs(value)), value < 0)
    text = f"{value:+.{digits}f}" if sign else f"{value:.{digits}f}"
    if float(text) == 0.0:
        text = text.lstrip("+-")
    return text.replace("-", MINUS)


def figures(value: float, count: int = 3) -> str:
    """Return the number with so many significant figures, without an exponent where one can do without."""
    if value == 0 or not 1e-4 <= abs(value) < 1e6:
        return plain(value, 0) if value == 0 or abs(value) >= 1 else _power(math.log10(abs(value)), value < 0)
    decimals = max(count - 1 - math.floor(math.log10(abs(float(f"{value:.{count - 1}e}")))), 0)
    return f"{value:.{decimals}f}".replace("-", MINUS)


def _power(log10: float, negative: bool) -> str:
    exponent = math.floor(log10)
    mantissa = f"{10.0 ** (log10 - exponent):.1f}"
    if mantissa == "10.0":
        mantissa, exponent = "1.0", exponent + 1
    return f"{MINUS if negative else ''}{mantissa} × {raised(exponent)}"


def whole(fact: str, value: int, unit: str = "") -> Value:
    """Return a count."""
    return Value(fact, value, str(value), unit)


def seconds(fact: str, value: float, sign: bool = False) -> Value:
    """Return a cost or time in s."""
    return Value(fact, value, plain(value, 2, sign), "s")


def minutes(fact: str, value_s: float) -> Value:
    """Return a time given in s, shown in min."""
    return Value(fact, value_s / 60.0, plain(value_s / 60.0, 1), "min")


def share(fact: str, value: float, sign: bool = False) -> Value:
    """Return a share as a percentage."""
    percent = 100.0 * value
    digits = 1 if abs(percent) < 9.95 else 0
    return Value(fact, percent, plain(percent, digits, sign), "%")


def evidence(fact: str, log_e: float) -> Value:
    """Return an e-value given by its natural logarithm, which is what ``full`` keeps: e itself may be no float."""
    if abs(log_e) < math.log(9_999):
        return Value(fact, log_e, figures(math.exp(log_e)))
    return Value(fact, log_e, _power(log_e / math.log(10.0), negative=False))


def setting(fact: str, value: float) -> Value:
    """Return the value of a tunable number; the unit stands beside its name."""
    return Value(fact, value, figures(value) if value else "0")


def bound(fact: str, value: float, unit: str = "") -> Value:
    """Return a number that somebody chose: without zeros that say nothing."""
    text = figures(value, 4)
    return Value(fact, value, text.rstrip("0").rstrip(".") if "." in text and "×" not in text else text, unit)


def unit_of(row: Parameter) -> str:
    """Return a parameter's unit as it is written by hand."""
    return _UNITS.get(row.unit, row.unit)


def title_of(row: Parameter) -> str:
    """Return a parameter's name in words."""
    return row.name.replace("_", " ")
