"""Where templates/ and sample_cells/ are: inside the package in a wheel, beside it in a checkout."""

from __future__ import annotations

from pathlib import Path

from strainkit.errors import InputError

__all__ = ["shipped_folder"]


def shipped_folder(name: str) -> Path:
    """Folder of shipped files, `name` being "templates" or "sample_cells"."""
    package = Path(__file__).parent
    for folder in (package / name, package.parent / name):
        if folder.is_dir():
            return folder
    raise InputError("shipped files are missing", package / name, "Reinstall strainkit.")
