"""The one table: its contents against the contract, round trips, and refusals that name the parameter."""

from __future__ import annotations

import math
from decimal import Decimal
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import ValidationError

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import BY_NAME, DEFAULTS, TABLE, Numbers, Parameter, ParameterSet, stack

CONTRACT = {
    "field.turn_radius": ("d_e", "m", 0.03, 0.40),
    "field.turn_softness": ("K_r", "m", 0.005, 0.50),
    "field.motion_lead": ("K_o", "s", 0.0, 0.60),
    "field.guard_distance": ("d_min", "m", 0.08, 0.35),
    "field.guard_fade": ("delta", "m", 0.01, 0.30),
    "field.sidestep": ("own", "rad", 0.0, 1.5),
    "drive.steer_gain": ("K_w", "s^-1 rad^-1/2", 1.0, 20.0),
    "drive.arrival_gain": ("K_p", "s^-1", 1.0, 40.0),
    "drive.lateral_accel": ("R_m", "m s^-2", 0.3, 12.0),
}
"""Names, units and ranges that users, ROS parameter files and ledgers rely on (the interface's contract)."""
UNIT = st.floats(0.0, 1.0)
SETS = st.builds(
    lambda units: ParameterSet.from_array([row.from_unit(u) for row, u in zip(TABLE, units)]),
    st.lists(UNIT, min_size=len(TABLE), max_size=len(TABLE)),
)
EACH = pytest.mark.parametrize("row", TABLE, ids=lambda row: row.name)


def test_table_is_the_contract_in_its_order() -> None:
    assert {row.ros_name: (row.symbol, row.unit, row.low, row.high) for row in TABLE} == CONTRACT
    assert [row.ros_name for row in TABLE] == list(CONTRACT)
    assert tuple(row.name for row in TABLE) == Numbers._fields == tuple(ParameterSet.model_fields)
    assert {row.name: row for row in TABLE} == BY_NAME


@EACH
def test_default_lies_inside_its_range_and_has_a_meaning(row: Parameter) -> None:
    assert row.low < row.default < row.high
    assert row.meaning
    assert getattr(DEFAULTS, row.name) == row.default
    assert row.scale == "linear" or row.low > 0


@EACH
def test_unit_interval_ends_at_the_bounds_and_its_middle_is_the_scales_mean(row: Parameter) -> None:
    """Closed forms: the middle is the arithmetic mean on a linear scale, the geometric mean on a log one."""
    assert (row.to_unit(row.low), row.to_unit(row.high)) == (0.0, 1.0)
    mean = math.sqrt(row.low * row.high) if row.scale == "log" else (row.low + row.high) / 2
    assert row.from_unit(0.5) == pytest.approx(mean, rel=1e-12)
    assert row.from_unit(0.0) == pytest.approx(row.low, rel=1e-12)
    assert row.from_unit(1.0) == pytest.approx(row.high, rel=1e-12)


@settings(deadline=None, max_examples=100)
@given(row=st.sampled_from(TABLE), unit=UNIT, other=UNIT)
def test_unit_interval_round_trip_keeps_value_and_order(row: Parameter, unit: float, other: float) -> None:
    value = row.from_unit(unit)
    assert row.to_unit(value) == pytest.approx(unit, abs=1e-9)
    if unit < other:
        assert value <= row.from_unit(other)


@settings(deadline=None, max_examples=100)
@given(row=st.sampled_from(TABLE), unit=st.floats(allow_nan=False))
def test_from_unit_never_leaves_the_range(row: Parameter, unit: float) -> None:
    assert row.low <= row.from_unit(unit) <= row.high
    if unit <= 0 or unit >= 1:
        assert row.from_unit(unit) == pytest.approx(row.low if unit <= 0 else row.high, rel=1e-12)


@EACH
def test_from_unit_refuses_nan(row: Parameter) -> None:
    with pytest.raises(InputError, match=row.ros_name):
        row.from_unit(math.nan)


@settings(deadline=None, max_examples=50)
@given(one=SETS)
def test_a_set_comes_back_exactly_from_ros_names_and_from_an_array(one: ParameterSet) -> None:
    assert ParameterSet.from_ros(one.to_ros()) == one
    assert ParameterSet.from_array(one.to_array()) == one
    assert list(one.to_ros()) == list(CONTRACT)
    assert all(type(value) is float for value in one.to_ros().values())
    assert tuple(one.to_ros().values()) == tuple(one.to_array()) == one.numbers()


def test_names_left_out_keep_their_defaults_and_whole_numbers_are_numbers() -> None:
    one = ParameterSet.from_ros({"drive.arrival_gain": 4, "field.sidestep": np.float32(0.5)})
    assert one == DEFAULTS.model_copy(update={"arrival_gain": 4.0, "sidestep": 0.5})
    assert type(one.arrival_gain) is float


def outside(row: Parameter) -> list[Any]:
    """Return what no parameter may be, and the nearest values beyond its bounds."""
    below, above = math.nextafter(row.low, -math.inf), math.nextafter(row.high, math.inf)
    no_numbers = [math.nan, math.inf, -math.inf, True, np.True_, "0.1", None, [0.1], 1 + 0j, Decimal("1")]
    return [*no_numbers, 16**5000, below, above]


@EACH
def test_what_is_no_number_in_range_is_refused_with_name_value_and_bound(row: Parameter) -> None:
    for bad in outside(row):
        with pytest.raises(InputError) as caught:
            ParameterSet.from_ros({row.ros_name: bad}, "a.yaml")
        text = str(caught.value)
        assert text.startswith(f"a.yaml: {row.ros_name} is "), text
        assert text.endswith(f"must be a number from {row.low:g} to {row.high:g} {row.unit}"), text
        values: list[Any] = list(DEFAULTS.to_array())
        values[TABLE.index(row)] = bad
        with pytest.raises(InputError, match=row.ros_name):
            ParameterSet.from_array(values)


@EACH
def test_direct_construction_is_as_strict(row: Parameter) -> None:
    for bad in (math.nan, True, "0.1", math.nextafter(row.low, -math.inf), math.nextafter(row.high, math.inf)):
        with pytest.raises(ValidationError, match=row.name):
            ParameterSet.model_validate({row.name: bad})
    for edge in (row.low, row.high):
        assert getattr(ParameterSet.from_ros({row.ros_name: edge}), row.name) == edge


@pytest.mark.parametrize("name", ["turn_radius", "drive.turn_radius", "", "x\n" * 1000, 5])
def test_unknown_name_is_named_and_cut(name: Any) -> None:
    with pytest.raises(InputError, match="is not a known parameter") as caught:
        ParameterSet.from_ros({name: 0.1})
    assert str(caught.value).isprintable()
    assert len(str(caught.value)) < 150


@pytest.mark.parametrize("count", [0, 8, 10])
def test_array_of_another_length_is_refused(count: int) -> None:
    with pytest.raises(InputError, match=f"is {count}, must be 9"):
        ParameterSet.from_array(np.full(count, 0.3))


def test_stack_holds_each_set_repeatedly_in_a_row() -> None:
    other = DEFAULTS.model_copy(update={"sidestep": 1.0, "lateral_accel": 2.0})
    numbers = stack([DEFAULTS, other], repeat=3)
    assert numbers.sidestep.tolist() == [DEFAULTS.sidestep] * 3 + [1.0] * 3
    assert numbers.lateral_accel.tolist() == [DEFAULTS.lateral_accel] * 3 + [2.0] * 3
    assert numbers.turn_radius.tolist() == [DEFAULTS.turn_radius] * 6
