"""The tuner without ROS: space, cost, search, verdict, session and its ledger.

``Session`` is loaded when it is asked for, so that ``tuning.verdict`` can be had without the search engine.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fieldnav_ros.tuning.session import Session

__all__ = ["Session"]


def __getattr__(name: str) -> object:
    if name == "Session":
        from fieldnav_ros.tuning.session import Session

        return Session
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
