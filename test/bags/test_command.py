"""``fieldnav rescore``: bags beside a ledger, under its rules and others, and as evidence for the next session."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from bags.recordings import Line, asked, drive, lines_of, write
from episodes import YARD

from fieldnav_ros import cli
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.tuning.events import About, EvidenceImported, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.world import layouts

CONFIG = SessionConfig(
    seed=3, floor_time_s=600.0, grade="empty", time_limit=5.0, population=4, layouts=1, least_pairs=2
)  # fmt: skip
EPISODES = 5
Files = tuple[Path, Path]


def draw(grade: str, seed: int) -> Layout:
    return layouts.draw(YARD, grade, np.random.default_rng(seed))


def begun(ledger: Ledger) -> Session:
    session = Session(draw)
    session.apply(*ledger.events())
    commit(session, ledger, session.begin(CONFIG, about=About(model=DEFAULT_MODEL, yard=YARD)))
    return session


def commit(session: Session, ledger: Ledger, events: Any) -> None:
    ledger.append(events)
    session.apply(*events)


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> Files:
    """A session's ledger with its first episodes scored, and a folder with a bag of each."""
    folder = tmp_path_factory.mktemp("session")
    bags = folder / "bags"
    bags.mkdir()
    with Ledger.open(folder / "session.ledger") as ledger:
        session = begun(ledger)
        for number in range(EPISODES):
            episode = session.pending()[0]
            seen, outcome = drive(episode.layout, episode.time_limit, episode.parameters)
            name = f"{episode.id:06d}.ab.{number + 1}"
            request = asked(name, episode.layout, episode.time_limit, episode.set_id)
            write(bags, name, lines_of(request, seen, outcome))
            commit(session, ledger, session.record(episode.id, outcome, outcome.time + 2.0))
    return folder / "session.ledger", bags


def rescore(capsys: pytest.CaptureFixture[str], *words: object) -> tuple[dict[str, Any], str]:
    assert cli.main(["rescore", *map(str, words), "--json"]) == 0
    out = capsys.readouterr().out
    return json.loads(out.splitlines()[-1]), out


def test_bags_agree_with_the_ledger_they_were_recorded_with(files: Files, capsys: pytest.CaptureFixture[str]) -> None:
    summary, out = rescore(capsys, *files)
    assert (summary["bags"], summary["compared"], summary["agree"]) == (EPISODES, EPISODES, EPISODES)
    assert summary["differ"] == summary["without_bag"] == summary["without_entry"] == summary["unreadable"] == 0
    assert "5 episodes compared: 5 agree, 0 differ" in out


def test_other_rules_name_each_difference(files: Files, capsys: pytest.CaptureFixture[str]) -> None:
    summary, out = rescore(capsys, *files, "--time-limit", 0.5)
    assert summary["differ"] == EPISODES
    assert len(summary["differences"]) == EPISODES
    assert "timeout from the bag" in out
    summary, out = rescore(capsys, *files, "--arrival-position", 0.0001)
    assert summary["open"] == EPISODES - summary["compared"]
    assert "recordings end before their episode does" in out


def with_ledger(path: Path, change: Callable[[Session, Ledger], None]) -> Path:
    """Return a ledger of the same session as ``files`` holds, whose first two episodes ended in another way."""
    with Ledger.open(path) as ledger:
        change(begun(ledger), ledger)
    return path


def test_a_ledger_that_says_otherwise_is_told_of(
    files: Files, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The first episode timed out in this ledger, the second is void, the others were never scored; one has no bag."""

    def change(session: Session, ledger: Ledger) -> None:
        first, second = session.pending()[:2]
        commit(session, ledger, session.record(first.id, Outcome(kind=OutcomeKind.TIMEOUT, time=5.0), 7.0))
        commit(session, ledger, session.record(second.id, Outcome(kind=OutcomeKind.VOID, time=0.0), 1.0))
        rerun = next(item for item in session.pending() if item.id > EPISODES)
        commit(session, ledger, session.record(rerun.id, Outcome(kind=OutcomeKind.ARRIVED, time=2.0), 4.0))

    summary, out = rescore(capsys, with_ledger(tmp_path / "other.ledger", change), files[1])
    assert (summary["compared"], summary["differ"], summary["void"]) == (1, 1, 1)
    assert (summary["without_entry"], summary["without_bag"]) == (3, 1)
    assert "000001.ab.1: timeout in the ledger, " in out
    for sentence in ("1 recordings of episodes that the ledger does not count", "3 bags without an entry",
                     "1 episodes of the ledger without a bag"):  # fmt: skip
        assert sentence in out


def test_a_bag_of_another_session_belongs_to_no_entry(
    files: Files, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """It has the number of an entry, but another layout."""
    layout = draw("empty", 99)
    seen, outcome = drive(layout, 5.0)
    write(tmp_path, "000001.zz.1", lines_of(asked("000001.zz.1", layout, 5.0, "g1.1"), seen, outcome))
    summary, _ = rescore(capsys, files[0], files[1], tmp_path)
    assert (summary["agree"], summary["without_entry"]) == (EPISODES, 1)


def test_of_two_attempts_under_one_number_the_later_counts(
    files: Files, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The first attempt was cut off; it was recorded before the second."""
    [first] = files[1].glob("000001*/*.mcap")
    with Ledger.read(files[0]) as ledger:
        opened, *_ = [event for event in ledger.events() if event.kind == "batch_opened"]
    run = opened.runs[0]
    layout, set_id = opened.layouts[run.layout_index], opened.sets[run.set_index].id
    seen, _ = drive(layout, 5.0, opened.sets[run.set_index].parameters)
    earlier: list[Line] = [
        (channel, when - 10**9, data)
        for channel, when, data in lines_of(asked("000001.ab.0", layout, 5.0, set_id), seen[:20], None)
    ]
    write(tmp_path, "000001.ab.0", earlier)
    summary, _ = rescore(capsys, files[0], first.parent, tmp_path)
    assert (summary["agree"], summary["repeats"], summary["differ"], summary["open"]) == (1, 1, 0, 0)


def test_a_bad_bag_is_named_and_spoils_no_other(
    files: Files, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    bad = tmp_path / "bad.mcap"
    bad.write_bytes(b"no bag at all")
    summary, out = rescore(capsys, files[0], files[1], bad)
    assert (summary["agree"], summary["unreadable"]) == (EPISODES, 1)
    assert str(bad) in out
    assert cli.main(["rescore", str(files[0]), str(bad)]) == 2
    assert str(bad) in capsys.readouterr().err


def test_recordings_become_evidence_that_the_next_session_begins_with(
    files: Files, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    target = tmp_path / "next.ledger"
    summary, _ = rescore(capsys, *files, "--append-to", target)
    assert summary["evidence"] == EPISODES
    again, _ = rescore(capsys, *files, "--append-to", target)
    assert again["evidence"] == 0, "the same evidence is not counted twice"
    with Ledger.read(files[0]) as ledger:
        scored = [event for event in ledger.events() if event.kind == "episode_scored"]
    with Ledger.open(target) as ledger:
        imported = [event for event in ledger.events() if isinstance(event, EvidenceImported)]
        session = begun(ledger)
    episodes = [episode for event in imported for episode in event.episodes]
    assert sorted(item.cost for item in episodes) == sorted(item.cost for item in scored)
    assert all(event.source == "session.ledger" for event in imported)
    times = [item.outcome.time for item in scored]
    assert session.plan.mean_episode_s == pytest.approx(sum(times) / len(times))
    control = [event for event in imported if event.set_id == "initial"]
    shown = session.summary()["champion_cost"]
    expected = [episode.cost for event in control for episode in event.episodes]
    assert shown == (pytest.approx(sum(expected) / len(expected)) if expected else None)
    code = cli.main(["rescore", *map(str, files), "--append-to", str(target)])
    assert code == 2, "a session under way is no place for evidence"
    assert "holds a session already" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--time-limit", "0"], "--time-limit"),
        (["--arrival-position", "-1"], "--arrival-position"),
        (["--arrival-heading", "nan"], "--arrival-heading"),
    ],
)
def test_rules_out_of_bounds_are_refused(
    files: Files, words: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["rescore", *map(str, files), *words]) == 2
    error = capsys.readouterr().err
    assert said in error
    assert error.count("\n") == 1
