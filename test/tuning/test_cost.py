from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Outcome, OutcomeKind
from fieldnav_ros.tuning.cost import cost, cost_bound

KIND = OutcomeKind


@pytest.mark.parametrize(
    ("kind", "time", "limit", "expected"),
    [
        # common practice: arrival its time, timeout 1.2 x limit, contact or off the floor 2 x limit
        (KIND.ARRIVED, 2.5, 10.0, 2.5),
        (KIND.ARRIVED, 10.0, 10.0, 10.0),
        (KIND.ARRIVED, 10.01, 10.0, 12.0),
        (KIND.TIMEOUT, 10.0, 10.0, 12.0),
        (KIND.TIMEOUT, 5.0, 5.0, 6.0),
        (KIND.CONTACT, 0.3, 7.0, 14.0),
        (KIND.OFF_FLOOR, 9.0, 10.0, 20.0),
        (KIND.VOID, 3.0, 10.0, None),
    ],
)
def test_outcomes_cost_what_common_practice_says(
    kind: OutcomeKind, time: float, limit: float, expected: float | None
) -> None:
    result = cost(Outcome(kind=kind, time=time), limit)
    assert result == (None if expected is None else pytest.approx(expected))


@given(st.sampled_from(KIND), st.floats(0, 1e6), st.floats(0.1, 600))
def test_a_cost_never_leaves_its_bound_and_failing_is_never_cheaper_than_arriving(
    kind: OutcomeKind, time: float, limit: float
) -> None:
    result = cost(Outcome(kind=kind, time=time), limit)
    if kind is KIND.VOID:
        assert result is None
        return
    assert result is not None
    assert 0 <= result <= cost_bound(limit)
    if kind is not KIND.ARRIVED:
        assert result > limit


@pytest.mark.parametrize("limit", [0.0, -1.0, math.nan])
def test_a_limit_that_is_none_is_refused(limit: float) -> None:
    with pytest.raises(InputError, match="time limit"):
        cost(Outcome(kind=KIND.ARRIVED, time=1.0), limit)
