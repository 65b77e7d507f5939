"""``fieldnav report LEDGER --out HTML [--bags FOLDER] [--compare LEDGER ...]``: the verb, and what makes a page."""

from __future__ import annotations

import argparse
import os
import tempfile
from collections.abc import Sequence
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

from fieldnav_ros.errors import InputError, WorkError

if TYPE_CHECKING:
    from fieldnav_ros.bags.scoring import Decode
    from fieldnav_ros.report.measured import Measured
    from fieldnav_ros.report.record import Record
    from fieldnav_ros.report.scenes import Tracks

SQLITE = b"SQLite format 3"


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add the verb's arguments to its parser."""
    parser.add_argument("ledger", type=Path, metavar="LEDGER", help="the session's record")
    parser.add_argument("--out", type=Path, required=True, metavar="HTML", help="where to write the page")
    parser.add_argument(
        "--compare", type=Path, nargs="+", default=[], metavar="LEDGER", help="other sessions to set beside it"
    )
    parser.add_argument("--bags", type=Path, metavar="FOLDER", help="bags of the session, whose tracks are drawn")


def run(arguments: argparse.Namespace, decode: Decode) -> dict[str, Any]:
    """Write the page and return what a machine wants to know of it; ``decode`` reads the requests in bags."""
    measured = _measured(arguments, decode)
    tracks = measured.tracks if measured else None
    record = write_report(arguments.ledger, arguments.out, arguments.compare, tracks)
    found, last = record.facts, record.facts.rounds[-1] if record.facts.rounds else None
    return {
        "ok": True,
        "page": str(arguments.out),
        "bytes": arguments.out.stat().st_size,
        "champion": found.after.id if found.after else None,
        "verdict": last.verdict.verdict if last and last.verdict else None,
        "episodes": len(found.episodes),
        "voids": len(found.voids),
        "ledger_hash": record.origin.head,
        **({"tracks": len(measured.tracks), "unreadable_bags": measured.unreadable} if measured else {}),
    }


def _measured(arguments: argparse.Namespace, decode: Decode) -> Measured | None:
    if arguments.bags is None:
        return None
    _check_extra()
    check_place(arguments.out)
    from fieldnav_ros.report.measured import measured_tracks

    return measured_tracks(arguments.ledger, arguments.bags, decode)


def write_report(
    ledger_path: Path | str, out_path: Path | str, compare: Sequence[Path | str] = (), tracks: Tracks | None = None
) -> Record:
    """Write the page about a ledger, with others beside it, and return what it is about.

    ``tracks`` are measured ones by episode id, such as bags hold. InputError where a ledger is none or the page
    would go over one; WorkError where the page cannot be written or the extra ``report`` is not installed.
    """
    ledger, out = Path(ledger_path), Path(out_path)
    _check_extra()
    check_place(out)
    from fieldnav_ros.report.page import render  # takes a second to import, which other verbs need not wait for
    from fieldnav_ros.report.record import read_record

    record, *others = [read_record(path) for path in (ledger, *map(Path, compare))]
    _write(out, render(record, others, tracks))
    return record


def _check_extra() -> None:
    for module in ("matplotlib", "jinja2"):
        if find_spec(module) is None:
            raise WorkError(f"{module} is not installed; install fieldnav_ros with its extra 'report'")


def check_place(out: Path) -> None:
    """InputError where a file cannot go there, or would go over a ledger."""
    if out.is_dir():
        raise InputError.of("--out", str(out), "a file, not a folder")
    if not out.parent.is_dir():
        raise InputError(f"{out}: the folder {out.parent} does not exist")
    try:
        if out.exists() and out.open("rb").read(len(SQLITE)) == SQLITE:
            raise InputError(f"{out}: is a ledger or another database and is not written over")
    except OSError as error:
        raise WorkError(f"{out}: cannot be read: {error.strerror}") from error


def _write(out: Path, text: str) -> None:
    """Write all or nothing: a page cut off halfway could be taken for a whole one."""
    try:
        with tempfile.NamedTemporaryFile(
            "w", encoding="utf-8", dir=out.parent, prefix=".report-", delete=False
        ) as file:
            file.write(text)
        os.chmod(file.name, 0o644)
        os.replace(file.name, out)
    except OSError as error:
        Path(file.name).unlink(missing_ok=True)
        raise WorkError(f"{out}: cannot be written: {error.strerror}") from error
