"""The table that is printed at the end of a run in which tests of faults took part: what was tried, what came of it."""

from __future__ import annotations

from typing import Any

ROW = "fault"
"""Name of the user property that a test leaves for the table: fault, how often it was tried, what came of it."""


def pytest_terminal_summary(terminalreporter: Any) -> None:
    """Print a row for each fault; one whose test failed says so. Reports come here from all test processes."""
    rows: list[tuple[str, str, str, str]] = []
    for outcome in ("passed", "failed"):
        for report in terminalreporter.stats.get(outcome, []):
            for name, row in getattr(report, "user_properties", []):
                if name == ROW and report.when == "call":
                    fault, tried, what = row
                    rows.append((outcome, fault, str(tried), what if outcome == "passed" else "NOT HELD, see above"))
    if not rows:
        return
    wide = max(len(fault) for _, fault, _, _ in rows)
    terminalreporter.section("faults")
    terminalreporter.write_line(f"{'fault':{wide}}  {'tried':>6}  what came of it")
    for outcome, fault, tried, what in sorted(rows, key=lambda row: row[1]):
        terminalreporter.write_line(f"{fault:{wide}}  {tried:>6}  {what}", red=outcome == "failed")
