"""Remakes the README's pictures with the project's own commands, and tells whether they are stale.

    python test/pictures.py [--ledger LEDGER]

Runs the demo (or takes the ledger of one), and writes into resource/pictures: the field under the first set and
under the champion, the top of the report, and the terminal beside the floor in the middle of the verdict. Beside
them goes sources.json: the SHA-256 of every file that says how they look. A test compares these.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import sys
import tempfile
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT))
PICTURES = ROOT / "resource" / "pictures"
MADE = ("field_before.svg", "field_after.svg", "report.png", "terminal.svg")
MADE_BY = (
    "test/pictures.py", "fieldnav_ros/report/**/*", "fieldnav_ros/nodes/pit/*.py", "fieldnav_ros/nodes/telling.py",
    "fieldnav_ros/field/*.py", "fieldnav_ros/guide.py", "fieldnav_ros/drive.py", "fieldnav_ros/parameters.py",
    "config/yards/parcel_yard.yaml",
)  # fmt: skip
COLUMNS, LINES = 80, 24
CELL_WIDTH, CELL_HEIGHT, FONT_SIZE = 9.0, 20.0, 15.0


def sources() -> dict[str, str]:
    """Return the SHA-256 of each file that says how the pictures look."""
    files = sorted({file for pattern in MADE_BY for file in ROOT.glob(pattern) if file.is_file()})
    return {
        str(file.relative_to(ROOT)): hashlib.sha256(file.read_bytes()).hexdigest()
        for file in files
        if "__pycache__" not in file.parts
    }


def recorded() -> dict[str, str]:
    """Return what ``sources`` returned when the pictures were made."""
    found: dict[str, str] = json.loads((PICTURES / "sources.json").read_text(encoding="utf-8"))
    return found


def terminal(ledger: Path, out: Path) -> None:
    """Write the terminal beside the floor as it stands in the middle of the verdict of a recorded session."""
    from fieldnav_ros.nodes.payloads import PastEpisode
    from fieldnav_ros.nodes.pit.screen import picture
    from fieldnav_ros.nodes.pit.view import Heard, view_of
    from fieldnav_ros.nodes.telling import Scene, status_of
    from fieldnav_ros.tuning.events import EpisodeScored
    from fieldnav_ros.tuning.ledger import Ledger
    from fieldnav_ros.tuning.session import Session

    session, past = Session(), list[PastEpisode]()
    with Ledger.read(ledger) as reader:
        events = list(reader.events())
    verdict = [place for place, event in enumerate(events) if event.kind == "pair_compared"]
    for place, event in enumerate(events):
        if place > verdict[len(verdict) // 2] and session.pending():
            break
        session.apply(event)
        if isinstance(event, EpisodeScored):
            number, outcome = event.episode_id, event.outcome
            past.append(PastEpisode(episode=number, kind=outcome.kind, time=outcome.time, source=event.source))
    running = session.pending()[0]
    scene = Scene(phase=session.phase, wanted=True, running=True, champion=session.champion.set_id)
    status = status_of(
        scene, dict(session.summary()), 0.0, tuple(reversed(past[-5:])), in_service=None,
        episode=f"{running.id:06d}.picture.1", pose_age=0.02, floor_time=session.config.floor_time_s,
    )  # fmt: skip
    text = picture(view_of(Heard(status)), COLUMNS, LINES, "█")
    out.write_text(_svg(text.plain.splitlines()), encoding="utf-8")


def _svg(lines: list[str]) -> str:
    """Return lines of a terminal as a plain picture: black on white, as in sunlight."""
    width, height = COLUMNS * CELL_WIDTH + 24, (len(lines) + 1) * CELL_HEIGHT
    shown = [
        f'<text x="12" y="{(row + 1) * CELL_HEIGHT:g}" textLength="{len(line) * CELL_WIDTH:g}" '
        f'xml:space="preserve">{_escaped(line)}</text>'
        for row, line in enumerate(line.rstrip() for line in lines)
        if line
    ]
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:g} {height:g}" width="{width:g}" '
        f'font-family="DejaVu Sans Mono, monospace" font-size="{FONT_SIZE:g}">\n'
        f'<rect width="100%" height="100%" fill="white" stroke="black"/>\n' + "\n".join(shown) + "\n</svg>\n"
    )


def _escaped(line: str) -> str:
    return line.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def main() -> None:
    """Make the pictures anew."""
    from fieldnav_ros.nodes.demo import run_demo
    from fieldnav_ros.report.command import write_report
    from fieldnav_ros.report.pictures import write_fields, write_top

    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n\n")[0])
    parser.add_argument("--ledger", type=Path, help="of a demo that has been run (default: run one now)")
    given = parser.parse_args()
    PICTURES.mkdir(exist_ok=True)
    with tempfile.TemporaryDirectory() as folder:
        ledger = given.ledger or Path(run_demo(Path(folder) / "demo", 45.0, 1)["ledger"])
        page = Path(folder) / "report.html"
        record = write_report(ledger, page)
        write_fields(record, PICTURES / MADE[0], PICTURES / MADE[1])
        write_top(page, PICTURES / MADE[2], 1100, 900)
        terminal(ledger, PICTURES / MADE[3])
    (PICTURES / "sources.json").write_text(json.dumps(sources(), indent=1) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
