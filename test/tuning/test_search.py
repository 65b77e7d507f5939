from __future__ import annotations

import numpy as np
import pytest
from tuning.synthetic_floor import BEST

from fieldnav_ros.tuning.search import Generation, Search
from fieldnav_ros.tuning.space import Prior

SIZE = len(BEST)
START = np.full(SIZE, 0.5)


def told(search: Search, generations: int, target: np.ndarray = BEST) -> list[Generation]:
    record = []
    for _ in range(generations):
        points = search.ask()
        costs = tuple(float(((point - target) ** 2).sum()) for point in points)
        record.append(Generation(tuple(tuple(float(u) for u in point) for point in points), costs))
        search.tell(record[-1])
    return record


def test_it_finds_the_best_point_of_a_sphere() -> None:
    search = Search(START, 0.25, (1,))
    told(search, 80)
    assert np.abs(search.mean - BEST).max() < 0.02


def test_it_finds_a_best_point_on_the_edge_and_never_leaves_the_cube() -> None:
    search = Search(START, 0.5, (1,))
    corner = np.array([0.0, 1.0] * 4 + [0.0])
    record = told(search, 80, corner)
    assert np.abs(search.mean - corner).max() < 0.05
    points = np.array([point for generation in record for point in generation.points])
    assert points.min() >= 0
    assert points.max() <= 1


@pytest.mark.parametrize("population", [None, 6, 17])
def test_rebuilt_from_its_record_it_proposes_the_same(population: int | None) -> None:
    search = Search(START, 0.25, (4, 2), population)
    again = Search(START, 0.25, (4, 2), population)
    assert search.population == (population or 10)  # 4 + floor(3 ln 9): Hansen, "The CMA Evolution Strategy", 2016
    for generation in told(search, 6):
        again.tell(generation)
    assert np.array_equal(search.mean, again.mean)
    assert np.array_equal(search.covariance, again.covariance)
    assert np.array_equal(search.ask(), again.ask())
    assert np.array_equal(search.ask(), search.ask())


def test_recorded_points_win_over_what_it_would_have_proposed() -> None:
    """As after a library update: another engine's record leads to that engine's place."""
    search, other = Search(START, 0.25, (1,)), Search(START, 0.25, (2,))
    assert not np.array_equal(search.ask(), other.ask())
    for generation in told(search, 40):
        other.tell(generation)
    assert other.mean == pytest.approx(search.mean, abs=0.01)


def test_the_global_random_state_is_neither_used_nor_touched() -> None:
    np.random.seed(1)  # noqa: NPY002  # the global state is what this is about
    before = np.random.get_state()  # noqa: NPY002
    first = Search(START, 0.25, (1,))
    told(first, 5)
    after = np.random.get_state()  # noqa: NPY002
    assert np.array_equal(before[1], after[1])  # type: ignore[index]  # a tuple unless asked for a dict
    assert before[2] == after[2]  # type: ignore[index]  # likewise
    np.random.seed(2)  # noqa: NPY002
    second = Search(START, 0.25, (1,))
    told(second, 5)
    assert np.array_equal(first.ask(), second.ask())


def test_a_prior_gives_the_first_generation_its_mean_and_covariance() -> None:
    # what warm start means: Nomura et al., AAAI 2021
    factor = np.random.default_rng(0).normal(size=(SIZE, SIZE)) * 0.01
    covariance = factor @ factor.T + 1e-4 * np.eye(SIZE)
    prior = Prior.of(START, covariance)
    draws = np.array(Search.from_prior(prior, (7,), population=1000).ask())
    assert Search.from_prior(prior, (1,)).covariance == pytest.approx(covariance, rel=1e-6, abs=1e-12)
    assert draws.mean(axis=0) == pytest.approx(START, abs=0.003)
    assert np.abs(np.cov(draws.T) - covariance).max() < 0.15 * covariance.max()


def test_what_it_learnt_makes_a_prior_from_which_it_goes_on_faster() -> None:
    first = Search(START, 0.25, (1,))
    told(first, 30)
    warm = Search.from_prior(Prior.of(first.mean, first.covariance), (2,))
    cold = Search(START, 0.25, (2,))
    best_warm, best_cold = (min(told(search, 3)[-1].costs) for search in (warm, cold))
    assert best_warm < 0.1 * best_cold


def test_under_noise_the_favourite_lies_nearer_the_best_point_than_the_last_mean() -> None:
    # what averaging iterates is for: Polyak and Juditsky, 1992
    favourite, last = [], []
    for seed in range(12):
        search, noise = Search(BEST, 0.15, (seed,)), np.random.default_rng(seed)
        for _ in range(16):
            points = search.ask()
            costs = tuple(float(((point - BEST) ** 2).sum() + noise.normal(0.0, 0.5)) for point in points)
            search.tell(Generation(tuple(tuple(float(u) for u in point) for point in points), costs))
        favourite.append(((search.favourite - BEST) ** 2).sum())
        last.append(((search.mean - BEST) ** 2).sum())
    assert np.mean(favourite) < np.mean(last)
    assert np.array_equal(Search(START, 0.15, (1,)).favourite, START)
