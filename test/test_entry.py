"""Executables end quietly when they are interrupted while they still import; afterwards they are what they call."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from fieldnav_ros import entry

SLOW = """
import sys, types, time
class Slow:
    def find_spec(self, name, path=None, target=None):
        if name == "fieldnav_ros.cli":
            print("importing", flush=True)
            time.sleep(60)
sys.meta_path.insert(0, Slow())
from fieldnav_ros.entry import fieldnav
sys.exit(fieldnav())
"""


def test_an_interrupt_during_import_is_no_traceback(root: Path) -> None:
    with subprocess.Popen(
        [sys.executable, "-c", SLOW], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
        env={**os.environ, "PYTHONPATH": str(root)},
    ) as program:  # fmt: skip
        assert program.stdout is not None
        assert program.stdout.readline() == "importing\n"
        program.send_signal(signal.SIGINT)
        _, said = program.communicate(timeout=30)
    assert (program.returncode, said) == (entry.INTERRUPTED, "")


def test_what_is_called_gets_the_old_handler_back(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "argv", ["fieldnav", "--version"])
    before = signal.getsignal(signal.SIGINT)
    with pytest.raises(SystemExit) as end:
        entry.fieldnav()
    assert end.value.code == 0
    assert signal.getsignal(signal.SIGINT) is before
