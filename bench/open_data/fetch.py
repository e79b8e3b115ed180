"""Packages fetched by the apt tools and unpacked, not installed, into a folder of the user's."""

from __future__ import annotations

import os
import subprocess
import tempfile
from pathlib import Path


class Unavailable(RuntimeError):
    """Data that cannot be had on this machine, and why."""


def default_cache() -> Path:
    """Where packages are unpacked when no folder is given."""
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "sordino-bench"


def unpacked(package: str, cache: Path) -> Path:
    """The folder that holds the package's files, fetched unless the cache has it.

    Raises Unavailable where apt does not know it, cannot fetch it, or is not there.
    """
    folder = cache / package
    if not folder.exists():
        cache.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryDirectory(dir=cache) as place:
            _call(package, ["apt-get", "download", package], place)
            (archive,) = Path(place).glob("*.deb")
            _call(package, ["dpkg-deb", "-x", archive.name, "files"], place)
            (Path(place) / "files").rename(folder)
    return folder


def open_file(package: str, cache: Path, path: str) -> Path:
    """A file of a package; Unavailable if this version of the package has none by that name."""
    found = unpacked(package, cache) / path
    if not found.is_file():
        raise Unavailable(f"package {package} holds no {path} in the version fetched")
    return found


def _call(package: str, command: list[str], folder: str):
    try:
        subprocess.run(command, cwd=folder, capture_output=True, check=True, encoding="utf-8")
    except FileNotFoundError:
        raise Unavailable(f"{command[0]} is not there: this needs a Debian machine") from None
    except subprocess.CalledProcessError as error:
        lines = error.stderr.strip().splitlines() or ["no reason given"]
        raise Unavailable(f"package {package} cannot be had: {lines[-1]}") from None
