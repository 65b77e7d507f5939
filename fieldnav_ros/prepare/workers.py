"""Who runs the work: this process, processes of its own, or a Dask cluster. The outcomes are the same."""

from __future__ import annotations

import multiprocessing
import signal
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from importlib.util import find_spec
from types import TracebackType
from typing import Any, Protocol

from fieldnav_ros import __version__
from fieldnav_ros.errors import WorkError
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.work import Work

TRIES = 3
CONNECT_S = 30.0


class Workers(Protocol):
    """Run a work and return the results of its parts in order; a context, as there may be something to clear up."""

    def __call__(self, work: Work) -> Sequence[BatchResult]:
        """Run the work. WorkError where the workers are lost for good."""

    def __enter__(self) -> Workers:
        """Start."""

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Stop, also in the middle of a work."""


class InPlace:
    """This process alone."""

    def __call__(self, work: Work) -> Sequence[BatchResult]:
        """Run the work here."""
        return [work.run()]

    def __enter__(self) -> InPlace:
        return self

    def __exit__(self, *_: object) -> None:
        pass


def run_here(work: Work) -> BatchResult:
    """Run a part of a work in the process that it has been sent to."""
    return work.run()


class LocalProcesses:
    """Processes on this machine, started anew rather than forked, so that they share nothing by accident."""

    def __init__(self, number: int) -> None:
        """``number`` processes; they are started with the first work."""
        self._number = number
        self._pool: ProcessPoolExecutor | None = None

    def __call__(self, work: Work) -> Sequence[BatchResult]:
        """Run the parts; where a process was killed, all of them again in new ones, as nothing of them was stored."""
        for _ in range(TRIES):
            try:
                return list(self._started().map(run_here, work.parts(self._number)))
            except BrokenProcessPool:
                self._stop()
        raise WorkError(f"worker processes were lost {TRIES} times in a row; is there enough memory for them?")

    def _started(self) -> ProcessPoolExecutor:
        if self._pool is None:
            self._pool = ProcessPoolExecutor(
                self._number, mp_context=multiprocessing.get_context("spawn"), initializer=_leave_interrupts
            )
        return self._pool

    def _stop(self) -> None:
        if self._pool is not None:
            self._pool.shutdown(wait=True, cancel_futures=True)
            self._pool = None

    def __enter__(self) -> LocalProcesses:
        return self

    def __exit__(self, *_: object) -> None:
        self._stop()


def _leave_interrupts() -> None:
    """Ctrl-C reaches every process of a terminal; what happens then is up to the one that leads."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def run_elsewhere(work: Work, version: str) -> BatchResult:
    """Run a work on a machine that has an installation of its own; WorkError where that is another version."""
    if version != __version__:
        raise WorkError(f"a worker of the cluster has fieldnav_ros {__version__}, must have {version} as here")
    return work.run()


class DaskCluster:
    """Workers of a Dask cluster. Its scheduler gives the work of a lost worker to another one."""

    def __init__(self, address: str) -> None:
        """``address`` is the scheduler's, as ``tcp://host:8786``. WorkError where it cannot be reached."""
        if find_spec("distributed") is None:
            raise WorkError("distributed is not installed; install fieldnav_ros with its extra 'cluster'")
        import distributed  # an extra, and a second to import, which other runs need not wait for

        try:
            self._client: Any = distributed.Client(  # type: ignore[no-untyped-call]  # it has no annotations
                address, timeout=CONNECT_S, set_as_default=False
            )
        except (OSError, ValueError, TimeoutError) as error:
            raise WorkError(f"scheduler {address}: cannot be reached: {error}") from error

    def __call__(self, work: Work) -> Sequence[BatchResult]:
        """Run the parts on the cluster. WorkError where a part brings down worker after worker."""
        import distributed

        parts = work.parts(sum(self._client.ncores().values()) or 1)
        futures = [self._client.submit(run_elsewhere, part, __version__, pure=False) for part in parts]
        try:
            return list(self._client.gather(futures))
        except (distributed.KilledWorker, distributed.CancelledError, OSError, TimeoutError) as error:
            raise WorkError(f"the cluster could not run the work: {error}") from error

    def __enter__(self) -> DaskCluster:
        return self

    def __exit__(self, *_: object) -> None:
        self._client.close()
