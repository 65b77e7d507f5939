"""Numbers as they are read: rounded right, never an exponent in plain E notation, e-values of any size."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from report.reading import Shown, is_rounded

from fieldnav_ros.report import values
from fieldnav_ros.report.page import say
from fieldnav_ros.report.values import Cite, Name, Value

finite = st.floats(min_value=-1e15, max_value=1e15, allow_nan=False)


def shown(value: Value) -> Shown:
    return Shown(value.fact, value.full, value.text)


@given(finite)
def test_seconds_and_shares_are_their_value_rounded(number: float) -> None:
    for made in (
        values.seconds("x", number),
        values.seconds("x", number, sign=True),
        values.share("x", number / 100.0),
    ):
        assert is_rounded(shown(made))
        assert "e" not in made.text


@given(st.floats(min_value=1e-5, max_value=9e5))
def test_settings_keep_three_significant_figures(number: float) -> None:
    made = values.setting("x", number)
    digits = made.text.split(" ×")[0].replace(".", "").lstrip("0")
    assert is_rounded(shown(made))
    assert len(digits) >= 2 if "×" in made.text else len(digits) >= 3


@given(st.floats(min_value=-1e6, max_value=1e6))
def test_e_values_are_shown_whatever_their_size(log_e: float) -> None:
    assert is_rounded(shown(values.evidence("round.1.log_evidence", log_e)))


@pytest.mark.parametrize(
    ("log_e", "text"),
    [
        (0.0, "1.00"), (math.log(20.0), "20.0"), (math.log(1e12), "1.0 × 10¹²"),
        (1e4 * math.log(10.0), "1.0 × 10¹⁰⁰⁰⁰"),
        (-1e3 * math.log(10.0), "1.0 × 10⁻¹⁰⁰⁰"), (math.log(9.96e5), "1.0 × 10⁶"),
    ],
)  # fmt: skip
def test_e_values_as_they_are_read(log_e: float, text: str) -> None:
    assert values.evidence("x", log_e).text == text


@pytest.mark.parametrize(
    ("number", "text"), [(-0.001, "0.00"), (2.345678, "2.35"), (-7.0, "−7.00"), (1e12, "1.0 × 10¹²"), (0.0, "0.00")]
)
def test_plain_numbers_as_they_are_read(number: float, text: str) -> None:
    assert values.plain(number) == text


def test_all_that_is_said_is_escaped() -> None:
    bad = '<b>&"'
    html = say([bad, Name(bad), Cite(bad), Value(bad, 1.0, bad, bad)])
    assert "<b>" not in html
    assert html.count("&lt;b&gt;&amp;&#34;") == 6


def test_hashes_may_break_and_still_read_as_they_are() -> None:
    digest = "0123456789abcdef" * 4
    assert say([Name(digest)]).replace("<wbr>", "") == f"<code>{digest}</code>"
