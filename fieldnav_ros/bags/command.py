"""``fieldnav rescore LEDGER BAGS...``: outcomes again from bags, beside those of the ledger."""

from __future__ import annotations

import argparse
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from fieldnav_ros.arguments import number
from fieldnav_ros.bags.compare import Comparison, Known, compare, known_episodes
from fieldnav_ros.bags.reading import find_bags
from fieldnav_ros.bags.scoring import Decode, OtherRules, Scored, score_bag
from fieldnav_ros.errors import InputError
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.cost import cost
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.yard import Yard

MOST_LINES = 20
Say = Callable[[str], None]


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add the verb's arguments to its parser."""
    parser.add_argument("ledger", type=Path, metavar="LEDGER", help="record of the session that the bags are of")
    parser.add_argument("bags", type=Path, nargs="+", metavar="BAGS", help="bags, or folders of bags")
    parser.add_argument(
        "--arrival-position", type=number("--arrival-position", 1e-4, 10), metavar="M",
        help="distance in m within which a robot has arrived (default: as the episode was asked for)",
    )  # fmt: skip
    parser.add_argument(
        "--arrival-heading", type=number("--arrival-heading", 1e-4, 3.15), metavar="RAD",
        help="the same for its heading, in rad",
    )  # fmt: skip
    parser.add_argument(
        "--time-limit", type=number("--time-limit", 0.1, 600), metavar="S", help="the same for the time limit, in s"
    )
    parser.add_argument(
        "--append-to", type=Path, metavar="NEW", help="ledger of a session not yet begun, to hold these as evidence"
    )


def run(arguments: argparse.Namespace, decode: Decode, say: Say) -> dict[str, Any]:
    """Judge the bags again, tell what differs, and return what a machine wants to know of it."""
    rules = OtherRules(arguments.arrival_position, arguments.arrival_heading, arguments.time_limit)
    with Ledger.read(arguments.ledger) as ledger:
        entries = list(ledger.events())
    known, session = known_episodes(entries)
    about = next((event.about for event in entries if isinstance(event, ev.SessionBegun)), None)
    if about is None or about.yard is None:
        raise InputError(f"{arguments.ledger}: does not say on which yard the session was held")
    if arguments.append_to is not None:
        check_target(arguments.append_to)
    scored, unreadable = score_all(find_bags(arguments.bags), about.yard, decode, rules)
    for sentence in unreadable[:MOST_LINES]:
        say(sentence)
    if unreadable and not scored:
        raise InputError(unreadable[0])
    found = compare(scored, known)
    _tell(found, len(unreadable), rules, say)
    appended = 0
    if arguments.append_to is not None:
        if found.open:
            say(f"{len(found.open)} that end too early are left out of the evidence, which may make it too kind")
        appended = append(arguments.append_to, evidence(found, arguments.ledger.name, about.model), say)
    return {
        "ok": True, "bags": len(scored) + len(unreadable), "unreadable": len(unreadable),
        "compared": len(found.agree) + len(found.differ), "agree": len(found.agree), "differ": len(found.differ),
        "open": len(found.open), "void": len(found.void), "repeats": len(found.repeats),
        "without_entry": len(found.strangers), "without_bag": len(found.unrecorded), "other_rules": rules.any,
        "differences": [item.sentence() for item in found.differ], "evidence": appended,
        "champion": session.champion.set_id,
    }  # fmt: skip


def score_all(
    paths: Sequence[Path], yard: Yard, decode: Decode, rules: OtherRules
) -> tuple[list[Scored], list[str]]:
    """Judge bags, and return a sentence for each that could not be read: one bad bag spoils no others."""
    scored, unreadable = list[Scored](), list[str]()
    for path in paths:
        try:
            scored.append(score_bag(path, yard, decode, rules))
        except InputError as error:
            unreadable.append(str(error))
    return scored, unreadable


def _tell(found: Comparison, unreadable: int, rules: OtherRules, say: Say) -> None:
    compared = len(found.agree) + len(found.differ)
    under = " under the rules given" if rules.any else ""
    say(f"{compared} episodes compared{under}: {len(found.agree)} agree, {len(found.differ)} differ")
    for item in found.differ[:MOST_LINES]:
        say(f"  {item.sentence()}")
    if len(found.differ) > MOST_LINES:
        say(f"  and {len(found.differ) - MOST_LINES} more")
    for count, what in (
        (len(found.open), "recordings end before their episode does"),
        (len(found.void), "recordings of episodes that the ledger does not count"),
        (len(found.repeats), "recordings of earlier attempts, run again under the same number"),
        (len(found.strangers), "bags without an entry in this ledger"),
        (len(found.unrecorded), "episodes of the ledger without a bag"),
        (unreadable, "bags that could not be read"),
    ):
        if count:
            say(f"{count} {what}")


def evidence(found: Comparison, source: str, model: str) -> list[ev.EvidenceImported]:
    """Return what the recordings say of each set that the ledger knows, one event for each set and grade."""
    groups: dict[tuple[str, str, float], tuple[Known, list[ev.RecordedEpisode]]] = {}
    for item, entry in found.matched:
        value = None if item.outcome is None else cost(item.outcome, item.time_limit)
        if entry.void or entry.parameters is None or item.outcome is None or value is None:
            continue
        kept = groups.setdefault((entry.set_id, entry.grade, item.time_limit), (entry, []))[1]
        kept.append(ev.RecordedEpisode(bag=item.request.episode, outcome=item.outcome, cost=value))
    return [
        ev.EvidenceImported(
            source=source, model=model, grade=grade, time_limit=limit, set_id=set_id, parameters=entry.parameters,
            episodes=tuple(episodes),
        )
        for (set_id, grade, limit), (entry, episodes) in groups.items()
        if entry.parameters is not None
    ]  # fmt: skip


def check_target(path: Path) -> None:
    """Raise InputError where a ledger holds more than evidence: a session under way is no place for it."""
    if not path.exists():
        return
    with Ledger.read(path) as ledger:
        if any(not isinstance(event, ev.EvidenceImported) for event in ledger.events()):
            raise InputError(f"{path}: holds a session already; name a new ledger with --append-to")


def append(path: Path, events: Sequence[ev.EvidenceImported], say: Say) -> int:
    """Store the events that the ledger does not hold yet; return how many episodes they tell of."""
    with Ledger.open(path) as ledger:
        there = {(item.source, item.set_id, item.time_limit, item.episodes) for item in ledger.events()
                 if isinstance(item, ev.EvidenceImported)}  # fmt: skip
        new = [item for item in events if (item.source, item.set_id, item.time_limit, item.episodes) not in there]
        ledger.append(new)
    count = sum(len(item.episodes) for item in new)
    say(f"{count} episodes of {len(new)} sets are in {path}, for the session that begins with it")
    return count
