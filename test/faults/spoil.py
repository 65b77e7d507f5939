"""Spoiling files as outsiders may: bytes changed, pieces of other files put in, values replaced, tags that run code."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import yaml
from hypothesis import strategies as st

# What has broken or fooled readers of YAML: from memory, and from the tags of PyYAML's unsafe loaders.
NASTY = [
    "!!python/object/apply:os.system ['touch RAN']", "!!python/object/new:subprocess.Popen [['touch', 'RAN']]",
    "!!python/name:os.system", "!!python/module:antigravity", "!!python/object/apply:eval ['1/0']",
    "!!python/tuple [1, 2]", "!!binary x", "!!set {a, b}", "!!omap [a: 1]", "!!pairs [a: 1]", "!!timestamp never",
    "!!int x", "!!float x", "!!bool x", "!!null x", "!!str {}", "!local {a: 1}", "&a [*a]", "*a", "<<: {a: 1}",
    "<<: *a", "2001-99-99", "2001-01-01 25:61:61", "0x", "0b2", "0o9", "1:60:60", "190:20:30", "1e999", "-1e999",
    ".nan", ".inf", "-.inf", "9" * 5000, "-" + "9" * 400, "1e-320", "-0.0", "yes", "~", "=", "? [a, b]", "? {a: 1}",
    "[" * 1200, "{a: " * 500, "- " * 1200, "a: " * 50, "%YAML 9.9\n---", "---\n", "...\n", "\x00", "\x1b[2J", "\ufeff",
    "\u2028", "\u202e", "\t", "''", '"\\ud800"', "|\n", ">9\n", "# \n", "../../etc/passwd", "/dev/zero", "'", '"',
    "x" * 70000,
]  # fmt: skip


@st.composite
def spoilt_bytes(draw: Any, files: list[bytes], nasty: list[bytes]) -> bytes:
    """Draw one of the files with one to four faults in its bytes."""
    data = draw(st.sampled_from(files))
    for _ in range(draw(st.integers(1, 4))):
        start = draw(st.integers(0, len(data)))
        end = min(len(data), start + draw(st.integers(0, 40)))
        piece = draw(
            st.one_of(
                st.binary(max_size=8),
                st.sampled_from(nasty),
                st.just(data[start:end] * 3),
                st.sampled_from(files).map(lambda other: other[start : start + 200]),  # noqa: B023  (drawn at once)
            )
        )
        data = data[:start] + piece + data[end:]
    return bytes(data)


scalars = st.one_of(
    st.none(), st.booleans(), st.integers(-(10**400), 10**400), st.integers(-3, 3), st.floats(), st.floats(-2, 2),
    st.text(max_size=12), st.binary(max_size=4), st.dates(), st.sampled_from([2**63, -(2**63) - 1, 1e308, 1e-308, ""]),
)  # fmt: skip
values = st.recursive(
    scalars,
    lambda inner: st.one_of(
        st.lists(inner, max_size=4), st.dictionaries(st.one_of(st.text(max_size=6), scalars), inner, max_size=3)
    ),
    max_leaves=6,
)


@st.composite
def spoilt_tree(draw: Any, trees: list[Any], among: Any = values) -> Any:
    """Draw one of the trees with one to three of its values replaced, left out or doubled."""
    tree = draw(st.sampled_from(trees))
    for _ in range(draw(st.integers(1, 3))):
        tree = _changed(draw, tree, among)
    return tree


def _changed(draw: Any, tree: Any, among: Any) -> Any:
    """Return a copy of a tree, changed in one place somewhere below its top."""
    if isinstance(tree, dict) and tree:
        keys = list(tree)
        key = keys[draw(st.integers(0, len(keys) - 1))]
        act = draw(st.sampled_from("iiiiiiiiiidra"))
        if act == "d":
            return {other: value for other, value in tree.items() if other != key}
        if act == "r":
            return {**tree, key: draw(among)}
        if act == "a":
            return {**tree, draw(st.text(max_size=8)): draw(among)}
        return {**tree, key: _changed(draw, tree[key], among)}
    if isinstance(tree, list) and tree:
        place = draw(st.integers(0, len(tree) - 1))
        act = draw(st.sampled_from("iiiiiiiidt"))
        if act == "d":
            return [*tree[:place], *tree[place + 1 :]]
        if act == "t":
            return [*tree[:place], tree[place], *tree[place:]]
        return [*tree[:place], _changed(draw, tree[place], among), *tree[place + 1 :]]
    return draw(among) if draw(st.integers(0, 3)) == 0 else draw(_near(tree, among))


def _near(value: Any, among: Any) -> Any:
    """Return values of the same kind: what passes a check of types and may break what comes after it."""
    if isinstance(value, bool):
        return st.just(not value)
    if isinstance(value, int):
        return st.sampled_from([0, -1, 1, 2, value + 1, value - 1, 2**31, 2**63, 10**30])
    if isinstance(value, float):
        return st.sampled_from([0.0, -0.0, -value, value + 1.0, 0.5 * value, 1e-320, 1e308, -1e308, 7, 1e9])
    if isinstance(value, str):
        return st.sampled_from(["", value + "x", value[1:], "initial", "x" * 3000, "1", "champion", "void", "accept"])
    return among


def as_yaml(tree: Any) -> bytes:
    """Write a tree of plain values as YAML; dates, bytes and odd keys get the tags that safe YAML has for them."""
    text: str = yaml.safe_dump(tree, allow_unicode=True)
    return text.encode("utf-8", "surrogatepass")


RUNS = ("os.system", "os.exec", "os.posix_spawn", "os.spawn", "os.fork", "subprocess.Popen", "pickle.find_class",
        "ctypes.dlopen", "socket.connect", "os.remove", "os.rename", "os.mkdir", "shutil.", "webbrowser.open",
        "sqlite3.enable_load_extension", "sqlite3.load_extension")  # fmt: skip
LOCKS = ("open", "os.remove")
"""What a ledger's lock file takes; SQLite's own files are not among Python's audit events."""
_seen: list[str] = []
_watching = [False]


def _hook(event: str, arguments: tuple[Any, ...]) -> None:
    if not _watching[0]:
        return
    writes = event == "open" and arguments[2] & (os.O_WRONLY | os.O_RDWR)
    if event.startswith(RUNS) or writes:
        _seen.append(f"{event}{arguments!r}"[:200])


sys.addaudithook(_hook)


@contextmanager
def nothing_run(locks: bool = False) -> Iterator[None]:
    """Fail where a process was started, a file written or removed, or an extension loaded inside the block.

    With ``locks``, a lock file may come and go.

    Python's own audit events tell (PEP 578): https://docs.python.org/3/library/audit_events.html.
    """
    _seen.clear()
    _watching[0] = True
    try:
        yield
    finally:
        _watching[0] = False
    seen = [event for event in _seen if not (locks and event.startswith(LOCKS) and ".lock'" in event)]
    assert seen == [], f"reading a file did more than read: {seen}"
