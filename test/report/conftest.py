"""Ledgers of all kinds, made once for all tests of the report."""

from __future__ import annotations

from pathlib import Path

import pytest
from report.ledgers import ZOO, stored

from fieldnav_ros.report import captioned
from fieldnav_ros.report.page import render
from fieldnav_ros.report.record import read_record


class Zoo:
    """Makes a ledger, and its page without the drawings, when it is first asked for."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._pages: dict[str, str] = {}

    def __getitem__(self, name: str) -> Path:
        path = self._folder / f"{name}.ledger"
        return path if path.exists() else stored(path, ZOO[name]())

    def undrawn_page(self, name: str) -> str:
        """Return the page as ``render`` makes it, but for the drawing, which takes most of the time."""
        if name not in self._pages:
            with pytest.MonkeyPatch.context() as patch:
                patch.setattr(captioned, "as_svg", lambda figure, key: '<svg viewBox="0 0 1 1"></svg>')
                self._pages[name] = render(read_record(self[name]))
        return self._pages[name]

    def drawn_page(self) -> str:
        """Return a whole page with every kind of figure, with another session beside it."""
        if "drawn" not in self._pages:
            self._pages["drawn"] = render(read_record(self["accepted"]), [read_record(self["kept"])])
        return self._pages["drawn"]


@pytest.fixture(scope="session")
def zoo(tmp_path_factory: pytest.TempPathFactory) -> Zoo:
    return Zoo(tmp_path_factory.mktemp("ledgers"))
