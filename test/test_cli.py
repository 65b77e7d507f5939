"""The command line: exit codes, one sentence for bad input, never a traceback."""

from __future__ import annotations

import json
from argparse import Namespace
from pathlib import Path
from typing import Any

import pytest

from fieldnav_ros import cli
from fieldnav_ros.errors import InputError, WorkError


def run(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
    code = cli.main(list(words))
    shown = capsys.readouterr()
    return code, shown.out, shown.err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ([], "VERB"),
        (["fly"], "fly"),
        (["demo", "--wings", "2"], "--wings"),
        (["demo", "--floor-time", "0"], "--floor-time is '0', must be a number from 1 to 600"),
        (["demo", "--floor-time", "nan"], "--floor-time is 'nan', must be a number from 1 to 600"),
        (["demo", "--floor-time", "long"], "--floor-time is 'long', must be a number"),
        (["demo", "--seed", "1.5"], "--seed is '1.5', must be a whole number"),
        (["demo", "--seed", "-1"], "--seed is '-1', must be a whole number"),
    ],
)
def test_bad_arguments_give_one_sentence_and_code_2(
    capsys: pytest.CaptureFixture[str], words: list[str], said: str
) -> None:
    code, out, err = run(capsys, *words)
    assert code == 2
    assert out == ""
    assert said in err
    assert err.count("\n") == 1


def test_unusable_folder_is_told_before_any_node_is_started(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    pytest.importorskip("rclpy", reason="the demo starts nodes")
    taken = tmp_path / "file"
    taken.write_text("not a folder")
    code, _, err = run(capsys, "demo", "--out", str(taken))
    assert code == 2
    assert str(taken) in err


def answered(monkeypatch: pytest.MonkeyPatch, answer: Any) -> None:
    def verb(_arguments: Namespace) -> dict[str, Any]:
        if isinstance(answer, BaseException):
            raise answer
        result: dict[str, Any] = answer
        return result

    monkeypatch.setattr(cli, "_demo", verb)


@pytest.mark.parametrize(
    ("answer", "code", "said"),
    [
        ({"episodes": 3}, 0, ""),
        ({"ok": False}, 1, ""),
        (WorkError("the judge is gone"), 1, "the judge is gone"),
        (InputError.of("floor.x", 3, "less than 2"), 2, "floor.x is 3, must be less than 2"),
        (KeyboardInterrupt(), 1, "stopped"),
    ],
)
def test_exit_code_tells_done_failed_or_bad_input(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], answer: Any, code: int, said: str
) -> None:
    answered(monkeypatch, answer)
    got, _, err = run(capsys, "demo")
    assert got == code
    assert err == (f"fieldnav: {said}\n" if said else "")


def test_summary_is_the_last_line_and_only_on_request(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    answered(monkeypatch, {"episodes": 3})
    assert run(capsys, "demo")[1] == ""
    assert json.loads(run(capsys, "demo", "--json")[1].splitlines()[-1]) == {"episodes": 3}


def test_every_verb_has_help_and_the_word_on_safety_stands_in_the_general_one(
    capsys: pytest.CaptureFixture[str],
) -> None:
    for words in (["--help"], ["demo", "--help"]):
        with pytest.raises(SystemExit) as stopped:
            cli.main(words)
        assert stopped.value.code == 0
    assert "hardware stop" in capsys.readouterr().out.replace("\n", " ")
