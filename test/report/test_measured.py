"""Tracks on the page that come from bags: which they are, and that the page says so."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from bags.recordings import asked, drive, lines_of, write
from report.ledgers import begun, keep, small, stored
from report.reading import read

from fieldnav_ros import cli
from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.nodes.payloads import decode_request
from fieldnav_ros.report.measured import measured_tracks
from fieldnav_ros.tuning.cost import cost

Driven = dict[int, tuple[list[float], OutcomeKind]]


@pytest.fixture(scope="module")
def session(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, Driven]:
    """A ledger of four episodes, driven with so short a limit that some fail; bags of three of them."""
    folder = tmp_path_factory.mktemp("measured")
    (folder / "bags").mkdir()
    config = small(seed=5, population=4, layouts=1, time_limit=3.0)
    found, log = begun(config)
    driven: Driven = {}
    for number in range(4):
        episode = found.pending()[0]
        seen, outcome = drive(episode.layout, episode.time_limit, episode.parameters)
        assert cost(outcome, 3.0) is not None
        name = f"{episode.id:06d}.ab.{number}"
        if number != 1:
            request = asked(name, episode.layout, episode.time_limit, episode.set_id)
            write(folder / "bags", name, lines_of(request, seen, outcome))
        driven[episode.id] = ([reading.x for _, reading in seen], outcome.kind)
        keep(found, log, found.record(episode.id, outcome, outcome.time + 2.0))
    return stored(folder / "session.ledger", log), folder / "bags", driven


def test_tracks_are_those_that_were_driven(session: tuple[Path, Path, Driven]) -> None:
    ledger, bags, driven = session
    found = measured_tracks(ledger, bags, decode_request)
    assert not found.unreadable
    assert len(found.tracks) == 3
    for number, track in found.tracks.items():
        x, kind = driven[number]
        np.testing.assert_allclose(track.x, x)
        assert track.kind is kind


def test_the_page_says_what_was_measured(
    session: tuple[Path, Path, Driven], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    ledger, bags, driven = session
    (tmp_path / "bags").symlink_to(bags)
    page = tmp_path / "page.html"
    words = ["report", str(ledger), "--out", str(page), "--bags", str(tmp_path / "bags"), "--json"]
    assert cli.main(words) == 0
    summary = json.loads(capsys.readouterr().out.splitlines()[-1])
    assert (summary["tracks"], summary["unreadable_bags"]) == (3, [])
    text = page.read_text(encoding="utf-8")
    assert ", measured." in text
    failed = [kind for _, kind in driven.values() if kind is not OutcomeKind.ARRIVED]
    shown = {item.fact: item.full for item in read(text).numbers}
    assert shown.get("failures", 0) == len(failed)


def test_a_bag_that_cannot_be_read_is_said_and_the_page_is_written(
    session: tuple[Path, Path, Driven], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "000001.bad.1").mkdir()
    (tmp_path / "000001.bad.1" / "0.mcap").write_bytes(b"nothing")
    page = tmp_path / "page.html"
    assert cli.main(["report", str(session[0]), "--out", str(page), "--bags", str(tmp_path)]) == 0
    assert "0.mcap" in capsys.readouterr().err
    assert page.is_file()


def test_a_folder_without_bags_is_refused(
    session: tuple[Path, Path, Driven], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["report", str(session[0]), "--out", str(tmp_path / "p.html"), "--bags", str(tmp_path)]) == 2
    assert "holds no bag" in capsys.readouterr().err
    assert not (tmp_path / "p.html").exists()
