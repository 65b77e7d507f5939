"""A preparation from files to files: a ledger that is begun or gone on with, workers, prior and champion."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from fieldnav_ros import __version__
from fieldnav_ros.arguments import make_folder
from fieldnav_ros.errors import InputError
from fieldnav_ros.params_file import write_parameters, write_text
from fieldnav_ros.prepare.interrupts import Stop, Stopped
from fieldnav_ros.prepare.progress import Progress
from fieldnav_ros.prepare.workers import DaskCluster, InPlace, LocalProcesses, Workers
from fieldnav_ros.tuning.events import About, Event, SessionBegun, SessionConfig
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.pretune import MODEL, pretune, pretune_config, session_on
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.tuning.space import dump_prior
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Yard, load_yard


def prepare(
    yard_path: Path, out: Path, episodes: int, seed: int, workers: int, scheduler: str | None
) -> dict[str, Any]:
    """Prepare on a yard, or go on where a run in the folder ``out`` was cut off, and return the summary.

    Prior and champion are written at the end, also when a signal stops it, and now and then before.
    """
    yard, files = load_yard(yard_path), Files(out)
    files.make()
    began = time.monotonic()
    with Ledger.open(files.ledger) as ledger:
        session = _session(ledger, yard, episodes, seed, files.ledger)
        stopped = False
        if not session.ended:
            with _workers(workers, scheduler) as hands:
                stopped = _drive(session, yard, ledger, files, hands)
        files.write(session, yard)
    return _result(session, files, stopped, time.monotonic() - began)


@dataclass(frozen=True)
class Files:
    """Where the verb leaves what it makes."""

    folder: Path

    @property
    def ledger(self) -> Path:
        """Every episode and decision; what a run that was cut off goes on from."""
        return self.folder / "session.ledger"

    @property
    def prior(self) -> Path:
        """Mean and covariance over the parameters."""
        return self.folder / "prior.yaml"

    @property
    def champion(self) -> Path:
        """The set that is best by proof, as a ROS parameter file."""
        return self.folder / "champion.yaml"

    def make(self) -> None:
        """Make the folder; InputError where that is not possible."""
        make_folder(self.folder)

    def write(self, session: Session, yard: Yard) -> None:
        """Write prior and champion as the session stands."""
        source = f"{session.state.times.episodes} simulated episodes on {yard.name}, seed {session.config.seed}"
        write_text(self.prior, dump_prior(session.prior(source)))
        about = f"{session.champion.set_id}, after {source}"
        write_parameters(self.champion, session.champion.parameters, about, MODEL)


def _session(ledger: Ledger, yard: Yard, episodes: int, seed: int, path: Path) -> Session:
    """Return the ledger's session, begun where it is new. InputError where it is about something else."""
    session, config = session_on(yard), pretune_config(yard, episodes, seed)
    events = list(ledger.events())
    session.apply(*events)
    if not session.begun:
        here = About(software=f"fieldnav_ros {__version__}", model=MODEL, yard=yard, place="simulation")
        events = session.begin(config, about=here)
        ledger.append(events)
        session.apply(*events)
        return session
    begun = events[0]
    about = begun.about if isinstance(begun, SessionBegun) else None
    if about is None or about.yard != yard or about.model != MODEL:
        raise InputError(f"{path}: is about another yard or field; name another folder with --out")
    for name in SessionConfig.model_fields:
        old, new = getattr(session.config, name), getattr(config, name)
        if old != new:
            raise InputError(f"{path}: was begun with {name} {old}, not {new}; name another folder with --out")
    return session


def _workers(number: int, scheduler: str | None) -> Workers:
    if scheduler:
        return DaskCluster(scheduler)
    return LocalProcesses(number) if number > 1 else InPlace()


def _drive(session: Session, yard: Yard, ledger: Ledger, files: Files, workers: Workers) -> bool:
    """Run the session to its end or until a signal comes; tell whether it was stopped."""
    show = Progress(session)

    def store(events: list[Event]) -> None:
        ledger.append(events)

    def work(item: Work) -> Sequence[BatchResult]:
        # all before this is in the ledger and applied: the one place where a signal may break in
        if show():
            files.write(session, yard)
        with stop.open():
            return workers(item)

    with Stop() as stop:
        try:
            pretune(session, yard, store, work)
        except Stopped:
            return True
        finally:
            show.finish()
    return False


def _result(session: Session, files: Files, stopped: bool, seconds: float) -> dict[str, Any]:
    state = session.state
    verdict = state.verdict.verdict if state.verdict else None
    gain = state.verdict.mean_difference if state.verdict else None
    better = f", {gain:.2f} s better than before" if gain and verdict == "accept" else ""
    end = f"verdict: {verdict}; champion {session.champion.set_id}{better}"
    print("stopped; the same command goes on from here" if stopped else end)
    print(f"{files.prior}   the prior, for a session on site\n{files.champion}   the champion, for --params-file")
    print(f"{files.ledger}   every episode and decision")
    return {
        "ok": not stopped, "stopped": stopped, "episodes": state.times.episodes, "generations": len(state.generations),
        "grade": state.stage.grade, "champion_set": session.champion.set_id, "verdict": verdict,
        "mean_gain": gain, "seconds": round(seconds, 1), "seed": session.config.seed, "prior": str(files.prior),
        "champion": str(files.champion), "ledger": str(files.ledger),
    }  # fmt: skip
