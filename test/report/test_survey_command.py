"""``fieldnav survey``: exit codes, the summary, the picture, and what is refused."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
from matplotlib.image import imread

from fieldnav_ros import cli
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import write_parameters
from fieldnav_ros.resources import config_path
from fieldnav_ros.survey import starts

YARD = str(config_path("yards/parcel_yard.yaml"))
LIMIT = re.compile(r"time_limit: [0-9.]+")
STALL = ["--model", "published", "--goal", "1.6", "0.8", "0", "--obstacle", "1.78", "0.8"]


@pytest.fixture(autouse=True)
def coarse(monkeypatch: pytest.MonkeyPatch) -> None:
    """Few starts: what they show has its own tests."""
    monkeypatch.setattr(starts, "ALONG", 5)
    monkeypatch.setattr(starts, "HEADINGS", 2)


def run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, list[str], str]:
    code = cli.main(["survey", *words])
    shown = capsys.readouterr()
    return code, shown.out.splitlines(), shown.err


def test_the_summary_is_the_last_line_and_counts_what_was_found(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    picture = tmp_path / "field.png"
    code, out, err = run(capsys, "--yard", YARD, "--model", "published", "--out", str(picture), "--json")
    summary = json.loads(out[-1])
    assert (code, err, summary["ok"]) == (0, "", True)
    assert {"cancelling_points", "loops", "flips", "starts", "failed_starts", "share_failed", "picture"} <= set(summary)
    assert summary["cancelling_points"] == 1
    assert summary["starts"] == 40
    assert summary["share_failed"] == summary["failed_starts"] / summary["starts"] == 0
    assert out[-2] == f"picture: {picture}"
    assert any(line.startswith("cancelling points: 1: 2.068 0.800") for line in out)
    height, width, _ = imread(picture).shape
    assert width > 1500
    assert height > 1000


def test_more_failed_starts_than_the_share_make_exit_code_1(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    yard = tmp_path / "yard.yaml"
    yard.write_text(LIMIT.sub("time_limit: 4.0", Path(YARD).read_text(encoding="utf-8")), encoding="utf-8")
    words = ["--yard", str(yard), *STALL, "--out", str(tmp_path / "field.png"), "--json"]
    code, out, _ = run(capsys, *words)
    summary = json.loads(out[-1])
    assert code == 1
    assert summary["ok"] is False
    assert summary["failed_as"] == {"timeout": summary["failed_starts"]}
    assert (tmp_path / "field.png").is_file()
    share = summary["share_failed"]
    assert 0.5 < share <= 1.0
    assert run(capsys, *words, "--share", repr(share))[0] == 0
    assert run(capsys, *words, "--share", repr(share - 1e-6))[0] == 1


def test_a_file_of_a_set_in_service_says_which_field_too(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Its ``field.model`` counts unless ``--model`` is given; its numbers move the cancelling point."""
    file, picture = tmp_path / "champion.yaml", str(tmp_path / "field.png")
    write_parameters(file, DEFAULTS.model_copy(update={"turn_radius": 0.08}), "", "published")
    _, out, _ = run(capsys, "--yard", YARD, "--params", str(file), "--out", picture)
    assert "field published" in out[0]
    assert out[1].startswith("cancelling points: 1: ")
    assert "2.068" not in out[1]
    assert "field foresight" in run(
        capsys, "--yard", YARD, "--params", str(file), "--out", picture, "--model", "foresight"
    )[1][0]  # fmt: skip


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--yard", "missing.yaml", "--out", "a.png"], "missing.yaml: No such file"),
        (["--yard", YARD, "--out", "no/folder/a.png"], "the folder no/folder does not exist"),
        (["--yard", YARD, "--out", "."], "--out is '.', must be a file, not a folder"),
        (["--yard", YARD, "--out", "a.png", "--share", "2"], "--share is '2', must be a number from 0 to 1"),
        (["--yard", YARD, "--out", "a.png", "--goal", "1", "1", "nan"], "--goal is 'nan', must be a number"),
        (["--yard", YARD, "--out", "a.png", "--goal", "1", "1"], "--goal"),
        (["--yard", YARD, "--out", "a.png", "--goal", "5", "1", "0"], "x of the goal is 5.0, must be from 0.06"),
        (["--yard", YARD, "--out", "a.png", "--obstacle", "5", "1"], "x of the obstacle is 5.0, must be from 0 to"),
        (["--yard", YARD, "--out", "a.png", "--model", "own"], "--model"),
        (["--yard", YARD, "--out", "a.png", "--params", "bad.yaml"], "bad.yaml: field.turn_radius is 9"),
        (["--yard", YARD, "--out", "a.png", "--params", "model.yaml"], "field.model is 'own', must be one of"),
        (["--out", "a.png"], "--yard"),
    ],
)
def test_bad_input_gives_one_sentence_and_code_2(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], words: list[str], said: str
) -> None:
    monkeypatch.chdir(tmp_path)
    Path("bad.yaml").write_text("/**: {ros__parameters: {field: {turn_radius: 9}}}\n", encoding="utf-8")
    Path("model.yaml").write_text("/**: {ros__parameters: {field: {model: own}}}\n", encoding="utf-8")
    code, out, err = run(capsys, *words)
    assert code == 2
    assert out == []
    assert said in err
    assert err.count("\n") == 1
    assert not Path("a.png").exists()


def test_a_ledger_is_not_written_over(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    ledger = tmp_path / "session.ledger"
    ledger.write_bytes(b"SQLite format 3\0 and more")
    assert run(capsys, "--yard", YARD, "--out", str(ledger))[0] == 2
    assert ledger.read_bytes().startswith(b"SQLite")
