"""Files from outside are data: whatever is in them, a reader gives values or one sentence, and runs nothing.

40 examples of each kind in the suite, always the same ones. ``FIELDNAV_FUZZ=5000 pytest test/faults/test_files.py``
tries so many, and others each time.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml
from faults.conftest import Tell
from faults.spoil import NASTY, as_yaml, nothing_run, spoilt_bytes, spoilt_tree
from hypothesis import HealthCheck, Phase, given, settings

from fieldnav_ros.errors import FieldnavError, InputError, WorkError
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import parameters_text, read_parameters, write_parameters
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.tuning.prior_file import load_prior
from fieldnav_ros.tuning.space import Prior, dump_prior
from fieldnav_ros.world.layouts import draw
from fieldnav_ros.yard import load_yard

EXAMPLES = int(os.environ.get("FIELDNAV_FUZZ", "40"))
LONGEST = 700
"""Most characters of a refusal beyond the file's name: a sentence, not a dump."""


def fuzzed(function: Callable[..., None]) -> Callable[..., None]:
    """Settings of all tests here; shrinking is left to who looks into a failure."""
    chosen = settings(
        max_examples=EXAMPLES, deadline=None, derandomize=EXAMPLES <= 100, database=None,
        phases=[Phase.explicit, Phase.generate], suppress_health_check=list(HealthCheck),
    )  # fmt: skip
    return chosen(function)


def read_yard(path: Path) -> None:
    """Read a yard and use it: layouts are drawn on its floor."""
    yard = load_yard(path)
    for grade in list(yard.grades)[:2]:
        draw(yard, grade, np.random.default_rng(1))


YARDS = [config_path(f"yards/{name}.yaml").read_bytes() for name in ("parcel_yard", "rehearsal_floor")]
SETS = [config_path("guidance.yaml").read_bytes(), parameters_text(DEFAULTS, "about", "published").encode()]
PRIORS = [dump_prior(Prior.of(np.full(9, 0.5), 0.04 * np.eye(9), "a test", 100)).encode()]
READERS: dict[str, tuple[Callable[[Path], object], list[bytes]]] = {
    "yard": (read_yard, YARDS), "parameter file": (read_parameters, SETS), "prior": (load_prior, PRIORS),
}  # fmt: skip


def held(reader: Callable[[Path], object], path: Path, locks: bool = False) -> bool:
    """Read; tell whether the file was taken. Fails on anything but a value or one sentence."""
    with nothing_run(locks):
        try:
            reader(path)
        except FieldnavError as error:
            sentence = str(error)
            assert sentence.isprintable()
            assert len(sentence) < len(str(path)) + LONGEST
            return False
    return True


@pytest.mark.parametrize("kind", READERS)
def test_a_real_file_with_spoilt_bytes_is_read_or_refused_in_a_sentence(fast: Path, tell: Tell, kind: str) -> None:
    reader, files = READERS[kind]
    path, taken = fast / "file.yaml", []

    @fuzzed
    @given(spoilt_bytes(files, [text.encode("utf-8", "surrogatepass") for text in NASTY]))
    def check(data: bytes) -> None:
        path.write_bytes(data)
        taken.append(held(reader, path))

    check()
    assert os.listdir(fast) == ["file.yaml"]
    tell(f"{kind}: bytes spoilt", len(taken), f"{taken.count(False)} refused in a sentence, nothing run")


@pytest.mark.parametrize("kind", READERS)
def test_a_real_file_with_other_values_is_read_or_refused_in_a_sentence(fast: Path, tell: Tell, kind: str) -> None:
    reader, files = READERS[kind]
    path, taken = fast / "file.yaml", []

    @fuzzed
    @given(spoilt_tree([yaml.safe_load(data) for data in files]))
    def check(tree: Any) -> None:
        path.write_bytes(as_yaml(tree))
        taken.append(held(reader, path))

    check()
    tell(f"{kind}: values replaced", len(taken), f"{taken.count(False)} refused in a sentence, nothing run")


@pytest.mark.parametrize("kind", READERS)
@pytest.mark.parametrize("text", [text for text in NASTY if text.startswith("!!python")])
def test_a_tag_that_would_run_code_is_refused(fast: Path, kind: str, text: str) -> None:
    """As the whole file, as a value and as a key."""
    path = fast / "file.yaml"
    for whole in (text, f"name: {text}\n", f"? {text}\n: 1\n"):
        path.write_text(whole)
        with nothing_run(), pytest.raises(InputError):
            READERS[kind][0](path)
    assert os.listdir(fast) == ["file.yaml"]


def test_the_watch_over_reading_sees_code_that_runs(fast: Path) -> None:
    """The same tag with the loader that trusts it: the tests above would notice."""
    with pytest.raises(AssertionError, match=r"os\.mkdir"), nothing_run():
        yaml.unsafe_load(f"!!python/object/apply:os.mkdir ['{fast / 'ran'}']")


def test_writing_follows_no_link(fast: Path, tell: Tell) -> None:
    """Links that somebody laid where the champion's file and the ledger's lock go: what they point to stays."""
    kept = fast / "kept"
    kept.write_text("precious")
    champion, lock = fast / "champion.yaml", fast / "session.ledger.lock"
    champion.symlink_to(kept)
    lock.symlink_to(kept)
    write_parameters(champion, DEFAULTS, "about", "published")
    assert read_parameters(champion) == DEFAULTS
    assert not champion.is_symlink()
    with pytest.raises(WorkError, match="cannot be locked"):
        Ledger.open(fast / "session.ledger")
    assert kept.read_text() == "precious"
    assert sorted(os.listdir(fast)) == ["champion.yaml", "kept", "session.ledger.lock"]
    tell("writing: links in the way", 2, "not followed")
