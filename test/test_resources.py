"""Files of config/ are found, and what is not there is named in one sentence."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros import resources
from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.resources import config_path
from fieldnav_ros.yard import load_yard

pytestmark = pytest.mark.smoke


def shipped(root: Path) -> list[str]:
    return sorted(path.relative_to(root / "config").as_posix() for path in (root / "config").rglob("*.*"))


def test_every_file_of_config_is_found_with_its_content(root: Path) -> None:
    names = shipped(root)
    assert "yards/parcel_yard.yaml" in names
    for name in names:
        assert config_path(name).read_bytes() == (root / "config" / name).read_bytes(), name


def test_the_yard_that_is_shipped_loads() -> None:
    assert load_yard(config_path("yards/parcel_yard.yaml")).name == "parcel yard"


@pytest.mark.parametrize(
    "wanted",
    ["yards/none.yaml", "", ".", "yards", "../setup.py", "yards/../../setup.py", "/etc/passwd", "a\0b", "x" * 5000],
)
def test_what_is_not_shipped_is_named_with_what_there_is(wanted: str) -> None:
    with pytest.raises(InputError, match=r"must be one of .*yards/parcel_yard\.yaml") as caught:
        config_path(wanted)
    assert "\n" not in str(caught.value)
    assert caught.value.exit_code == 2


@given(st.text())
def test_no_text_leads_out_of_the_folder(wanted: str) -> None:
    folder = config_path("yards/parcel_yard.yaml").parent.parent
    try:
        found = config_path(wanted)
    except InputError:
        return
    assert found.is_relative_to(folder)


@pytest.mark.parametrize(
    ("inside", "beside", "manifest", "expected"),
    [
        (True, False, False, "site/fieldnav_ros/config"),
        (True, True, True, "site/fieldnav_ros/config"),
        (False, True, True, "site/config"),
        (False, True, False, None),
        (False, False, True, None),
    ],
    ids=["installed", "installed comes first", "checkout", "somebody else's config", "lost"],
)
def test_the_folder_is_the_packages_own_or_the_checkouts(
    root: Path, tmp_path: Path, inside: bool, beside: bool, manifest: bool, expected: str | None
) -> None:
    """A folder called config in site-packages is taken for ours only beside our package.xml."""
    package = tmp_path / "site" / "fieldnav_ros"
    package.mkdir(parents=True)
    if inside:
        shutil.copytree(root / "config", package / "config")
    if beside:
        shutil.copytree(root / "config", package.parent / "config")
    if manifest:
        shutil.copy(root / "package.xml", package.parent)
    if expected is None:
        with pytest.raises(WorkError, match="install fieldnav_ros again"):
            resources._config_folder(package)
    else:
        assert resources._config_folder(package) == tmp_path / expected
