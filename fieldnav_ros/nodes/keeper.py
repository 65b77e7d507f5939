"""The tuner's session with what must survive its process: the ledger, and the champion's file."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from fieldnav_ros import __version__
from fieldnav_ros.errors import InputError
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import Layout
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import read_parameters, write_parameters
from fieldnav_ros.tuning.events import About, Event, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.prior_file import load_prior
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.world.layouts import draw
from fieldnav_ros.yard import Yard

CARRYING = 10.0
"""Seconds that somebody takes to carry the robot to its start, as a first guess."""
DRIVING = 0.5
"""Share of its top speed at which a robot gets across the floor, likewise."""


class Keeper:
    """Opens a session on its ledger; ``commit`` is the only way to change it."""

    def __init__(self, settings: dict[str, Any], yard: Yard, model: str = DEFAULT_MODEL) -> None:
        """Bad input is refused before there is a ledger, so that none is left behind empty."""
        self._settings, self._yard, self._model = settings, yard, model
        prior = load_prior(settings["prior"]) if settings["prior"] else None
        initial = read_parameters(settings["initial"]) if settings["initial"] else DEFAULTS
        config = self._config()
        self._draw(config.grade, 0)
        self.session = Session(self._draw)
        self._ledger = Ledger.open(settings["ledger"])
        self.session.apply(*self._ledger.events())
        if not self.session.begun:
            about = About(
                software=f"fieldnav_ros {__version__}", model=DEFAULT_MODEL, yard=yard, place=settings["place"]
            )  # fmt: skip
            self.commit(self.session.begin(config, initial, prior, about))
            return
        if settings["mode"] == "tune":
            self._check(config)
            self.commit(self.session.advance())
        if not self._champion_is_written():
            self._write_champion()

    def commit(self, events: Sequence[Event]) -> None:
        """Store events, then let them take effect; the champion's file follows the champion."""
        if not events:
            return
        self._ledger.append(events)
        self.session.apply(*events)
        if any(event.kind in ("session_begun", "champion_changed") for event in events):
            self._write_champion()

    def guided_by(self, model: str) -> None:
        """Say which field the numbers belong to: the same ones mean something else to another."""
        if model != self._model:
            self._model = model
            self._write_champion()

    def close(self) -> None:
        """Let go of the ledger."""
        self._ledger.close()

    def _config(self) -> SessionConfig:
        settings = self._settings
        return SessionConfig(
            seed=settings["seed"],
            floor_time_s=60.0 * settings["floor_time"],
            grade=settings["grade"],
            time_limit=self._yard.grade(settings["grade"]).time_limit,
            rounds=settings["rounds"],
            verdict_share=settings["verdict_share"],
            layouts=settings["layouts"],
            sigma=settings["first_step"],
            reset_guess_s=self._reset_guess(),
        )

    def _reset_guess(self) -> float:
        """Return how long a reset will take (s), until some have been seen."""
        floor, way = self._yard.floor, self._settings["return"]
        across = math.hypot(floor.x[1] - floor.x[0], floor.y[1] - floor.y[0])
        drive = across / (DRIVING * self._yard.robot.wheel_speed)
        guesses = {"simulator": 0.0, "drive": drive, "operator": CARRYING}
        return max(self._yard.reset_time, guesses[way])

    def _draw(self, grade: str, seed: int) -> Layout:
        layout = draw(self._yard, grade, np.random.default_rng(seed), self._settings["starts"] == "marks")
        # where nobody puts them there, the other carts are wherever they are
        return layout if self._settings["return"] == "simulator" else layout.model_copy(update={"obstacles": ()})

    def _check(self, config: SessionConfig) -> None:
        if self.session.config != config:
            name = next(key for key, value in config if value != getattr(self.session.config, key))
            raise InputError.of(
                f"{self._settings['ledger']}: the session's {name}", getattr(self.session.config, name),
                f"{getattr(config, name)!r} as asked for now; name another ledger or ask for the same session",
            )  # fmt: skip

    def _champion_is_written(self) -> bool:
        """Tell whether the file holds the champion: a process may have died, or a disk been full, in between."""
        try:
            return read_parameters(self._settings["champion_file"]) == self.session.champion.parameters
        except InputError:
            return False

    def _write_champion(self) -> None:
        champion = self.session.champion
        about = f"Champion {champion.set_id} of the session in {Path(self._settings['ledger']).name}."
        write_parameters(Path(self._settings["champion_file"]), champion.parameters, about, self._model)
