"""Outcomes in seconds-equivalents, smaller is better."""

from __future__ import annotations

from typing import Any

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Outcome, OutcomeKind
from fieldnav_ros.parameters import FloatArray

TIMEOUT = 1.2  # times the limit; common practice
FAILURE = 2.0  # times the limit, for a contact or leaving the floor; common practice


def cost_bound(time_limit: float) -> float:
    """Return the largest cost of any outcome (s) under ``time_limit`` (s)."""
    return FAILURE * time_limit


def cost(outcome: Outcome, time_limit: float) -> float | None:
    """Return what an outcome costs in s; None where it does not count.

    An arrival costs its time, a timeout 1.2 times the limit, a contact or leaving the floor twice the
    limit (common practice). An arrival reported later than the limit is no arrival: it costs a timeout.
    """
    if not time_limit > 0:
        raise InputError.of("time limit", time_limit, "> 0 s")
    if outcome.kind is OutcomeKind.VOID:
        return None
    return float(costs(outcome.kind.code, outcome.time, time_limit))


def costs(code: Any, time: Any, time_limit: float) -> FloatArray:
    """Return the costs (s) of outcomes that count, by their codes and times (s); the rule is that of ``cost``."""
    code, time = np.asarray(code), np.asarray(time, dtype=float)
    in_time = (code == OutcomeKind.ARRIVED.code) & (time <= time_limit)
    failed = (code == OutcomeKind.CONTACT.code) | (code == OutcomeKind.OFF_FLOOR.code)
    return np.where(in_time, time, np.where(failed, FAILURE * time_limit, TIMEOUT * time_limit))
