"""Pictures for the README, made from a record and its page: the field before and after, and the page's top."""

from __future__ import annotations

import contextlib
import os
import shutil
import signal
import subprocess
import tempfile
from collections.abc import Sequence
from pathlib import Path

from matplotlib.figure import Figure

from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.report import floor
from fieldnav_ros.report.record import Record
from fieldnav_ros.report.scenes import Ground, field_scene
from fieldnav_ros.report.style import fix_layout, styled

BROWSERS = ("chromium", "chromium-browser", "google-chrome")
FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
)
LIMIT_S = 120.0


def write_fields(record: Record, before: Path, after: Path) -> None:
    """Write the field under the first set of the record's scene and under the other one, as SVG.

    The same record gives the same bytes. InputError where the record has no two sets or no floor to show.
    """
    ground = Ground.of(record.facts)
    scene = field_scene(record.facts, ground, {})
    if scene is None or ground.yard is None or ground.model is None or len(scene.views) < 2:
        raise InputError(f"{record.origin.file}: holds no two sets on a known floor to show the fields of")
    for index, (view, path) in enumerate(zip(scene.views, (before, after))):
        figure = floor.field(
            ground.yard, scene.layout, view.set.values, ground.model, view.main, view.others, after=index > 0
        )
        write_figure(figure, path)


def write_figure(figure: Figure, path: Path) -> None:
    """Write a figure that looks the same everywhere: an SVG with white ground and its text as outlines."""
    with styled(path.stem, outlines=True):
        fix_layout(figure)
        figure.savefig(path, format="svg", metadata={"Date": None, "Creator": None}, facecolor="white")


def find_browser() -> str | None:
    """Return the path of a Chromium on this machine; None where there is none."""
    return next((found for name in BROWSERS if (found := shutil.which(name))), None)


def browse(page: Path, arguments: Sequence[str], limit_s: float = LIMIT_S) -> tuple[str, str]:
    """Open a page in a headless Chromium with a profile of its own and return its two outputs.

    WorkError where there is no Chromium, it fails, or it does not end in time.
    """
    browser = find_browser()
    if browser is None:
        raise WorkError("no Chromium was found; install the package 'chromium'")
    with tempfile.TemporaryDirectory(prefix="fieldnav-browser-", ignore_cleanup_errors=True) as profile:
        command = [browser, *FLAGS, f"--user-data-dir={profile}", *arguments, page.resolve().as_uri()]
        process = subprocess.Popen(
            command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True
        )
        try:
            out, err = process.communicate(timeout=limit_s)
        except subprocess.TimeoutExpired as error:
            raise WorkError(f"{browser} did not end within {limit_s:g} s") from error
        finally:
            # its helpers outlive it at times; they are all in the session that it leads
            with contextlib.suppress(ProcessLookupError):
                os.killpg(process.pid, signal.SIGKILL)
            process.wait()
    if process.returncode:
        raise WorkError(f"{browser} ended with code {process.returncode}: {err[-500:]}")
    return out, err


def write_top(page: Path, picture: Path, width: int = 1280, height: int = 900) -> None:
    """Write the top of a page as PNG, ``width`` x ``height`` CSS pixels. WorkError as ``browse``."""
    browse(page, [f"--window-size={width},{height}", f"--screenshot={picture.resolve()}"])
    if not picture.is_file():
        raise WorkError(f"{picture}: the browser wrote no picture")
