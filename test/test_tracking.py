"""Velocities from positions without identities: uniform motion, swaps, gaps, newcomers, clocks."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.tracking import SAME_MOMENT, Rules, Tracks, follow

EXACT = Rules(alpha=1.0, fastest=2.0, slack=0.05, patience=0.5)
coordinates = st.floats(0.0, 2.4)
speeds = st.floats(-1.0, 1.0)


def seen(tracks: Tracks, stamp: float, *places: tuple[float, float], rules: Rules = EXACT) -> Tracks:
    return follow(tracks, stamp, np.array(places, dtype=float).reshape(-1, 2).T, rules)


@given(
    movers=st.lists(st.tuples(coordinates, coordinates, speeds, speeds), min_size=1, max_size=6),
    dt=st.floats(0.005, 0.1),
    alpha=st.sampled_from([0.3, 0.6, 1.0]),
)
def test_uniform_motion_is_found_exactly_whatever_the_order(
    movers: list[tuple[float, float, float, float]], dt: float, alpha: float
) -> None:
    """Two sightings determine uniform motion, and the alpha-beta filter has no error on it (Benedict, Bordner 1962)."""
    rules = EXACT.model_copy(update={"alpha": alpha})
    start = np.array(movers).T
    apart = np.hypot(start[0][:, None] - start[0], start[1][:, None] - start[1]) + 9.0 * np.eye(len(movers))
    if apart.min() < 0.5:  # who is who is only certain where carts are further apart than one can drive in dt
        start[0] += np.arange(len(movers)) * 4.0
    tracks = Tracks.none()
    orders = itertools.cycle([range(len(movers)), range(len(movers) - 1, -1, -1)])
    for number, order in zip(range(6), orders):
        place = (start[:2] + start[2:] * number * dt)[:, list(order)]
        tracks = follow(tracks, number * dt, place, rules)
        assert tracks.place.shape == (2, len(movers))
    assert tracks.velocity == pytest.approx(start[2:, list(order)], abs=1e-9 / dt)
    assert tracks.place == pytest.approx(place, abs=1e-9)


def test_crossing_carts_keep_their_velocities() -> None:
    """Two carts that change places between sightings are told apart by where they were going."""
    tracks = Tracks.none()
    for number in range(12):
        x = 0.1 * number
        tracks = seen(tracks, 0.1 * number, (x, 0.02), (1.0 - x, -0.02))
    assert tracks.velocity == pytest.approx(np.array([[1.0, -1.0], [0.0, 0.0]]), abs=1e-9)


def test_a_newcomer_stands_until_its_second_sighting() -> None:
    tracks = seen(Tracks.none(), 0.0, (0.0, 0.0))
    tracks = seen(tracks, 0.1, (0.1, 0.0), (2.0, 1.0))
    assert pytest.approx(np.array([[1.0, 0.0], [0.0, 0.0]])) == tracks.velocity.T
    tracks = seen(tracks, 0.2, (0.2, 0.0), (2.0, 1.05))
    assert pytest.approx(np.array([[1.0, 0.0], [0.0, 0.5]])) == tracks.velocity.T


def test_a_hidden_cart_moves_on_and_is_known_again_or_given_up() -> None:
    tracks = seen(seen(Tracks.none(), 0.0, (0.0, 0.0)), 0.1, (0.05, 0.0))
    hidden = seen(tracks, 0.3)
    assert hidden.places_at(0.3)[:, 0] == pytest.approx([0.15, 0.0])
    back = seen(hidden, 0.4, (0.2, 0.0))
    assert back.place.shape == (2, 1)
    assert back.velocity[:, 0] == pytest.approx([0.5, 0.0])
    assert seen(hidden, 0.7).place.shape == (2, 0)


def test_nothing_faster_than_the_fastest_is_one_cart() -> None:
    """A sighting out of reach is another cart; the first is kept for as long as it may be hidden."""
    tracks = seen(seen(Tracks.none(), 0.0, (0.0, 0.0)), 0.1, (1.0, 0.0))
    assert sorted(tracks.place[0]) == [0.0, 1.0]
    assert not tracks.velocity.any()


@given(places=st.lists(st.tuples(coordinates, coordinates), max_size=5), gap=st.floats(0.0, SAME_MOMENT / 2))
def test_a_repeated_message_changes_nothing(places: list[tuple[float, float]], gap: float) -> None:
    before = seen(Tracks.none(), 1.0, *places)
    after = seen(before, 1.0 + gap, *places)
    for one, other in zip(before[:4], after[:4]):
        assert np.array_equal(one, other)


@given(
    frames=st.lists(st.lists(st.tuples(coordinates, coordinates), max_size=5), min_size=1, max_size=8),
    steps=st.lists(st.floats(-0.6, 0.6), min_size=8, max_size=8),
    alpha=st.floats(0.05, 1.0),
)
def test_any_sequence_keeps_speeds_possible_and_is_repeatable(
    frames: list[list[tuple[float, float]]], steps: list[float], alpha: float
) -> None:
    rules = EXACT.model_copy(update={"alpha": alpha})
    runs = []
    for _ in range(2):
        tracks, stamp = Tracks.none(), 0.0
        for places, step in zip(frames, steps):
            stamp += step
            tracks = seen(tracks, stamp, *places, rules=rules)
            assert np.all(np.hypot(*tracks.velocity) <= rules.fastest * (1.0 + 1e-12))
            assert np.isfinite(tracks.place).all()
        runs.append(tracks)
    assert all(np.array_equal(one, other) for one, other in zip(*runs))


def test_old_news_changes_nothing_and_a_clock_set_back_starts_anew() -> None:
    tracks = seen(seen(Tracks.none(), 5.0, (0.0, 0.0)), 5.1, (0.1, 0.0))
    assert seen(tracks, 5.05, (9.0, 9.0)) is tracks
    anew = seen(tracks, 1.0, (0.3, 0.3))
    assert anew.place.T.tolist() == [[0.3, 0.3]]
    assert anew.stamp == 1.0


@pytest.mark.parametrize("alpha", [0.2, 0.4, 0.6, 1.0])
def test_noise_in_velocity_is_what_theory_gives(alpha: float) -> None:
    """Variance of velocity over that of position is 2 beta^2 / (T^2 alpha (4 - 2 alpha - beta)).

    The noise reduction ratio of the alpha-beta filter (Benedict, Bordner 1962); for alpha = 1 it is the 2/T^2 of
    differences.
    """
    rules = EXACT.model_copy(update={"alpha": alpha})
    period, sigma = 0.1, 0.004
    noise = np.random.default_rng(1).normal(0.0, sigma, (4000, 2))
    tracks, velocities = Tracks.none(), []
    for number, error in enumerate(noise):
        tracks = seen(tracks, period * number, (error[0], error[1]), rules=rules)
        velocities.append(tracks.velocity[:, 0])
    ratio = 2.0 * rules.beta**2 / (period**2 * alpha * (4.0 - 2.0 * alpha - rules.beta))
    assert np.std(velocities[100:]) == pytest.approx(sigma * np.sqrt(ratio), rel=0.06)
