"""Parameter sets as ROS parameter files, ready for ``--params-file``.

The layout is that of ROS 2 parameter files: node name (or the wildcard ``/**``), ``ros__parameters``, names
nested or dotted.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from fieldnav_ros.errors import InputError, WorkError, shown
from fieldnav_ros.parameters import TABLE, ParameterSet
from fieldnav_ros.yard import read_yaml

GROUPS = tuple(dict.fromkeys(parameter.group for parameter in TABLE))
NOT_NUMBERS = frozenset({"field.model"})
"""Parameters that share a group with the nine numbers but are none of them."""


def parameters_text(parameters: ParameterSet, about: str, model: str) -> str:
    """Return the text of a parameter file that puts the set in service on any guidance node.

    ``about`` becomes its comment; each number carries its unit and meaning.
    """
    lines = [f"# {line}" for line in about.splitlines()] + ["/**:", "  ros__parameters:"]
    for group in GROUPS:
        lines.append(f"    {group}:")
        if group == "field":
            lines.append(f"      model: {model}")
        for row in TABLE:
            if row.group == group:
                value = float(getattr(parameters, row.name))
                lines.append(f"      {row.name}: {_yaml_float(value)}  # {row.unit}; {row.meaning}")
    return "\n".join(lines) + "\n"


def write_parameters(path: Path, parameters: ParameterSet, about: str, model: str) -> None:
    """Write a parameter file so that a reader finds the old one or the new one whole, never a part."""
    write_text(path, parameters_text(parameters, about, model))


def write_text(path: Path, text: str) -> None:
    """Replace a file by ``text`` in one step that survives a crash; WorkError where that fails."""
    write_bytes(path, text.encode("utf-8"))


def write_bytes(path: Path, content: bytes) -> None:
    """Replace a file by ``content`` as ``write_text`` does."""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
            os.chmod(name, 0o644)
            os.replace(name, path)
        except BaseException:
            os.unlink(name)
            raise
    except OSError as error:
        raise WorkError(f"{path}: cannot be written: {error.strerror or error}") from error


def read_parameters(path: str | Path) -> ParameterSet:
    """Read the nine numbers from a ROS parameter file; those it leaves out keep their defaults.

    Raises InputError, one sentence, on anything that is not such a file, on a number out of its range and
    on an unknown name in the groups of the nine numbers. Parameters of other groups are not looked at.
    """
    values = {name: value for name, value in _named(Path(path)) if name.split(".")[0] in GROUPS}
    return ParameterSet.from_ros({name: values[name] for name in values if name not in NOT_NUMBERS}, str(path))


def read_model(path: str | Path) -> object:
    """Return what a ROS parameter file gives as ``field.model``, None where it gives none; errors as above."""
    return dict(_named(Path(path))).get("field.model")


def _named(path: Path) -> Iterator[tuple[str, object]]:
    """Yield the full name and value of each parameter in a file, whatever its node."""
    content = read_yaml(path)
    if not isinstance(content, Mapping) or not content:
        raise InputError(f"{path}: holds {shown(content)}, must hold node names with ros__parameters")
    for node, body in content.items():
        if not isinstance(body, Mapping) or not isinstance(body.get("ros__parameters"), Mapping):
            raise InputError(f"{path}: {shown(node)} has no ros__parameters")
        yield from _flat(body["ros__parameters"], str(path))


def _flat(tree: Mapping[Any, Any], source: str, prefix: str = "") -> Iterator[tuple[str, object]]:
    for key, value in tree.items():
        if not isinstance(key, str):
            raise InputError(f"{source}: {shown(key)} is not a parameter name")
        name = f"{prefix}.{key}" if prefix else key
        if isinstance(value, Mapping):
            yield from _flat(value, source, name)
        else:
            yield name, value


def _yaml_float(value: float) -> str:
    """Return a number that YAML 1.1 reads back as the same float: ``1e-05`` needs its dot, ``5`` its fraction."""
    text = repr(value)
    if "e" in text and "." not in text:
        mantissa, exponent = text.split("e")
        return f"{mantissa}.0e{exponent}"
    return text
