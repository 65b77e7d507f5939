"""The terminal's picture: large, plain, the same with and without colour."""

from __future__ import annotations

import textwrap

from rich.text import Text

from fieldnav_ros.nodes.pit.view import Row, View

DIGITS = {
    "0": ("###", "# #", "# #", "# #", "###"),
    "1": (" # ", "## ", " # ", " # ", "###"),
    "2": ("###", "  #", "###", "#  ", "###"),
    "3": ("###", "  #", " ##", "  #", "###"),
    "4": ("# #", "# #", "###", "  #", "  #"),
    "5": ("###", "#  ", "###", "  #", "###"),
    "6": ("###", "#  ", "###", "# #", "###"),
    "7": ("###", "  #", "  #", " # ", " # "),
    "8": ("###", "# #", "###", "# #", "###"),
    "9": ("###", "# #", "###", "  #", "###"),
    ":": (" ", "#", " ", "#", " "),
    "-": ("  ", "  ", "##", "  ", "  "),
}
TALL = 5
LABEL = 10
NARROW = 64
"""Columns below which the words go under the clock, not beside it."""
STRONG = "bold"
BANNER = "bold reverse"
ALARM = "bold white on red"
Line = tuple[str, str]
"""A line's text and its style."""


def picture(view: View, width: int, height: int, block: str = "#") -> Text:
    """Return the view as a text of at most ``height`` lines of at most ``width`` columns.

    ``block`` is what large digits are made of. Where it does not fit, the least important rows go first.
    """
    rows = list(view.rows)
    while len(lines := _lines(view, rows, width, block)) > height and rows:
        rows.remove(min(rows, key=lambda row: row.weight))
    text = Text(no_wrap=True, overflow="crop", end="")
    for number, (line, style) in enumerate(_pinned(lines, view, width, height)):
        text.append(("\n" if number else "") + line[:width], style=style)
    return text


def _pinned(lines: list[Line], view: View, width: int, height: int) -> list[Line]:
    """Keep the keys on the last line, whatever had to go."""
    keys = _keys(view, width)
    body = lines[: len(lines) - len(keys)][: max(0, height - len(keys))]
    return [*body, *[("", "")] * (height - len(keys) - len(body)), *keys]


def _lines(view: View, rows: list[Row], width: int, block: str) -> list[Line]:
    banner = f" {'!! ' if view.alarm else ''}{view.banner}"
    lines: list[Line] = [(banner.ljust(width), ALARM if view.alarm else BANNER), ("", "")]
    lines += _head(view, width, block)
    lines.append(("", ""))
    for row in rows:
        lines += _row(row, width)
    for warning in view.warnings:
        lines += [(part, STRONG) for part in _wrapped(f"! {warning}", width, "  ")[:2]]
    if view.answer:
        lines += [(part, STRONG) for part in _wrapped(f"> {view.answer}", width, "  ")[:2]]
    return [*lines, *_keys(view, width)]


def _head(view: View, width: int, block: str) -> list[Line]:
    clock = large(view.clock, block, 2)
    if width >= NARROW:
        beside = len(clock[0]) + 3
        words = [view.of, *_wrapped(view.todo, width - beside - 1)]
        tall = max(TALL, len(words))
        clock += [" " * len(clock[0])] * (tall - TALL)
        words += [""] * (tall - len(words))
        return [(f" {left}  {right}", STRONG) for left, right in zip(clock, words)]
    if len(clock[0]) >= width:
        clock = large(view.clock, block, 1)
    return [(f" {line}", STRONG) for line in clock] + [(line, STRONG) for line in _wrapped(view.todo, width)]


def large(text: str, block: str, wide: int) -> list[str]:
    """Return figures five lines tall, each dot ``wide`` columns of ``block``."""
    glyphs = [DIGITS.get(letter, DIGITS["-"]) for letter in text]
    rows = [(" " * wide).join("".join(dot * wide for dot in glyph[row]) for glyph in glyphs) for row in range(TALL)]
    return [row.replace("#", block) for row in rows]


def _row(row: Row, width: int) -> list[Line]:
    label = f" {row.label:<{LABEL}}"
    parts = _wrapped(row.text, width - len(label) - 1) or [""]
    return [(f"{label if not number else ' ' * len(label)}{part}", "") for number, part in enumerate(parts[:3])]


def _keys(view: View, width: int) -> list[Line]:
    return [(f" {part}".ljust(width), BANNER) for part in _packed(view.keys.split("   "), width - 2)]


def _packed(words: list[str], width: int) -> list[str]:
    lines = [""]
    for word in words:
        longer = f"{lines[-1]}   {word}".strip()
        if len(longer) <= width or not lines[-1]:
            lines[-1] = longer
        else:
            lines.append(word)
    return lines


def _wrapped(text: str, width: int, indent: str = "") -> list[str]:
    return textwrap.wrap(text, max(width, 10), subsequent_indent=indent)
