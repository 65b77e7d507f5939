"""``fieldnav report``: what it writes, what it says, and what it refuses."""

from __future__ import annotations

import json
import os
import sqlite3
from pathlib import Path

import pytest
from report.by_sql import Truth
from report.conftest import Zoo

from fieldnav_ros import cli
from fieldnav_ros.errors import WorkError
from fieldnav_ros.report import command


def test_the_summary_names_page_champion_and_verdict(
    zoo: Zoo, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    page = tmp_path / "page.html"
    words = ["report", str(zoo["accepted"]), "--out", str(page), "--json", "--compare", str(zoo["empty"])]
    assert cli.main(words) == 0
    first, last = capsys.readouterr().out.splitlines()
    assert first == str(page)
    truth = Truth(zoo["accepted"])
    assert json.loads(last) == {
        "ok": True,
        "page": str(page),
        "bytes": page.stat().st_size,
        "champion": truth.payloads("champion_changed")[-1]["set_id"],
        "verdict": truth.payloads("verdict_reached")[-1]["verdict"],
        "episodes": truth.one("SELECT COUNT(*) FROM counted"),
        "voids": 0,
        "ledger_hash": truth.one("SELECT hash FROM events ORDER BY seq DESC LIMIT 1"),
    }
    assert truth.one("SELECT hash FROM events ORDER BY seq DESC LIMIT 1")[:8] in page.read_text(encoding="utf-8")
    truth.close()


def test_a_ledger_is_never_written_over(zoo: Zoo, capsys: pytest.CaptureFixture[str]) -> None:
    before = zoo["one_episode"].read_bytes()
    assert cli.main(["report", str(zoo["empty"]), "--out", str(zoo["one_episode"])]) == 2
    assert zoo["one_episode"].read_bytes() == before
    assert capsys.readouterr().err.count("\n") == 1


def test_the_ledger_itself_is_left_as_it_is(zoo: Zoo, tmp_path: Path) -> None:
    before = zoo["one_episode"].read_bytes()
    command.write_report(zoo["one_episode"], tmp_path / "page.html")
    assert zoo["one_episode"].read_bytes() == before


@pytest.mark.parametrize(
    ("ledger", "out", "said"),
    [
        ("missing.ledger", "page.html", "there is no such ledger"),
        ("text.ledger", "page.html", "is no ledger"),
        ("forged.ledger", "page.html", "was changed after it was written"),
        ("empty.ledger", ".", "a file, not a folder"),
        ("empty.ledger", "nowhere/page.html", "does not exist"),
    ],
)
def test_bad_input_is_one_sentence_and_code_2(
    zoo: Zoo, tmp_path: Path, capsys: pytest.CaptureFixture[str], ledger: str, out: str, said: str
) -> None:
    (tmp_path / "text.ledger").write_text("no ledger")
    (tmp_path / "empty.ledger").write_bytes(zoo["empty"].read_bytes())
    forged = tmp_path / "forged.ledger"
    forged.write_bytes(zoo["one_episode"].read_bytes())
    with sqlite3.connect(forged) as connection:
        connection.execute("DROP TRIGGER no_update")
        connection.execute("UPDATE events SET payload = replace(payload, '\"cost\":4', '\"cost\":3')")
    assert cli.main(["report", str(tmp_path / ledger), "--out", str(tmp_path / out)]) == 2
    err = capsys.readouterr().err
    assert said in err
    assert err.count("\n") == 1


def test_a_page_that_cannot_be_made_leaves_the_old_one(
    zoo: Zoo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    page = tmp_path / "page.html"
    page.write_text("old")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(WorkError, match="No space left"):
        command.write_report(zoo["empty"], page)
    assert page.read_text() == "old"
    assert os.listdir(tmp_path) == ["page.html"]


def test_without_matplotlib_it_says_what_to_install(zoo: Zoo, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(command, "find_spec", lambda name: None)
    with pytest.raises(WorkError, match="extra 'report'"):
        command.write_report(zoo["empty"], tmp_path / "page.html")
