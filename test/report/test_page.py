"""The page: every number is what the ledger says, and it stands for every kind of ledger."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from report.by_sql import Truth
from report.conftest import Zoo
from report.ledgers import ZOO, begun, drive, made_up, parcel_yard, small, stored
from report.reading import Seen, Shown, is_rounded, read, stray_numbers

from fieldnav_ros.cli import main
from fieldnav_ros.guide import DEFAULT_MODEL
from fieldnav_ros.model import KINDS, Layout
from fieldnav_ros.report import captioned
from fieldnav_ros.report.page import render
from fieldnav_ros.report.record import read_record
from fieldnav_ros.tuning.events import SessionConfig
from fieldnav_ros.world import batch

NAMES = sorted(ZOO)


@pytest.fixture
def undrawn(monkeypatch: pytest.MonkeyPatch) -> None:
    """Leave drawing out, which takes most of the time and adds no number to the text."""
    monkeypatch.setattr(captioned, "as_svg", lambda figure, key: '<svg viewBox="0 0 1 1"></svg>')


def page_of(path: Path, *others: Path) -> str:
    return render(read_record(path), [read_record(other) for other in others])


@pytest.mark.parametrize("name", NAMES)
def test_every_number_is_what_sql_says_of_the_ledger(zoo: Zoo, name: str) -> None:
    """Against ``by_sql``: SQL over the raw rows, SciPy's regression; nothing of the report's own code."""
    truth = Truth(zoo[name])
    expected = truth.facts()
    seen = read(zoo.undrawn_page(name))
    assert seen.numbers
    wrong = [item for item in seen.numbers if not known_by_simulation(item) and not agrees(item, expected)]
    truth.close()
    assert not wrong, "\n".join(f"{item} but SQL has {expected.get(item.fact)}" for item in wrong)


def known_by_simulation(item: Shown) -> bool:
    return item.fact.startswith(("replay.", "track.")) or item.fact == "failures_with_track"


def agrees(item: Shown, expected: dict[str, float]) -> bool:
    value = expected.get(item.fact)
    return value is not None and item.full == pytest.approx(value, rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("name", NAMES)
def test_what_is_read_is_the_full_value_rounded(zoo: Zoo, name: str) -> None:
    wrong = [item for item in read(zoo.undrawn_page(name)).numbers if not is_rounded(item)]
    assert not wrong


@pytest.mark.parametrize("name", NAMES)
def test_no_number_stands_on_the_page_without_a_fact_behind_it(zoo: Zoo, name: str) -> None:
    assert set(stray_numbers(read(zoo.undrawn_page(name)))) <= {"SHA-256"}


def test_numbers_from_simulation_are_those_of_the_batch_simulator(zoo: Zoo) -> None:
    """Tracks, and failures whose track is known: an episode of the record, run again by ``world.batch``."""
    shown = {item.fact: item.full for item in read(zoo.undrawn_page("by_simulation")).numbers}
    record = read_record(zoo["by_simulation"]).facts
    yard = parcel_yard()
    assert shown["replay.agreed"] == shown["replay.checked"] >= 3
    assert shown["failures_with_track"] == shown["failures"] == len(record.failures)
    truth = Truth(zoo["by_simulation"])
    first = truth.one("SELECT layout FROM place WHERE phase = 'verdict' ORDER BY id LIMIT 1")
    truth.close()
    assert record.before is not None
    sets = [record.before.values, record.rounds[-1].challenger.values]
    result = batch.simulate(yard, "moving", [Layout.model_validate_json(first)], sets, model=DEFAULT_MODEL)
    for index in range(2):
        assert KINDS[result.code[index, 0]].value in ("arrived", "timeout", "contact", "off_floor")
        assert shown[f"track.{index}.time"] == pytest.approx(result.time[index, 0])


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("curriculum", "went on to the next grade of the floor (parked, moving)"),
        ("empty", "No session is recorded in this ledger."),
        ("only_begun", "stays in service: nothing is decided yet."),
        ("one_episode", "The record stops after 1 episode that count"),
        ("only_void", "The record stops after 0 episodes that count"),
        ("only_failures", "was not shown to be better"),
        ("cut_in_search", "before any pair was compared"),
        ("cut_in_verdict", "is still open"),
        ("kept", "stays in service"),
        ("accepted", "went into service in place of initial"),
        ("troubled", "and were taken back with it: 1."),
        ("verdict_taken_back", "is still open"),
        ("without_about", "does not name its yard"),
        ("by_simulation", "These are simulated episodes"),
    ],
)
def test_each_kind_of_ledger_gets_a_page_that_says_what_it_is(zoo: Zoo, name: str, said: str) -> None:
    text = re.sub(r"<[^>]+>", "", zoo.undrawn_page(name).split("</style>")[1]).replace("&nbsp;", " ")
    assert said in re.sub(r"\s+", " ", text)


def test_a_made_up_record_is_not_taken_for_a_simulated_one(zoo: Zoo) -> None:
    """Where the simulator does not repeat the record, it does not say where episodes ended."""
    seen = read(zoo.undrawn_page("kept"))
    assert not [item for item in seen.numbers if item.fact in ("replay.agreed", "failures_with_track")]


def test_texts_from_the_record_stay_texts(zoo: Zoo) -> None:
    """Names, notes and sources that try to end the style, run scripts or be templates are shown letter by letter."""
    page = zoo.undrawn_page("hostile")
    seen = read(page)
    assert {tag for tag, _ in seen.tags} & {"script", "img", "iframe", "object", "link", "base", "form"} == set()
    assert page.count("</style>") == 1
    assert "{{7*7}}" in page
    assert "49" not in stray_numbers(seen)
    assert not [name for _, attributes in seen.tags for name in attributes if name.startswith("on")]


def test_the_page_asks_for_nothing_from_outside(zoo: Zoo) -> None:
    """Content-Security-Policy (W3C CSP3) forbids all loading; and there is nothing to load."""
    page = zoo.drawn_page()
    seen = read(page)
    policy = next(item["content"] for tag, item in seen.tags if tag == "meta" and "http-equiv" in item)
    assert policy is not None
    assert policy.startswith("default-src 'none'")
    assert not re.search(r"https?://|@import|url\((?!#)", page)
    links = [item[name] for _, item in seen.tags for name in ("src", "href") if item.get(name)]
    assert all(link is not None and link.startswith("#") for link in links)


def test_every_figure_has_words_for_those_who_cannot_see_it(zoo: Zoo) -> None:
    seen = read(zoo.drawn_page())
    drawn = [item for tag, item in seen.tags if tag == "svg"]
    assert len(drawn) >= 17
    assert all(item.get("role") == "img" and len(item.get("aria-label") or "") > 20 for item in drawn)
    assert sum(tag == "figcaption" for tag, _ in seen.tags) == len(drawn)


def test_sections_come_in_the_order_in_which_a_reader_asks(zoo: Zoo) -> None:
    order = [item["id"] for tag, item in read(zoo.drawn_page()).tags if tag == "section"]
    assert order == [
        "decision", "champion", "evidence", "outcomes", "costs", "failures", "fields", "search", "time", "voids",
        "record", "sessions",
    ]  # fmt: skip


def test_no_two_elements_share_an_id_and_all_references_lead_somewhere(zoo: Zoo) -> None:
    """Figures stand in one document: what one defines must not be found by another."""
    page = zoo.drawn_page()
    ids = re.findall(r'\sid="([^"]+)"', page)
    drawn = re.findall(r"<svg.*?</svg>", page, re.DOTALL)
    assert len(drawn) >= 17
    for svg in drawn:
        own = set(re.findall(r'\sid="([^"]+)"', svg))
        assert set(re.findall(r'href="#([^"]+)"|url\(#([^)]+)\)', svg)) <= {(x, "") for x in own} | {
            ("", x) for x in own
        }
    assert len(ids) == len(set(ids))


def test_the_same_ledger_gives_the_same_page_whatever_the_readers_own_settings(zoo: Zoo) -> None:
    import matplotlib as mpl

    first = page_of(zoo["without_about"])
    with mpl.rc_context({"font.size": 30, "svg.fonttype": "path", "axes.grid": True}):
        assert page_of(zoo["without_about"]) == first


def test_sessions_stand_side_by_side_with_their_own_numbers(zoo: Zoo) -> None:
    seen: Seen = read(page_of(zoo["kept"], zoo["accepted"], zoo["empty"]))
    assert set(stray_numbers(seen)) <= {"SHA-256"}
    assert all(is_rounded(item) for item in seen.numbers)
    shown = {item.fact: item.full for item in seen.numbers}
    for letter, name in (("A", "kept"), ("B", "accepted")):
        truth = Truth(zoo[name])
        expected = truth.facts()
        changed = truth.payloads("champion_changed")
        in_service = changed[-1]["parameters"] if changed else truth.payloads("session_begun")[0]["champion"]
        truth.close()
        last = int(expected["rounds"])
        for fact, own in {
            "episodes": "episodes", "voids": "voids",
            "timeout": "outcomes.all.timeout", "contact": "outcomes.all.contact",
            "off_floor": "outcomes.all.off_floor", "mean_difference": f"round.{last}.signed_difference",
            "log_evidence": f"round.{last}.log_evidence", "log_threshold": f"round.{last}.log_threshold",
            "control": "outcomes.control.mean_cost", "floor_time_used": "used.all",
        }.items():  # fmt: skip
            assert shown[f"{letter}.{fact}"] == pytest.approx(expected[own]), (letter, fact)
        assert all(shown[f"{letter}.{number}"] == value for number, value in in_service.items())
    assert shown["C.episodes"] == 0


def test_two_thousand_episodes_take_less_than_three_mebibytes(tmp_path: Path) -> None:
    session, log = begun(SessionConfig(seed=4, floor_time_s=60.0 * 230, layouts=6))
    drive(session, log, made_up(failing=0.2, gain=2.0))
    ledger, page = stored(tmp_path / "long.ledger", log), tmp_path / "long.html"
    assert sum(event.kind == "episode_scored" for event in log) >= 2000
    assert main(["report", str(ledger), "--out", str(page)]) == 0
    assert page.stat().st_size < 3 * 2**20


@pytest.mark.usefixtures("undrawn")
def test_long_lists_are_cut_and_say_so(tmp_path: Path) -> None:
    session, log = begun(small())
    for number in range(100):
        log += session.note("tuner", f"note {number}.")
    page = page_of(stored(tmp_path / "noted.ledger", log))
    assert page.count("<q>note ") == 40
    assert "note 99." in page
    assert "the ledger has all" in page
