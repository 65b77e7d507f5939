"""The README's pictures are there, are shown, and are no older than what makes them look as they do."""

from __future__ import annotations

from pathlib import Path

import pictures
import pytest


def test_pictures_are_not_stale() -> None:
    """Compared by the files that say how they look: pixels and last digits differ from machine to machine."""
    now, then = pictures.sources(), pictures.recorded()
    changed = sorted(name for name in now.keys() | then.keys() if now.get(name) != then.get(name))
    assert not changed, f"run `python test/pictures.py`: since the pictures were made, {', '.join(changed)} changed"


@pytest.mark.parametrize("name", pictures.MADE)
def test_the_readme_shows_every_picture_with_words_for_those_who_do_not_see_it(root: Path, name: str) -> None:
    readme = (root / "README.md").read_text(encoding="utf-8").splitlines()
    lines = [line for line in readme if f"pictures/{name}" in line]
    assert len(lines) == 1
    assert len(lines[0].split("[")[1].split("]")[0]) > 20
    assert (pictures.PICTURES / name).stat().st_size < 600_000
