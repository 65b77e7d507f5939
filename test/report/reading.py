"""Reads a report as a person does: what is marked as a number, and what else the page says."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from html.parser import HTMLParser

LOWERED = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹−", "-0123456789-")
# What is shown as it stands in the record, or drawn: texts, names, hashes, pictures.
QUOTED = {"svg", "style", "title", "code", "q", "cite", "b", "i", "sub"}
VOID_TAGS = {"meta", "br", "wbr", "img", "link", "hr", "input"}


@dataclass
class Shown:
    """One number on the page: the fact it states, its full value, and its text without the unit."""

    fact: str
    full: float
    text: str = ""

    @property
    def number(self) -> str:
        return self.text.split("\N{NO-BREAK SPACE}")[0]


@dataclass
class Seen:
    """A page's numbers, the words around them, and its tags in order."""

    numbers: list[Shown] = field(default_factory=list)
    words: list[str] = field(default_factory=list)
    tags: list[tuple[str, dict[str, str | None]]] = field(default_factory=list)


class _Reader(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.seen = Seen()
        self.path: list[str] = []
        self.number: Shown | None = None

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = dict(attrs)
        self.seen.tags.append((tag, found))
        if tag in VOID_TAGS:
            return
        self.path.append("q" if found.get("class") == "unit" else tag)
        if tag == "data":
            self.number = Shown(found["data-fact"] or "", float(found["value"] or "nan"))

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        while self.path and self.path.pop() not in (tag, "q" if tag == "span" else tag):
            pass  # cells and rows that the page leaves open
        if tag == "data" and self.number is not None:
            self.seen.numbers.append(self.number)
            self.number = None

    def handle_data(self, data: str) -> None:
        if self.number is not None:
            self.number.text += data
        elif not QUOTED & set(self.path):
            self.seen.words.append(data)


def read(page: str) -> Seen:
    reader = _Reader()
    reader.feed(page)
    return reader.seen


def value_and_step(text: str) -> tuple[float, float, float]:
    """Return mantissa, half a unit of its last digit, and the power of ten that a shown number stands for."""
    mantissa, _, power = text.translate(LOWERED).replace("+", "").partition(" × 10")
    decimals = len(mantissa.partition(".")[2])
    exponent = 0.0
    if power:
        exponent = float(power[1:]) if power.startswith("^") else float(power)
    return float(mantissa), 0.5 * 10.0**-decimals, exponent


def is_rounded(shown: Shown) -> bool:
    """Tell whether the text is its full value, rounded; an e-value's full value is its logarithm."""
    mantissa, half, exponent = value_and_step(shown.number)
    if shown.fact.endswith(("log_evidence", "log_threshold")):
        log10 = shown.full / math.log(10.0)
        if exponent == 0.0:
            return math.isclose(10.0**log10, mantissa, rel_tol=0.0, abs_tol=half * (1 + 1e-9))
        allowed = half / mantissa + 1e-9 * abs(log10)
        return math.isclose(log10 - exponent, math.log10(mantissa), rel_tol=0.0, abs_tol=allowed)
    sizes = (abs(shown.full), abs(mantissa)) if shown.fact.endswith("mean_difference") else (shown.full, mantissa)
    return math.isclose(sizes[0] / 10.0**exponent, sizes[1], rel_tol=0.0, abs_tol=half * (1 + 1e-9))


def stray_numbers(seen: Seen) -> list[str]:
    """Return words with digits that no ``<data>`` marks."""
    return [word for word in re.findall(r"\S+", " ".join(seen.words)) if re.search(r"\d", word)]
