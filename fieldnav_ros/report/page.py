"""Puts a session's facts together into one self-contained page."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup

from fieldnav_ros.errors import clipped
from fieldnav_ros.report import captioned, captioned_floor, provenance, tables, wording
from fieldnav_ros.report.drift import drift
from fieldnav_ros.report.facts import Facts
from fieldnav_ros.report.record import Record
from fieldnav_ros.report.scenes import Ground, Tracks, failure_scene, field_scene
from fieldnav_ros.report.values import Cite, Name, Sentence, Value, share, whole

TEMPLATES = Path(__file__).resolve().parent / "template"
LONGEST_TEXT = 400
POLICY = "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"


def render(record: Record, others: Iterable[Record] = (), tracks: Tracks | None = None) -> str:
    """Return the page about ``record``, with ``others`` beside it; ``tracks`` are measured ones by episode id."""
    environment = Environment(
        loader=FileSystemLoader(TEMPLATES),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["say"] = say
    environment.filters["cut"] = lambda text: clipped(text, LONGEST_TEXT)
    context = _context(record, [record, *others], tracks or {})
    return environment.get_template("report.html").render(**context)


def say(parts: Sentence | Value) -> Markup:
    """Return a sentence as HTML: numbers as ``<data>`` with their full value, everything else escaped."""
    if isinstance(parts, Value):
        parts = [parts]
    return Markup("").join(_part(part) for part in parts)


def _part(part: str | Value | Name | Cite) -> Markup:
    if isinstance(part, Value):
        unit = Markup("&nbsp;") + part.unit if part.unit else ""
        return Markup('<data data-fact="{}" value="{}">{}{}</data>').format(part.fact, repr(part.full), part.text, unit)
    if isinstance(part, Name):
        return Markup("<code>{}</code>").format(_breakable(part.text))
    if isinstance(part, Cite):
        return Markup("<cite>{}</cite>").format(part.text)
    return Markup.escape(part)


def _breakable(text: str) -> Markup:
    """Let hashes break in even pieces."""
    if len(text) < 40 or not text.isalnum():
        return Markup.escape(text)
    return Markup("<wbr>").join(text[at : at + 8] for at in range(0, len(text), 8))


def _context(record: Record, records: list[Record], tracks: Tracks) -> dict[str, Any]:
    found, ground = record.facts, Ground.of(record.facts)
    failures, scene = failure_scene(found, ground, tracks), field_scene(found, ground, tracks)
    seen = drift(found)
    other = found.after if found.changed else found.rival
    compared = len(records) > 1
    return {
        "policy": POLICY,
        "record": record,
        "facts": found,
        "title_block": provenance.title_block(record),
        "decision": wording.decision(found),
        "cautions": wording.cautions(found, failures, seen),
        "rows": tables.parameter_rows(found.before, other) if found.before else [],
        "other": other,
        "champion": captioned.champion_picture(found.before, other, found.changed) if found.before and other else None,
        "evidence": captioned.evidence_pictures(found.rounds),
        "rounds": tables.round_lists(found.rounds),
        "pairs": tables.pair_rows(found.rounds),
        "outcomes": captioned.outcome_picture(found),
        "outcome_rows": tables.outcome_rows(found) if found.begun else [],
        "costs": captioned.cost_picture(found, seen),
        "failures": captioned_floor.failure_picture(ground, failures),
        "fields": captioned_floor.field_pictures(ground, scene, found),
        "fields_missing": _why_no_field(found),
        "narrowing": captioned.narrowing_pictures(found, other or found.before) if found.before else [],
        "time": captioned.time_picture(found),
        "time_rows": tables.time_rows(found) if found.begun else [],
        "voids": tables.void_rows(found),
        "void_count": whole("voids", len(found.voids)),
        "void_share": share("void_share", len(found.voids) / max(len(found.voids) + len(found.episodes), 1)),
        "taken_back": whole("taken_back", found.taken_back),
        "ignored": tables.ignored_rows(found),
        "notes": found.notes[-tables.MOST_ROWS :],
        "most": whole("most", tables.MOST_ROWS),
        "groups": provenance.groups(record),
        "columns": provenance.side_by_side(records) if compared else [],
        "sessions": captioned.session_picture(records) if compared else None,
    }


def _why_no_field(found: Facts) -> str:
    if not found.episodes:
        return "No episode that counts, so no layout to show the field on."
    if found.about.yard is None:
        return "The record does not name its yard, so the field cannot be drawn."
    return "The record does not name a field that this version knows, so it cannot be drawn."
