"""``fieldnav pretune``: tune in simulation at home and write the prior that a session on site starts from."""

from __future__ import annotations

import argparse
import os
from pathlib import Path
from typing import Any

from fieldnav_ros.arguments import number
from fieldnav_ros.tuning.config import LEAST_EPISODES

EPISODES = 40_000


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add the verb's arguments to its parser."""
    parser.add_argument("--yard", type=Path, required=True, metavar="YAML", help="the floor, its robot and its grades")
    parser.add_argument(
        "--episodes", type=number("--episodes", LEAST_EPISODES, 10**8, int), default=EPISODES, metavar="N",
        help="simulated episodes to spend (default: %(default)s)",
    )  # fmt: skip
    parser.add_argument(
        "--workers", type=number("--workers", 1, 1024, int), default=len(os.sched_getaffinity(0)), metavar="N",
        help="processes on this machine (default: one for each core, %(default)s); the result does not depend on it",
    )  # fmt: skip
    parser.add_argument("--scheduler", metavar="ADDR", help="a Dask scheduler, as tcp://host:8786, to use its workers")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="DIR",
        help="folder for prior.yaml, champion.yaml and session.ledger; a run cut off in it is gone on with",
    )  # fmt: skip
    parser.add_argument(
        "--seed", type=number("--seed", 0, 2**31, int), default=1, help="seed of the search (default: %(default)s)"
    )


def run(arguments: argparse.Namespace) -> dict[str, Any]:
    """Prepare, or go on preparing, and return the summary. What was learnt so far is written also when stopped."""
    from fieldnav_ros.prepare.preparation import prepare  # its search engine takes a second to import

    return prepare(
        arguments.yard, arguments.out, arguments.episodes, arguments.seed, arguments.workers, arguments.scheduler
    )
