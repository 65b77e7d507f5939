"""Scripts: steps that wait for futures, resumed by callbacks."""

from __future__ import annotations

from collections.abc import Generator
from typing import Any

import pytest

pytest.importorskip("rclpy", reason="futures are rclpy's")

from rclpy.task import Future

from fieldnav_ros.nodes import script as module
from fieldnav_ros.nodes.script import LateError, Script, Wait

pytestmark = pytest.mark.ros
Steps = Generator[Wait, Any, None]


class Clock:
    """A clock that stands until it is set."""

    now = 100.0

    def monotonic(self) -> float:
        return self.now


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    clock = Clock()
    monkeypatch.setattr(module, "time", clock)
    return clock


def unexpected(error: Exception) -> None:
    pytest.fail(f"a fault reached the script's caller: {error!r}")


def waiter(future: Future, seen: list[object], seconds: float | None = 1.0) -> Steps:
    try:
        seen.append((yield Wait(future, seconds)))
    except LateError:
        seen.append("late")
    finally:
        seen.append("left")


def test_result_of_a_future_reaches_the_step_that_waits_for_it(clock: Clock) -> None:
    seen: list[object] = []
    future = Future()
    script = Script(unexpected)
    script.start(waiter(future, seen))
    assert script.running
    assert seen == []
    future.set_result(7)
    assert seen == [7, "left"]
    assert not script.running


def test_step_is_told_when_its_time_is_up_and_not_before(clock: Clock) -> None:
    seen: list[object] = []
    script = Script(unexpected)
    script.start(waiter(Future(), seen, 1.0))
    clock.now += 0.9
    script.tick()
    assert seen == []
    clock.now += 0.2
    script.tick()
    assert seen == ["late", "left"]


def test_wait_without_limit_outlasts_any_clock(clock: Clock) -> None:
    seen: list[object] = []
    script = Script(unexpected)
    script.start(waiter(Future(), seen, None))
    clock.now += 1e9
    script.tick()
    assert seen == []


def test_late_future_of_dropped_steps_is_not_taken_for_the_new_ones(clock: Clock) -> None:
    old, new = Future(), Future()
    first: list[object] = []
    second: list[object] = []
    script = Script(unexpected)
    script.start(waiter(old, first))
    script.start(waiter(new, second))
    assert first == ["left"]
    old.set_result("old")
    assert second == []
    new.set_result("new")
    assert second == ["new", "left"]


def test_steps_may_start_others_in_their_place(clock: Clock) -> None:
    seen: list[object] = []
    future = Future()
    script = Script(unexpected)

    def replaced() -> Steps:
        script.start(waiter(future, seen))
        seen.append("handed over")
        yield Wait(Future(), 1.0)
        seen.append("never")

    script.start(replaced())
    assert seen == ["handed over"]
    future.set_result(1)
    assert seen == ["handed over", 1, "left"]


def test_error_of_a_future_is_raised_in_the_step(clock: Clock) -> None:
    seen: list[object] = []
    future = Future()

    def steps() -> Steps:
        try:
            yield Wait(future, 1.0)
        except ValueError as error:
            seen.append(str(error))

    Script(unexpected).start(steps())
    future.set_exception(ValueError("no"))
    assert seen == ["no"]


def test_fault_that_leaves_the_steps_reaches_the_owner_and_ends_them(clock: Clock) -> None:
    faults: list[Exception] = []
    script = Script(faults.append)

    def steps() -> Steps:
        yield Wait(Future(), 0.5)

    script.start(steps())
    clock.now += 1.0
    script.tick()
    assert [type(fault) for fault in faults] == [LateError]
    assert not script.running


def test_many_futures_that_are_done_already_do_not_pile_up(clock: Clock) -> None:
    count = 0
    script = Script(unexpected)

    def steps() -> Steps:
        nonlocal count
        for _ in range(3000):
            done = Future()
            done.set_result(None)
            yield Wait(done, 1.0)
            count += 1

    script.start(steps())
    assert count == 3000
