"""Where the files of ``config/`` are, however the package was installed."""

from __future__ import annotations

from pathlib import Path, PurePosixPath

from fieldnav_ros.errors import InputError, WorkError

_PACKAGE = Path(__file__).resolve().parent


def config_path(relative: str) -> Path:
    """Return the path of a file shipped in ``config/``, such as ``yards/parcel_yard.yaml``.

    Raises InputError, naming the files there are, where ``relative`` is none of them; WorkError where the
    installation has lost the folder.
    """
    folder = _config_folder(_PACKAGE)
    files = {path.relative_to(folder).as_posix(): path for path in sorted(folder.rglob("*")) if path.is_file()}
    path = files.get(PurePosixPath(relative).as_posix())
    if path is None:
        raise InputError.of("shipped configuration file", relative, f"one of {', '.join(files)}")
    return path


def _config_folder(package: Path) -> Path:
    # pip and colcon copy the folder into the package. In a checkout, which is also what `pip install -e` and
    # `colcon build --symlink-install` link to, it lies beside the package; package.xml tells that from a folder
    # in site-packages that happens to have the name.
    checkout = package.parent
    if (package / "config").is_dir():
        return package / "config"
    if (checkout / "package.xml").is_file() and (checkout / "config").is_dir():
        return checkout / "config"
    raise WorkError(f"the folder config/ is missing from the installation in {package}; install fieldnav_ros again")
