"""``fieldnav pretune`` from files to files: what it leaves, how it is stopped and gone on with, what it refuses."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from prepare.floors import SHIPPED, yard, yard_file

from fieldnav_ros.cli import main
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import read_parameters
from fieldnav_ros.prepare import preparation
from fieldnav_ros.prepare.workers import InPlace
from fieldnav_ros.tuning.events import EpisodeScored, Event, ReportIgnored
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.pretune import session_on
from fieldnav_ros.tuning.prior_file import load_prior
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.work import Work

LIMIT_S = 120.0


def arguments(yard_path: Path, out: Path, episodes: int = 900, workers: int = 1) -> list[str]:
    return [
        "pretune", "--yard", str(yard_path), "--out", str(out), "--episodes", str(episodes),
        "--workers", str(workers), "--json",
    ]  # fmt: skip


def told(capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    """Return the summary on the last line."""
    summary: dict[str, Any] = json.loads(capsys.readouterr().out.splitlines()[-1])
    return summary


def in_group(group: int) -> list[int]:
    """Return the processes of a group that have not ended (some may wait to be collected, state Z in proc(5))."""
    found = []
    for path in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = path.read_text().rsplit(")", 1)[1].split()
        except OSError:
            continue  # it has ended
        if int(fields[2]) == group and fields[0] not in "ZX":
            found.append(int(path.parent.name))
    return found


def decided(path: Path) -> list[Event]:
    """Return what counts in a ledger."""
    with Ledger.read(path) as ledger:
        return [event for event in ledger.events() if not isinstance(event, ReportIgnored)]


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder in which one run went through."""
    folder = tmp_path_factory.mktemp("whole")
    assert main(arguments(yard_file(folder), folder / "out")) == 0
    return folder / "out"


def test_it_leaves_a_prior_a_champion_and_a_ledger_that_agree(whole: Path) -> None:
    session = session_on(yard())
    session.apply(*decided(whole / "session.ledger"))
    prior = load_prior(whole / "prior.yaml")
    assert session.ended
    assert prior.mean == pytest.approx(session.prior().mean)
    assert np.array(prior.covariance) == pytest.approx(np.array(session.prior().covariance))
    assert 500 < prior.episodes == session.state.times.episodes <= 900
    assert f"{prior.episodes} simulated episodes on parcel yard, seed 1" in prior.learnt_from
    assert read_parameters(whole / "champion.yaml") == session.champion.parameters


def test_run_again_it_has_nothing_to_do_and_changes_nothing(whole: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = {path.name: path.read_bytes() for path in whole.iterdir()}
    assert main(arguments(whole.parent / "yard.yaml", whole)) == 0
    assert told(capsys)["ok"] is True
    assert {path.name: path.read_bytes() for path in whole.iterdir()} == before


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_stopped_in_the_middle_of_a_work_it_leaves_a_usable_prior_and_goes_on_to_the_same_end(
    number: signal.Signals,
    whole: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    """A signal in each work in turn: what had been scored stays, and in the end the ledger is the unbroken run's."""
    path, out = yard_file(tmp_path), tmp_path / "out"
    works = 0

    class Interrupted(InPlace):
        def __call__(self, work: Work) -> Sequence[BatchResult]:
            nonlocal works
            works += 1
            if works % 3 == 0:
                os.kill(os.getpid(), number)
            return super().__call__(work)

    monkeypatch.setattr(preparation, "InPlace", Interrupted)
    scored, stops = 0, 0
    while (code := main(arguments(path, out))) == 1:
        summary = told(capsys)
        assert summary["stopped"] is True
        assert summary["episodes"] >= scored
        scored, stops = summary["episodes"], stops + 1
        assert load_prior(out / "prior.yaml").episodes == scored
        assert read_parameters(out / "champion.yaml") == DEFAULTS or stops > 1
        assert stops < 50
    assert code == 0
    assert stops >= 3
    assert decided(out / "session.ledger") == decided(whole / "session.ledger")
    assert (out / "prior.yaml").read_text() == (whole / "prior.yaml").read_text()
    assert signal.getsignal(number) is not None


def test_a_terminals_interrupt_to_a_run_with_workers_ends_it_in_order(tmp_path: Path) -> None:
    """Ctrl-C reaches the whole process group, workers too; the real program, a long budget, no process left behind."""
    out = tmp_path / "out"
    command = [sys.executable, "-m", "fieldnav_ros.cli", *arguments(yard_file(tmp_path), out, 10**7, workers=2)]
    process = subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
    )
    try:
        assert process.stdout is not None
        line = process.stdout.readline()  # the first progress, after some seconds of work
        assert "of 10000000 episodes" in line
        os.killpg(process.pid, signal.SIGINT)
        said, errors = process.communicate(timeout=LIMIT_S)
    finally:
        process.kill()
        process.wait(LIMIT_S)
    assert process.returncode == 1
    assert errors == ""
    summary = json.loads(said.splitlines()[-1])
    assert summary["stopped"] is True
    assert load_prior(out / "prior.yaml").episodes == summary["episodes"] > 0
    assert sum(isinstance(event, EpisodeScored) for event in decided(out / "session.ledger")) == summary["episodes"]
    deadline = time.monotonic() + LIMIT_S
    while living := in_group(process.pid):
        assert time.monotonic() < deadline, f"left behind: {living}"
        time.sleep(0.05)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (["--episodes", "1000"], "was begun with floor_time_s"),
        (["--seed", "2"], "was begun with seed 1, not 2"),
        (["--yard", str(SHIPPED)], "is about another yard or field"),
    ],
)
def test_a_ledger_about_something_else_is_not_gone_on_with(
    whole: Path, capsys: pytest.CaptureFixture[str], change: list[str], says: str
) -> None:
    before = (whole / "session.ledger").read_bytes()
    assert main([*arguments(whole.parent / "yard.yaml", whole), *change]) == 2
    assert says in capsys.readouterr().err
    assert (whole / "session.ledger").read_bytes() == before


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (["--episodes", "399"], "--episodes is '399', must be a whole number from 400"),
        (["--workers", "0"], "--workers is '0', must be a whole number from 1"),
        (["--yard", "no.yaml"], "no.yaml: No such file"),
        (["--out", "/dev/null/x"], "cannot be made"),
    ],
)
def test_bad_input_is_refused_in_one_sentence(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], change: list[str], says: str
) -> None:
    assert main([*arguments(SHIPPED, tmp_path / "out"), *change]) == 2
    error = capsys.readouterr().err
    assert says in error
    assert error.count("\n") == 1
