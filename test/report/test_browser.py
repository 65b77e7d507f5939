"""The page in a real browser, headless Chromium: at 1280 and 400 px and as printed nothing is clipped or overlaps."""

from __future__ import annotations

import html
import json
import os
import re
from pathlib import Path
from typing import Any

import pytest
from report.conftest import Zoo

from fieldnav_ros.report.command import write_report
from fieldnav_ros.report.pictures import browse, find_browser, write_top

A4_PX = 680  # 210 mm less margins of 15 mm, at 96 px an inch
FRAMES = ((1280, "screen"), (400, "screen"), (A4_PX, "print"))
PAGES = [("accepted", ("kept", "empty", "by_simulation")), ("troubled", ()), ("hostile", ()), ("empty", ())]

if find_browser() is None and os.environ.get("CI", "").lower() not in {"1", "true"}:
    pytest.skip("no Chromium on this machine", allow_module_level=True)


def measured(page: Path, folder: Path) -> tuple[list[dict[str, Any]], str]:
    """Return what ``measure.js`` finds in each frame, and what the browser complained about."""
    address = page.resolve().as_uri()
    frames = "".join(
        f'<iframe src="{address}" data-media="{media}" style="border:0;width:{width}px;height:900px"></iframe>'
        for width, media in FRAMES
    )
    script = (Path(__file__).parent / "measure.js").resolve().as_uri()
    wrapper = folder / "wrapper.html"
    wrapper.write_text(f'<body>{frames}<pre id="result"></pre><script src="{script}"></script>', encoding="utf-8")
    arguments = [
        "--allow-file-access-from-files",
        "--enable-logging=stderr",
        "--virtual-time-budget=20000",
        "--dump-dom",
    ]
    document, complaints = browse(wrapper, arguments)
    found = re.search(r'<pre id="result">(.*?)</pre>', document, re.DOTALL)
    assert found, document[-2000:]
    assert found[1], complaints
    return json.loads(html.unescape(found[1])), "\n".join(re.findall(r".*CONSOLE.*", complaints))


@pytest.mark.parametrize(("name", "beside"), PAGES, ids=[name for name, _ in PAGES])
def test_nothing_is_clipped_or_overlaps_and_the_console_is_silent(
    zoo: Zoo, tmp_path: Path, name: str, beside: tuple[str, ...]
) -> None:
    page = tmp_path / "page.html"
    write_report(zoo[name], page, [zoo[other] for other in beside])
    frames, console = measured(page, tmp_path)
    assert [(frame["width"], frame["media"]) for frame in frames] == list(FRAMES)
    for frame in frames:
        assert frame["texts"] > 20
        assert not frame["faults"], f"{frame['width']} px, {frame['media']}:\n" + "\n".join(frame["faults"][:20])
    assert console == ""


@pytest.mark.parametrize(
    ("body", "fault"),
    [
        ("<p style='width:2000px'>wide</p>", "scrolls sideways"),
        ("<p style='height:1em;overflow:hidden'>cut<br>off</p>", "clipped"),
        ("<p>over</p><p style='margin-top:-2.5em'>lap</p>", "overlap"),
        ("<svg viewBox='0 0 100 20' role='img' aria-label='a'><text x='90' y='10'>too long</text></svg>", "outside"),
        ("<svg viewBox='0 0 100 20' role='img' aria-label='a'><text y='9' font-size='1'>small</text></svg>", "8 px"),
        ("<svg viewBox='0 0 100 20'><text x='9' y='15'>a</text></svg>", "no words"),
    ],
)
def test_the_measurement_sees_what_it_is_for(tmp_path: Path, body: str, fault: str) -> None:
    page = tmp_path / "bad.html"
    page.write_text(f"<!DOCTYPE html><meta charset=utf-8><body>{body}", encoding="utf-8")
    frames, _ = measured(page, tmp_path)
    assert any(fault in found for frame in frames for found in frame["faults"])


def test_the_console_is_listened_to(tmp_path: Path) -> None:
    page = tmp_path / "bad.html"
    page.write_text("<!DOCTYPE html><meta charset=utf-8><body><script>nothing.here()</script>", encoding="utf-8")
    assert "nothing is not defined" in measured(page, tmp_path)[1]


def test_it_prints_on_a_few_pages(zoo: Zoo, tmp_path: Path) -> None:
    page, paper = tmp_path / "page.html", tmp_path / "page.pdf"
    write_report(zoo["accepted"], page)
    browse(page, ["--no-pdf-header-footer", f"--print-to-pdf={paper}"])
    raw = paper.read_bytes()
    assert raw.startswith(b"%PDF")
    assert 3 <= len(re.findall(rb"/Type\s*/Page\b", raw)) <= 8


def test_the_top_of_a_page_becomes_a_picture(zoo: Zoo, tmp_path: Path) -> None:
    page, picture = tmp_path / "page.html", tmp_path / "top.png"
    write_report(zoo["one_episode"], page)
    write_top(page, picture, 1280, 900)
    head = picture.read_bytes()[:24]
    assert head.startswith(b"\x89PNG")  # PNG (ISO/IEC 15948): width and height follow the name of the first chunk
    assert (int.from_bytes(head[16:20], "big"), int.from_bytes(head[20:24], "big")) == (1280, 900)
