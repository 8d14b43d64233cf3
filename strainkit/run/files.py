"""Atomic files: written beside their place and renamed into it, so that a reader sees the old or the new, never half."""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
import tempfile
from pathlib import Path
from typing import Any

from strainkit.errors import DiskError, InputError

__all__ = ["atomic_write", "checksum", "dump_json", "load_json"]


def atomic_write(path: Path, content: str | bytes) -> None:
    """Write a file so that it is never seen half-written.

    Raises
    ------
    DiskError
        When the place cannot be written (read-only folder, full disk); the old file is untouched then.
    """
    data = content.encode() if isinstance(content, str) else content
    temporary = ""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except OSError as error:
        if temporary:
            Path(temporary).unlink(missing_ok=True)
        raise DiskError(f"cannot be written ({error.strerror})", path, "Check free space and permissions.") from None


def checksum(content: bytes) -> str:
    """SHA-256 of some bytes, hexadecimal."""
    return hashlib.sha256(content).hexdigest()


def _finite(value: Any) -> Any:
    """The same JSON value with numbers that are not finite turned into null."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, dict):
        return {str(key): _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if hasattr(value, "tolist"):
        return _finite(value.tolist())
    return value


def dump_json(value: Any) -> str:
    """JSON text, each list of plain numbers on one line; unknown numbers are null, never NaN."""
    text = json.dumps(_finite(value), indent=1, ensure_ascii=False, allow_nan=False)
    # a raw line break never stands inside a JSON string, so only lists match
    return re.sub(r"\[\n[^\[\]{}\"]*\]", lambda found: re.sub(r"\n\s*", "", found[0]).replace(",", ", "), text) + "\n"


def load_json(path: Path, kind: str) -> dict[str, Any]:
    """The object in a JSON file of strainkit's, `kind` being the part of its schema before the version.

    Raises
    ------
    InputError
        Missing, not JSON, another kind, or written by a newer version.
    """
    try:
        value = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(error.strerror or "cannot be read", path) from None
    except ValueError as error:
        raise InputError(f"not valid JSON ({error})", path, "Restore the file or make it again.") from None
    schema = str(value.get("schema", "")) if isinstance(value, dict) else ""
    if not schema.startswith(f"{kind}/"):
        raise InputError(f"not a {kind} file", path)
    if schema != f"{kind}/1":
        raise InputError(f"written by a newer strainkit ({schema})", path, "Upgrade strainkit.")
    return dict(value)
