"""Yard files: the shipped ones explain themselves, and whatever is wrong with one is said in one sentence."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any, cast

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from pydantic import BaseModel

from fieldnav_ros.errors import InputError
from fieldnav_ros.world.carts import FAR
from fieldnav_ros.yard import FARTHEST, LARGEST_FILE, Yard, load_yard, read_yaml

SHIPPED = sorted((Path(__file__).parent.parent / "config" / "yards").glob("*.yaml"))
ON_FILES = settings(deadline=None, max_examples=60, suppress_health_check=[HealthCheck.function_scoped_fixture])


def content() -> dict[str, Any]:
    """Return the parcel yard as plain values, to be spoilt."""
    read: dict[str, Any] = yaml.safe_load(SHIPPED[0].read_text(encoding="utf-8"))
    return read


def refusal(folder: Path, text: str | bytes) -> str:
    """Return the sentence that a file with this text is refused with."""
    path = folder / "a.yaml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(InputError) as caught:
        load_yard(path)
    sentence = str(caught.value)
    assert sentence.startswith(f"{path}: ")
    assert sentence.isprintable()
    assert len(sentence) < len(str(path)) + 400
    return sentence.removeprefix(f"{path}: ")


def spoilt(folder: Path, key: str, value: Any) -> str:
    """Return the sentence that the parcel yard with one key changed is refused with."""
    changed = content()
    *way, last = key.split(".")
    place = changed
    for part in way:
        place = place[part]
    place[last] = value
    return refusal(folder, yaml.safe_dump(changed))


# the shipped files


class Line(BaseModel):
    """A key of a YAML file that stands on a line of its own."""

    path: tuple[str, ...]
    text: str
    comment: str


def lines_of(path: Path) -> list[Line]:
    found: list[Line] = []
    way: list[str] = []
    for text in path.read_text(encoding="utf-8").splitlines():
        match = re.match(r"^( *)(\w+):([^#]*)(#.*)?$", text)
        if match:
            indent, key, value, comment = match.groups()
            way = [*way[: len(indent) // 2], key]
            found.append(Line(path=tuple(way), text=value.strip(), comment=comment or ""))
    return found


def model_field(path: tuple[str, ...]) -> Any:
    """Return the pydantic field of a key, None for the name of a grade."""
    model: Any = Yard
    field = None
    for part in path:
        if model is None:
            return None
        field = model.model_fields[part]
        model = field.annotation if hasattr(field.annotation, "model_fields") else None
    return field


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_each_key_of_a_shipped_yard_carries_a_comment(path: Path) -> None:
    bare = [".".join(line.path) for line in lines_of(path) if len(line.comment) < 3]
    assert bare == []


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_shipped_yard_shows_every_key_of_the_model(path: Path) -> None:
    def keys(model: type[BaseModel]) -> set[str]:
        names = set()
        for name, field in model.model_fields.items():
            names.add(name)
            if hasattr(field.annotation, "model_fields"):
                names |= {f"{name}.{inner}" for inner in keys(cast("type[BaseModel]", field.annotation))}
        return names

    shown = {".".join(line.path) for line in lines_of(path) if line.path[0] != "grades" or len(line.path) == 1}
    assert shown == keys(Yard)


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_defaults_named_in_comments_are_those_of_the_model(path: Path) -> None:
    """A comment that lies is worse than none: "default X" must be what a left-out key gives."""
    checked = 0
    own = {line.path: line.comment for line in lines_of(path)}
    for line in lines_of(path):
        field = model_field(line.path)
        stated = re.search(r"default (\[[^\]]*\]|[-\w.]+)", line.comment)
        if field is None or hasattr(field.annotation, "model_fields"):
            continue
        if field.is_required():
            above = "".join(own[line.path[:depth]] for depth in range(1, len(line.path) + 1))
            assert "no default" in above, line.path
            continue
        assert stated, f"{line.path} has the default {field.default}, its comment says nothing about it"
        value = yaml.safe_load(stated[1])
        if value == "any":
            assert field.default == pytest.approx((-3.141592653589793, 3.141592653589793))
        elif isinstance(field.default, tuple):
            assert tuple(value) == field.default, line.path
        elif isinstance(field.default, float):
            assert float(value) == pytest.approx(field.default, rel=1e-4), line.path
        else:
            assert value == field.default, line.path
        checked += 1
    assert checked >= 12


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_shipped_yard_loads_as_it_is_written(path: Path) -> None:
    """Values as in the file: nothing dropped, swapped or rounded on the way through the model."""
    assert load_yard(path).model_dump(mode="json") == yaml.safe_load(path.read_text(encoding="utf-8"))


def test_parcel_yard_follows_common_practice() -> None:
    """Common practice: 5, 7 and 10 s for an empty, a static and a moving floor; harder floors take longer."""
    grades = load_yard(SHIPPED[0]).grades
    assert [(name, grade.time_limit) for name, grade in grades.items()] == [
        ("empty", 5.0), ("parked", 7.0), ("moving", 10.0)
    ]  # fmt: skip
    assert grades["empty"].carts == 0
    assert grades["parked"].carts > 0
    assert grades["parked"].speed == (0.0, 0.0)
    assert grades["moving"].carts > 0
    assert grades["moving"].speed[0] > 0


def test_unknown_grade_names_those_there_are() -> None:
    with pytest.raises(InputError, match="'storm', must be one of empty, parked, moving"):
        load_yard(SHIPPED[0]).grade("storm")


# bad values


def mark(**changes: Any) -> dict[str, Any]:
    return {"name": "A", "x": 0.5, "y": 0.8, "yaw": 0.0, **changes}


@pytest.mark.parametrize(
    ("key", "value", "says"),
    [
        ("robot.radius", -0.06, "robot.radius is -0.06, must be greater than 0"),
        ("robot.wheel_speed", True, "robot.wheel_speed is True, must be a valid number"),
        ("robot.track", "0.1", "robot.track is '0.1', must be a valid number"),
        ("robot.track", float("nan"), "robot.track is nan, must be a finite number"),
        ("floor.x", [0.0, float("inf")], "floor.x.1 is inf, must be a finite number"),
        ("floor.x", [0.0, 600.0], "floor.x.1 is 600.0, must be less than or equal to 500"),
        ("floor.x", [2.4, 0.0], "floor.x: [2.4, 0] must run from the smaller to the larger value"),
        ("floor.x", [0.0], "floor.x.1 is missing"),
        ("floor.walled", 1, "floor.walled is 1, must be a valid boolean"),
        ("start.x", [0.05, 0.8], "start.x is [0.05, 0.8], must lie from 0.06 to 2.34"),
        ("goal.y", [0.25, 1.55], "goal.y is [0.25, 1.55], must lie from 0.06 to 1.54"),
        ("marks", [mark(x=0.05)], "x of mark A is 0.05, must be from 0.06 to 2.34"),
        ("marks", [mark(y=1.55)], "y of mark A is 1.55, must be from 0.06 to 1.54"),
        ("marks", [mark(), mark(yaw=1.0)], "mark A is there 2 times, must be there once"),
        ("marks", [mark(name="the left one")], "marks.0.name is 'the left one'"),
        ("cart_radius", 0.9, "cart_radius is 0.9, must be at most 0.8"),
        ("grades.empty.carts", -1, "grades.empty.carts is -1, must be greater than or equal to 0"),
        ("grades.empty.carts", True, "grades.empty.carts is True, must be a valid integer"),
        ("grades.moving.speed", [-0.2, 0.5], "speed starts at -0.2, must be at least 0"),
        ("grades.moving.time_limit", 601, "grades.moving.time_limit is 601, must be less than or equal to 600"),
        ("grades", {}, "grades is {}, must have at least 1 item"),
        ("plant.pose_rate", 0, "plant.pose_rate is 0, must be greater than or equal to 5"),
        ("name", "", "name is '', must have at least 1 character"),
        ("robot.mass", 2.0, "robot.mass is not a known key"),
        ("start", None, "start is None, must be"),
    ],
)
def test_bad_value_is_named_with_file_key_value_and_bound(tmp_path: Path, key: str, value: Any, says: str) -> None:
    assert says in spoilt(tmp_path, key, value)


def test_without_walls_regions_may_reach_the_edge_and_rounding_never_refuses(tmp_path: Path) -> None:
    yard = content()
    yard["floor"] = {"x": [0.0, 0.3], "y": [0.0, 0.3], "walled": True}
    yard["robot"]["radius"] = 0.1
    yard["marks"] = []
    yard["start"] = yard["goal"] = {"x": [0.1, 0.2], "y": [0.1, 0.2]}  # 0.3 - 0.1 < 0.2 in floating point
    assert Yard.model_validate(yard).start.x == (0.1, 0.2)
    yard["start"] = {"x": [0.0, 0.3], "y": [0.0, 0.3]}
    with pytest.raises(ValueError, match="out of the walls"):
        Yard.model_validate(yard)
    yard["floor"]["walled"] = False
    assert Yard.model_validate(yard).start.x == (0.0, 0.3)


def test_no_floor_reaches_where_absent_carts_are_kept() -> None:
    assert FAR > FARTHEST + 100.0


# bad files


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "holds None, must hold the keys of a yard"),
        ("- 1\n- 2\n", "holds [1, 2], must hold the keys of a yard"),
        ("name: a\nname: b\n", "at line 2: key 'name' is given twice"),
        ("floor: {x: [0, 1], x: [0, 2]}\n", "at line 1: key 'x' is given twice"),
        ("a: &a [1]\nb: *a\n", "at line 2: aliases (*name) are not allowed"),
        ("a: &a\n  b: *a\n", "aliases (*name) are not allowed"),
        ("[" * 2000, "nested too deeply"),
        ("{a: " * 1000, "nested too deeply"),
        ("a: [1, 2\nb: 3\n", "not readable as YAML at line 2"),
        ("a: \x01\n", "special characters are not allowed"),
        (b"\xff\xfe\x00\x01binary\x80", "not readable as YAML"),
        (b"name: \xe9\n", "not readable as YAML"),
        ("a: !!python/object/apply:os.system [ls]\n", "could not determine a constructor"),
        ("a: !!int abc\n", "a value does not fit its type"),
        ("a: !!bool abc\n", "a value does not fit its type"),
        ("a: !!timestamp abc\n", "a value does not fit its type"),
        ("a: !!float ''\n", "a value does not fit its type"),
        ("? [1]\n: 2\n", "not readable as YAML at line 1"),
        ("a: " + "9" * 5000, "not readable as YAML"),
        (SHIPPED[0].read_text().replace("parcel yard ", "0x" + "f" * 5000), "name is an integer of 20000 bits"),
        ("---\na: 1\n---\nb: 2\n", "not readable as YAML"),
        ("x" * (LARGEST_FILE + 1), f"is too large, must be at most {LARGEST_FILE} bytes"),
    ],
)
def test_bad_file_is_refused_in_one_sentence(tmp_path: Path, text: str | bytes, says: str) -> None:
    assert says in refusal(tmp_path, text)


def test_aliases_of_aliases_are_refused_before_they_grow(tmp_path: Path) -> None:
    """Billion laughs (a known attack on parsers that expand references): 10^9 values from ten lines."""
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 10)}]" for n in range(1, 10)]
    assert "aliases (*name) are not allowed" in refusal(tmp_path, "\n".join(lines))


@pytest.mark.parametrize(
    ("name", "says"),
    [(".", "Is a directory"), ("absent.yaml", "No such file"), ("a\0b", "null"), ("x" * 300, "too long")],
)
def test_path_that_is_no_file_is_named(tmp_path: Path, name: str, says: str) -> None:
    with pytest.raises(InputError, match=says) as caught:
        load_yard(tmp_path / name)
    assert str(caught.value).isprintable()


@pytest.mark.parametrize(
    ("text", "value"),
    [("1e-3", 0.001), ("-2E+3", -2e3), ("1.5e3", 1500.0), (".5e0", 0.5), ("1.0e-05", 1e-5), ("e5", "e5"), ("12", 12)],
)
def test_numbers_with_exponents_are_numbers(tmp_path: Path, text: str, value: object) -> None:
    """YAML 1.2 core schema, 10.3.2 (from memory); ROS parameter files read them so too."""
    path = tmp_path / "a.yaml"
    path.write_text(f"a: {text}\n")
    read = read_yaml(path)["a"]
    assert (type(read), read) == (type(value), value)


# fuzzing: a user never sees anything but InputError

YAML_WORDS = st.lists(
    st.sampled_from(
        [
            "name", "floor", "x", ": ", "\n", "  ", "- ", "[", "]", "{", "}", ", ", "&a ", "*a", "<<", "? ", "!!int ",
            "!!timestamp ", "!!binary ", "!!set ", "!!omap ", "!", "|\n", ">\n", "'", '"', "#", "%YAML 9", "---\n",
            "1e999", ".nan", "-.inf", "0x", "0b", "1:60", "2026-13-45", "~", "yes", "\t", "\u2028", "\ufeff",
        ]
    ),
    max_size=30,
).map("".join)  # fmt: skip
VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=10) | st.dates() | st.binary(max_size=5),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5) | st.integers(), inner, max_size=3),
    max_leaves=8,
)
KEYS = [".".join(line.path) for line in lines_of(SHIPPED[0])]
KEYS += ["grades.moving.carts", "grades.moving.speed", "odd\nkey"]


def loads_or_refuses(path: Path) -> None:
    sentence = None
    try:
        load_yard(path)
    except InputError as error:
        sentence = str(error)
    assert sentence is None or (sentence.isprintable() and sentence.startswith(str(path)))


@ON_FILES
@given(raw=st.binary(max_size=200) | st.text(max_size=200).map(lambda text: text.encode(errors="replace")))
def test_any_bytes_load_or_are_refused(tmp_path: Path, raw: bytes) -> None:
    (tmp_path / "a.yaml").write_bytes(raw)
    loads_or_refuses(tmp_path / "a.yaml")


@settings(ON_FILES, max_examples=200)
@given(text=YAML_WORDS)
def test_any_mixture_of_yaml_loads_or_is_refused(tmp_path: Path, text: str) -> None:
    (tmp_path / "a.yaml").write_text(text, encoding="utf-8")
    loads_or_refuses(tmp_path / "a.yaml")


@ON_FILES
@given(key=st.sampled_from(KEYS), value=VALUES)
def test_any_value_at_any_key_loads_or_is_refused(tmp_path: Path, key: str, value: Any) -> None:
    changed = content()
    *way, last = key.split(".")
    place = changed
    for part in way:
        place = place[part]
    place[last] = value
    (tmp_path / "a.yaml").write_text(yaml.safe_dump(changed), encoding="utf-8")
    loads_or_refuses(tmp_path / "a.yaml")
