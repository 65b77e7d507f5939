"""Tapes of chance: of the stated size, from the layout's seed alone."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from fieldnav_ros.model import Layout, Pose
from fieldnav_ros.world.noise import Tapes, is_quiet, record
from fieldnav_ros.yard import Plant

NOISY = Plant(slip=0.2, pose_noise=0.01, yaw_noise=0.05, pose_loss=0.3)
HERE = Pose(x=0.0, y=0.0, yaw=0.0)


def seeded(*seeds: int) -> list[Layout]:
    return [Layout(start=HERE, goal=HERE, seed=seed) for seed in seeds]


def same(one: Tapes, other: Tapes) -> bool:
    return all(np.array_equal(a, b) for a, b in zip(one, other))


@settings(deadline=None, max_examples=30)
@given(seeds=st.lists(st.integers(0, 2**40), min_size=1, max_size=6), steps=st.integers(1, 40), pick=st.integers(0, 5))
def test_a_tape_is_the_same_alone_in_a_batch_again_and_under_a_longer_limit(
    seeds: list[int], steps: int, pick: int
) -> None:
    pick %= len(seeds)
    batch = record(seeded(*seeds), [NOISY] * len(seeds), steps)
    alone = record(seeded(seeds[pick]), [NOISY], steps)
    assert same(Tapes(*(part[:, [pick]] for part in batch)), alone)
    longer = record(seeded(seeds[pick]), [NOISY], steps + 25)
    assert same(Tapes(*(part[:steps] for part in longer)), alone)


def test_different_seeds_give_different_tapes() -> None:
    tapes = record(seeded(1, 2), [NOISY] * 2, 50)
    assert not np.any(tapes.x[:, 0] == tapes.x[:, 1])
    assert not np.any(tapes.grip[:, 0] == tapes.grip[:, 1])


def test_noise_has_the_stated_distribution() -> None:
    """Kolmogorov-Smirnov against SciPy's normal and uniform at a fixed seed; errors independent of each other."""
    tapes = record(seeded(7), [NOISY], 20000)
    x, y, yaw, grip, lost = (part[:, 0] for part in tapes)
    for values, law in (
        (x / 0.01, "norm"), (y / 0.01, "norm"), (yaw / 0.05, "norm"), ((1.0 - grip) / 0.2, "uniform")
    ):  # fmt: skip
        assert stats.kstest(values, law).pvalue > 0.001
    assert stats.binomtest(int(lost.sum()), len(lost), 0.3).pvalue > 0.001
    table = np.corrcoef([x, y, yaw, grip, lost])
    assert np.abs(table - np.eye(5)).max() < 0.03


@pytest.mark.parametrize(
    ("change", "quiet"),
    [
        ({}, True),
        ({"accel_scale": 0.5, "command_delay": 0.1, "wheel_mismatch": 0.1, "pose_rate": 20.0}, True),
        ({"slip": 0.1}, False),
        ({"pose_noise": 0.01}, False),
        ({"yaw_noise": 0.01}, False),
        ({"pose_loss": 0.1}, False),
    ],
)
def test_quiet_is_what_leaves_nothing_to_chance(change: dict[str, float], quiet: bool) -> None:
    plant = Plant.model_validate(change)
    assert is_quiet(plant) is quiet
    tapes = record(seeded(3), [plant], 30)
    nothing = not tapes.x.any() and not tapes.y.any() and not tapes.yaw.any() and not tapes.lost.any()
    assert (nothing and bool((tapes.grip == 1.0).all())) is quiet
