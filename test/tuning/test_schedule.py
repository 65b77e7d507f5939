from __future__ import annotations

import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.tuning.events import SessionConfig
from fieldnav_ros.tuning.schedule import Times, alpha_of_round, make_plan

CONFIG = SessionConfig(floor_time_s=1200.0, episode_guess_s=3.0, reset_guess_s=2.0, verdict_share=0.4)


def test_before_any_episode_the_guesses_count() -> None:
    plan = make_plan(CONFIG, Times(), 0.0, 1200.0, in_verdict=False)
    assert plan.episodes_left == 240
    assert plan.search_episodes == 144
    assert plan.verdict_episodes == 96


def test_what_is_seen_soon_outweighs_the_guesses() -> None:
    times = Times()
    for _ in range(60):
        times = times.after(episode_s=1.5, floor_time_s=2.0)
    episode, reset = times.means(CONFIG)
    assert episode == pytest.approx(1.5, abs=0.15)
    assert reset == pytest.approx(0.5, abs=0.15)


@pytest.mark.parametrize(
    ("used", "since", "fits"),
    [(0.0, 0.0, True), (1195.0, 0.0, True), (1195.1, 0.0, False), (1180.0, 14.9, True), (1180.0, 15.1, False)],
)
def test_an_episode_fits_where_it_and_its_reset_are_expected_to_end_in_time(
    used: float, since: float, fits: bool
) -> None:
    """By hand: 1200 s, of which an episode and its reset take 3 + 2."""
    assert make_plan(CONFIG, Times(), used, 1200.0, in_verdict=False).fits_one_more(since) is fits


def test_in_the_verdict_all_that_is_left_is_for_it() -> None:
    plan = make_plan(CONFIG, Times(), 1000.0, 1200.0, in_verdict=True)
    assert plan.search_episodes == 0
    assert plan.verdict_episodes == plan.episodes_left == 40


@given(st.floats(0, 3000), st.lists(st.tuples(st.floats(0, 30), st.floats(0, 60)), max_size=30), st.booleans())
def test_a_plan_adds_up_and_never_overspends(used: float, seen: list[tuple[float, float]], in_verdict: bool) -> None:
    times = Times()
    for episode, floor in seen:
        times = times.after(episode, floor)
    plan = make_plan(CONFIG, times, used, 1200.0, in_verdict)
    assert plan.search_episodes + plan.verdict_episodes == plan.episodes_left
    assert plan.episodes_left * plan.step_s <= plan.floor_left_s + 1e-9
    assert plan.search_left_s <= (1 - CONFIG.verdict_share) * 1200.0 + 1e-9


@given(st.floats(0.001, 0.5), st.integers(1, 16))
def test_the_rounds_spend_alpha_between_them(alpha: float, rounds: int) -> None:
    parts = [alpha_of_round(alpha, number, rounds) for number in range(1, rounds + 1)]
    assert sum(parts) == pytest.approx(alpha)
    assert all(first == pytest.approx(2 * second) for first, second in itertools.pairwise(parts))
