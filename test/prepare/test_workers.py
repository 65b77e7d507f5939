"""Whoever runs the work, however many there are and whichever of them dies: the outcomes are the same, bit for bit."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pytest
from prepare.floors import MARKER, Deadly, Fatal, driven, work

from fieldnav_ros.errors import WorkError
from fieldnav_ros.prepare.workers import DaskCluster, InPlace, LocalProcesses, Workers, run_elsewhere
from fieldnav_ros.tuning.events import Event
from fieldnav_ros.tuning.pretune import Runner
from fieldnav_ros.world.batch import BatchResult

WORK = work()
RESULT = WORK.run()


def same(parts: Sequence[BatchResult]) -> bool:
    """Tell whether the parts, side by side, are the result of the whole."""
    return all(
        np.array_equal(np.hstack([getattr(part, name) for part in parts]), getattr(RESULT, name), equal_nan=True)
        for name in ("code", "time", "clearance")
    )


def test_the_work_is_one_in_which_outcomes_differ() -> None:
    assert len(np.unique(RESULT.time)) > 3
    assert not same([WORK._replace(sets=WORK.sets[::-1]).run()])


@pytest.mark.parametrize("number", [1, 2, 4, 30])
def test_a_work_in_parts_has_the_outcomes_of_the_whole(number: int) -> None:
    parts = WORK.parts(number)
    assert len(parts) == min(number, len(WORK.layouts))
    sizes = [len(part.layouts) for part in parts]
    assert max(sizes) - min(sizes) <= 1
    assert same([part.run() for part in parts])


@pytest.fixture
def marker(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    path = tmp_path / "killed"
    monkeypatch.setenv(MARKER, str(path))
    return path


def test_work_that_kills_every_process_is_given_up_in_one_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("fieldnav_ros.prepare.workers.TRIES", 2)
    with LocalProcesses(1) as workers, pytest.raises(WorkError, match="lost 2 times in a row"):
        workers(Fatal(*WORK))


def test_a_worker_of_another_version_is_refused() -> None:
    with pytest.raises(WorkError, match=r"has fieldnav_ros .*, must have 0.0.0-other"):
        run_elsewhere(WORK, "0.0.0-other")


def test_a_scheduler_that_is_not_there_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("distributed")
    monkeypatch.setattr("fieldnav_ros.prepare.workers.CONNECT_S", 0.2)
    with pytest.raises(WorkError, match=r"scheduler tcp://127\.0\.0\.1:9: cannot be reached"):
        DaskCluster("tcp://127.0.0.1:9")


@pytest.fixture
def cluster(marker: Path) -> Iterator[str]:
    """A real cluster: a scheduler and two workers, each a process with a nanny that starts it again."""
    distributed = pytest.importorskip("distributed")
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, host="127.0.0.1", dashboard_address=None
    ) as started:
        yield started.scheduler_address


@pytest.fixture(scope="module")
def alone() -> list[Event]:
    """The events of a session in one process."""
    return driven(InPlace())[1]


def losing(workers: Workers) -> Runner:
    """Return a runner whose third work kills the first worker that begins with it."""
    works = itertools.count(1)
    return lambda item: workers(Deadly(*item) if next(works) == 3 else item)


def test_a_session_on_a_cluster_that_loses_a_worker_midway_is_the_session_of_one_process(
    cluster: str, marker: Path, alone: list[Event]
) -> None:
    """Event for event."""
    with DaskCluster(cluster) as workers:
        assert driven(losing(workers))[1] == alone
    assert marker.exists()


def test_a_session_on_processes_of_which_one_is_killed_midway_is_the_session_of_one_process(
    marker: Path, alone: list[Event]
) -> None:
    """Event for event, with three of them."""
    with LocalProcesses(3) as workers:
        assert driven(losing(workers))[1] == alone
    assert marker.exists()
