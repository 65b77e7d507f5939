"""Where robots really went: tracks from bags, by the ids of the ledger's episodes."""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

from fieldnav_ros.bags.command import score_all
from fieldnav_ros.bags.compare import compare, known_episodes
from fieldnav_ros.bags.reading import find_bags
from fieldnav_ros.bags.scoring import SAME_RULES, Decode
from fieldnav_ros.errors import InputError
from fieldnav_ros.report.replay import FloorTrack
from fieldnav_ros.report.scenes import Tracks
from fieldnav_ros.tuning.events import SessionBegun
from fieldnav_ros.tuning.ledger import Ledger


class Measured(NamedTuple):
    """Tracks by episode id, and a sentence for each bag that could not be read."""

    tracks: Tracks
    unreadable: list[str]


def measured_tracks(ledger_path: Path, bags: Path, decode: Decode) -> Measured:
    """Read the tracks of a ledger's episodes from a folder of bags; ``decode`` reads their requests.

    InputError where the folder holds no bag or the ledger does not name its yard.
    """
    with Ledger.read(ledger_path) as ledger:
        events = list(ledger.events())
    about = next((event.about for event in events if isinstance(event, SessionBegun)), None)
    if about is None or about.yard is None:
        raise InputError(f"{ledger_path}: does not say on which yard the session was held, so bags cannot be placed")
    scored, unreadable = score_all(find_bags([bags]), about.yard, decode, SAME_RULES)
    known, _ = known_episodes(events)
    tracks = {
        entry.id: FloorTrack(item.t, item.x, item.y, entry.outcome.kind)
        for item, entry in compare(scored, known).matched
        if entry.outcome is not None and isinstance(entry.id, int) and len(item.t) > 1
    }
    return Measured(tracks, unreadable)
