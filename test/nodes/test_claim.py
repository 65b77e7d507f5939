"""One claim at a time, and one that nobody renews runs out."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

pytest.importorskip("rclpy", reason="claims travel as messages")

from fieldnav_ros.nodes.claim import HELD, LEASE, LONGEST, Lease

pytestmark = pytest.mark.ros


class Clock:
    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


@given(st.lists(st.tuples(st.sampled_from("abc"), st.sampled_from([0.0, 0.5, 0.9 * LEASE, LEASE, 2 * LEASE]))))
def test_nobody_gets_a_claim_within_the_lease_of_another(asks: list[tuple[str, float]]) -> None:
    """Against a plain record of who was let in when."""
    clock = Clock()
    lease = Lease(clock)
    holder, since = "", 0.0
    for claim, passed in asks:
        clock.now += passed
        free = holder in ("", claim) or clock.now - since >= LEASE
        reason = lease.refusal(claim)
        assert (reason is None) == free
        if free:
            lease.take(claim)
            holder, since = claim, clock.now
        else:
            assert reason == HELD + holder
        assert lease.holder == holder


def test_an_empty_claim_frees_what_is_held_by_nobody_else() -> None:
    clock = Clock()
    lease = Lease(clock)
    lease.take("a")
    assert lease.refusal("") == HELD + "a", "a stranger cannot free another's claim"
    clock.now += LEASE
    assert lease.holder == ""
    assert lease.refusal("") is None


@pytest.mark.parametrize("claim", ["x" * (LONGEST + 1), 1, None])
def test_a_claim_that_is_no_text_of_bounded_length_is_refused(claim: object) -> None:
    assert "must be a text" in str(Lease().refusal(claim))
