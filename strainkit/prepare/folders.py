"""New folders: those that appear whole or not at all, and one that much will be written into."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Iterable, Mapping
from pathlib import Path

from strainkit.errors import DiskError

__all__ = ["make_folder", "write_folder"]


def write_folder(out: Path, files: Mapping[str, str], folders: Iterable[str] = ()) -> None:
    """Make a folder with files (relative path -> text) and further empty folders; it is renamed into place when complete.

    Raises
    ------
    DiskError
        When the place cannot be written; nothing is left behind then.
    """
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        building = Path(tempfile.mkdtemp(prefix=f".{out.name}.", dir=out.parent))
        try:
            for folder in {*folders, *map(os.path.dirname, files)}:
                os.makedirs(building / folder, exist_ok=True)
            for name, text in files.items():
                with open(building / name, "w", encoding="utf-8") as file:
                    file.write(text)
            building.chmod(0o755)
            os.rename(building, out)
        except BaseException:
            shutil.rmtree(building, ignore_errors=True)
            raise
    except OSError as error:
        raise DiskError(f"cannot be written ({error.strerror})", out, "Check free space and permissions.") from None


def make_folder(out: Path, size: int) -> None:
    """Make the folder, where there is room for what is to come."""
    try:
        out.mkdir(parents=True, exist_ok=True)
        free = shutil.disk_usage(out).free
    except OSError as error:
        raise DiskError(f"cannot be written ({error.strerror})", out, "Check free space and permissions.") from None
    if size > free:
        raise DiskError(f"needs about {size / 1e6:.0f} MB, and {free / 1e6:.0f} MB are free", out, "Make room first.")
