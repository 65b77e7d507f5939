"""Message definitions and type hashes, as rosbag2 puts them into its bags, and whether they can be had here."""

from __future__ import annotations

from functools import lru_cache
from importlib.util import find_spec
from typing import Any, NamedTuple

from fieldnav_ros.errors import WorkError

LIBRARIES = ("mcap", "rosbags")


class Definition(NamedTuple):
    """A message type's definition (the text with all it refers to, encoding ros2msg) and its hash (REP-2011)."""

    text: str
    digest: str


def check_installed() -> None:
    """Raise WorkError, with what to do about it, where the libraries for bags are missing."""
    for module in LIBRARIES:
        if find_spec(module) is None:
            raise WorkError(
                f"{module} is not installed; bags need the extra 'bags' of fieldnav_ros, or:"
                f" python3 -m pip install {' '.join(LIBRARIES)}"
            )


@lru_cache(maxsize=1)
def typestore() -> Any:
    """Return the definitions of the standard messages, which are the same in Jazzy and Kilted."""
    from rosbags.typesys import Stores, get_typestore

    return get_typestore(Stores.ROS2_JAZZY)


@lru_cache(maxsize=64)
def definition(kind: str) -> Definition:
    """Return the definition of a standard message type such as ``std_msgs/msg/String``."""
    store = typestore()
    text, _ = store.generate_msgdef(kind, ros_version=2)
    return Definition(text, store.hash_rihs01(kind))
