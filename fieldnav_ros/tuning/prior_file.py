"""Reading ``prior.yaml``; ``space`` itself knows no files."""

from __future__ import annotations

from pathlib import Path

from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.yard import read_yaml


def load_prior(path: str | Path) -> Prior:
    """Read a prior from a YAML file; InputError names file, key, value and bound."""
    return Prior.parse(read_yaml(Path(path)), str(path))
