"""Obstacles at the moment of a pose: moved on, left out when old, from tracking and from odometry together."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from fieldnav_ros.crowd import NANO, Crowd, Mover, Pairing, Reading, Sighting
from fieldnav_ros.tracking import Rules

MS = NANO // 1000


def crowd() -> Crowd:
    return Crowd(Rules(alpha=1.0, patience=0.5), radius=0.06)


def at(stamp: int, *places: tuple[float, float]) -> Sighting:
    return Sighting(stamp, np.array(places, dtype=float).reshape(-1, 2).T)


def test_tracked_obstacles_are_moved_on_to_the_poses_moment() -> None:
    seen = crowd()
    for stamp in (0, 100):
        seen.see(at(stamp * MS, (0.001 * stamp, 1.0)), stamp * MS)
    view = seen.at(150 * MS)
    assert view.obstacles.x[:, 0] == pytest.approx([0.15])
    assert view.obstacles.vx[:, 0] == pytest.approx([1.0])
    assert view.obstacles.radius[:, 0] == pytest.approx([0.06])
    assert view.lag == pytest.approx(0.05)


def test_velocity_comes_from_stamps_also_where_age_goes_by_arrival() -> None:
    """A camera whose clock is an hour off, and messages that arrive unevenly."""
    seen = crowd()
    hour = 3600 * NANO
    seen.see(at(hour, (0.0, 0.0)), 1000 * MS)
    seen.see(at(hour + 100 * MS, (0.1, 0.0)), 1130 * MS)
    view = seen.at(1140 * MS)
    assert view.obstacles.vx[0, 0] == pytest.approx(1.0)
    assert view.obstacles.x[0, 0] == pytest.approx(0.11)


def test_what_is_too_old_is_left_out_and_named() -> None:
    seen = crowd()
    seen.see(at(0, (0.0, 0.0)), 0)
    seen.hear("cart1", Mover(0, 1.0, 1.0, 0.5, 0.0), 400 * MS)
    view = seen.at(600 * MS)
    assert view.left_out == ("obstacles",)
    assert view.obstacles.x[:, 0] == pytest.approx([1.1])
    assert seen.at(1000 * MS).left_out == ("obstacles", "cart1")
    assert seen.at(1000 * MS).obstacles.x.shape == (0, 1)


def test_an_episode_has_the_same_digits_at_any_time_of_day() -> None:
    """Lockstep is repeatable to the last digit: the epoch of the tracker starts anew after a pause."""
    results = []
    for base in (NANO, 1_764_000_000 * NANO):
        seen = crowd()
        seen.see(at(base - 2 * NANO, (2.0, 0.5)), base - 2 * NANO)
        for number in range(7):
            stamp = base + 20 * MS * number
            seen.see(at(stamp, (0.1 + 0.0071 * number, 0.3)), stamp)
        results.append(seen.at(stamp).obstacles)
    assert all(np.array_equal(one, other) for one, other in zip(*results))


@pytest.mark.parametrize("order", list(itertools.permutations(range(4))))
def test_pairing_completes_every_moment_in_any_order(order: tuple[int, ...]) -> None:
    items: list[Reading | Sighting] = [Reading(1, 0, 0, 0), at(1), Reading(2, 0, 0, 0), at(2)]
    pairing = Pairing()
    done = [pair for pair in (pairing.put(items[index]) for index in order) if pair is not None]
    assert sorted(reading.stamp for reading, _ in done) == [1, 2]
    assert all(reading.stamp == sighting.stamp for reading, sighting in done)
