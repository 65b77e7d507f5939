"""The acceptance test against binomial bounds and other tests of SciPy, and against Ville's inequality."""

from __future__ import annotations

import ast
import inspect
import math
import subprocess
import sys
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import stats

from fieldnav_ros.errors import InputError
from fieldnav_ros.tuning import verdict
from fieldnav_ros.tuning.verdict import LOG_WEIGHTS, STAKES, Evidence

B = 20.0
ALPHA = 0.05
Floats = NDArray[np.float64]


def log_e_of(differences: Floats, bound: float = B) -> Floats:
    """Compute log evidence after each pair for many sessions at once, straight from the published product."""
    log_wealth = np.cumsum(np.log(1 + STAKES * (differences / bound)[..., None]), axis=1)
    result: Floats = np.log(np.exp(log_wealth + LOG_WEIGHTS).sum(axis=-1))
    return result


def evidence_of(differences: list[float], bound: float = B, alpha: float = ALPHA) -> Evidence:
    evidence = Evidence(bound, alpha)
    for difference in differences:
        evidence = evidence.after(difference)
    return evidence


@given(st.lists(st.floats(-B, B), max_size=30))
def test_one_at_a_time_equals_the_published_product(differences: list[float]) -> None:
    # Waudby-Smith and Ramdas, JRSS-B 2024: capital = product of (1 + lambda (x - m)); a mixture averages capitals
    direct = sum(
        math.exp(weight) * math.prod(1 + stake * d / B for d in differences)
        for stake, weight in zip(STAKES, LOG_WEIGHTS)
    )
    evidence = evidence_of(differences)
    assert evidence.e_value == pytest.approx(direct, rel=1e-9)
    assert evidence.pairs == len(differences)
    if differences:
        assert evidence.mean == pytest.approx(np.mean(differences), abs=1e-9)


def two_points(low: float, high: float) -> tuple[Floats, Floats]:
    return np.array([low, high]), np.array([high, -low]) / (high - low)


def null_cases() -> dict[str, tuple[Floats, Floats]]:
    """Values and their probabilities; every mean is 0, the hardest of "not better"."""
    symmetric = np.array([-17.5, -0.5, 0.5, 17.5]), np.array([0.1, 0.4, 0.4, 0.1])
    return {
        "nothing but noise": (np.array([-0.4, 0.4]), np.array([0.5, 0.5])),
        "both fail as often": symmetric,
        "slightly faster but a rare contact": two_points(-17.5, 0.5),
        "faster but a very rare contact": two_points(-19.5, 0.1),
        "slightly slower but a rare rescue": two_points(-0.5, 17.5),
        "the widest possible": (np.array([-20.0, 20.0]), np.array([0.5, 0.5])),
    }


@pytest.mark.parametrize("case", null_cases())
def test_false_acceptance_stays_under_alpha_when_looked_at_after_every_pair(case: str) -> None:
    values, chances = null_cases()[case]
    assert values @ chances == pytest.approx(0)
    sessions, looks = 4000, 100
    draws = np.random.default_rng(11).choice(values, size=(sessions, looks), p=chances)
    false = int((log_e_of(draws) >= -math.log(ALPHA)).any(axis=1).sum())
    # scipy.stats.binomtest: the count must not speak against a true rate of at most alpha
    assert stats.binomtest(false, sessions, ALPHA, alternative="greater").pvalue > 0.001


def test_the_count_of_false_acceptances_would_catch_a_test_looked_at_too_often() -> None:
    """A t-test repeated after every pair breaks its alpha on the same sessions: the check above can fail."""
    draws = np.random.default_rng(11).normal(size=(500, 60))
    hit = np.zeros(500, dtype=bool)
    for n in range(5, 61):
        hit |= stats.ttest_1samp(draws[:, :n], 0, axis=1, alternative="greater").pvalue <= ALPHA
    assert stats.binomtest(int(hit.sum()), 500, ALPHA, alternative="greater").pvalue < 0.001


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.floats(-B, B), st.integers(1, 9)), min_size=2, max_size=3),
    st.integers(1, 5),
    st.sampled_from([0.05, 0.2, 0.5]),
)
def test_villes_inequality_holds_exactly_on_small_trees(
    atoms: list[tuple[float, int]], depth: int, alpha: float
) -> None:
    """Walk every path of a distribution whose mean is at most 0: the chance of ever reaching 1/alpha is <= alpha."""
    values = np.array([value for value, _ in atoms])
    chances = np.array([weight for _, weight in atoms]) / sum(weight for _, weight in atoms)
    values = np.clip(values - max(float(values @ chances), 0.0), -B, B)
    if values @ chances > 0:
        return

    def chance_of_acceptance(evidence: Evidence, left: int) -> float:
        if evidence.accepted:
            return 1.0
        if not left:
            return 0.0
        return math.fsum(
            chance * chance_of_acceptance(evidence.after(float(value)), left - 1)
            for value, chance in zip(values, chances)
        )

    assert chance_of_acceptance(Evidence(B, alpha), depth) <= alpha + 1e-12


@given(st.lists(st.floats(-B, B), min_size=1, max_size=60))
def test_wealth_stays_positive_and_grows_with_each_difference(differences: list[float]) -> None:
    evidence = evidence_of(differences)
    assert math.isfinite(evidence.log_e)
    more = evidence_of([min(d + 1.0, B) for d in differences])
    assert more.log_e >= evidence.log_e


@given(st.lists(st.floats(-1, 1), min_size=1, max_size=20), st.floats(0.1, 1000))
def test_the_unit_of_cost_does_not_matter(shares: list[float], bound: float) -> None:
    scaled = [min(max(share * bound, -bound), bound) for share in shares]
    assert evidence_of(scaled, bound).log_e == pytest.approx(evidence_of(shares, 1.0).log_e, abs=1e-9)


def paired_differences(sessions: int, pairs: int, champion: float, challenger: float, gain: float) -> Floats:
    """Differences like ours: arrivals of 1.2 to 4 s that depend on the layout, failures of 12 and 20 s.

    ``champion`` and ``challenger`` are the shares of failures, half of them due to the layout; ``gain`` in s.
    """
    rng = np.random.default_rng(5)
    shape = (sessions, pairs)
    layout, luck = rng.gamma(8.0, 0.32, shape), rng.random(shape)
    other_luck = np.where(rng.random(shape) < 0.5, luck, rng.random(shape))

    def costs(failing: float, slower: float, fate: Floats) -> Floats:
        arrived = np.clip(layout + slower + rng.normal(0.0, 0.4, shape), 0.7, 10.0)
        return np.where(fate < failing, np.where(fate < 0.8 * failing, 20.0, 12.0), arrived)

    return costs(champion, gain, luck) - costs(challenger, 0.0, other_luck)


def agrapa_log_e_of(differences: Floats, truncation: float) -> Floats:
    """Compute the log evidence of aGRAPA, the paper's approximate growth-rate-adaptive bets (its section B.3)."""
    x = differences / B
    seen = np.arange(1, x.shape[1] + 1)
    mean = np.cumsum(x, axis=1) / (seen + 1)
    variance = (0.25 + np.cumsum((x - mean) ** 2, axis=1)) / (seen + 1)
    bets = np.clip(mean / (variance + mean**2), 0.0, truncation)
    bets = np.concatenate([np.zeros((len(x), 1)), bets[:, :-1]], axis=1)
    result: Floats = np.cumsum(np.log1p(bets * x), axis=1)
    return result


def power_of(log_e: Floats) -> float:
    return float((log_e >= -math.log(ALPHA)).any(axis=1).mean())


@pytest.mark.parametrize(
    ("champion", "challenger", "gain", "pairs", "at_least"),
    [
        (0.50, 0.13, 1.0, 20, 0.70),
        (0.50, 0.13, 1.0, 40, 0.95),
        (0.27, 0.02, 1.0, 20, 0.45),
        (0.27, 0.02, 1.0, 40, 0.95),
    ],
)
def test_power_on_differences_like_ours_and_against_learnt_bets(
    champion: float, challenger: float, gain: float, pairs: int, at_least: float
) -> None:
    draws = paired_differences(2000, pairs, champion, challenger, gain)
    power = power_of(log_e_of(draws))
    assert power >= at_least
    assert power >= max(power_of(agrapa_log_e_of(draws, truncation)) for truncation in (0.5, 0.9, 0.95)) - 0.01


def test_it_never_accepts_more_readily_than_the_exact_test_for_two_values() -> None:
    """For wins and losses of equal size the mean is not above 0 exactly when a win has no more than even chance.

    scipy.stats.binomtest is then the exact test for one look; a test for every look must ask for more.
    """
    pairs = 40
    for wins in range(pairs + 1):
        for order in ([B] * wins + [-B] * (pairs - wins), [-B] * (pairs - wins) + [B] * wins):
            if evidence_of(order).accepted:
                assert stats.binomtest(wins, pairs, 0.5, alternative="greater").pvalue <= ALPHA


def test_thirty_clear_wins_are_accepted_and_thirty_losses_are_not() -> None:
    assert evidence_of([15.0] * 6).accepted
    assert not evidence_of([-15.0] * 30).accepted
    assert not Evidence(B, ALPHA).accepted
    assert Evidence(B, ALPHA).mean is None
    assert evidence_of([B] * 2000).e_value == math.inf


@pytest.mark.parametrize(
    ("make", "says"),
    [
        (lambda: Evidence(B, ALPHA).after(20.1), "difference of costs is 20.1"),
        (lambda: Evidence(B, ALPHA).after(math.nan), "difference of costs is nan"),
        (lambda: Evidence(0.0, ALPHA), "bound of the differences is 0.0"),
        (lambda: Evidence(math.inf, ALPHA), "bound of the differences is inf"),
        (lambda: Evidence(B, 0.0), "alpha is 0.0"),
        (lambda: Evidence(B, 1.0), "alpha is 1.0"),
    ],
)
def test_what_would_break_the_guarantee_is_refused(make: Callable[[], Evidence], says: str) -> None:
    with pytest.raises(InputError, match=says):
        make()


def test_the_verdict_stands_alone() -> None:
    """It imports nothing of the package but errors and a type."""
    tree = ast.parse(inspect.getsource(verdict))
    ours = {
        node.module
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("fieldnav_ros")
    }
    assert ours <= {"fieldnav_ros.errors", "fieldnav_ros.parameters"}


def test_importing_the_verdict_does_not_load_the_search_engine() -> None:
    program = (
        "import sys, fieldnav_ros.tuning.verdict; loaded = 'cma' in sys.modules; "
        "from fieldnav_ros.tuning import Session; print(loaded, 'cma' in sys.modules, Session.__name__)"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, timeout=60, check=True)
    assert done.stdout.split() == ["False", "True", "Session"]
