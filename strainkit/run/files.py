"""Atomic files: written beside their place and renamed into it, so that a reader sees the old or the new, never half."""

from __future__ import annotations

import hashlib
import json
import math
import os
import re
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from functools import lru_cache
from pathlib import Path
from typing import Any

from strainkit.errors import DiskError, InputError

__all__ = ["atomic_write", "checksum", "dump_json", "in_a_hurry", "load_json"]

#: types of numbers that one call of json writes
_PLAIN = frozenset((float, int, bool, type(None)))
#: whether a file is on the disk itself before its write ends, so that it outlives a power cut
_durable = True


@contextmanager
def in_a_hurry() -> Iterator[None]:
    """Leave it to the system when files reach the disk, where whoever reads them later notices what a power cut took.

    They are still renamed into place whole, so that a killed process loses nothing.
    """
    global _durable
    before, _durable = _durable, False
    try:
        yield
    finally:
        _durable = before


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
            if _durable:
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


def dump_json(value: Any) -> str:
    """JSON text, each list of plain numbers on one line; unknown numbers are null, never NaN."""
    return _text(value, "\n") + "\n"


def _text(value: Any, line: str) -> str:
    """A value as text; `line` is a line break with the indentation of the value."""
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, float):
        return float.__repr__(value) if math.isfinite(value) else "null"
    if hasattr(value, "tolist"):
        return _text(value.tolist(), line)
    inside = line + " "
    if isinstance(value, dict):
        items = (f"{_key(str(key))}: {_text(item, inside)}" for key, item in value.items())
        return f"{{{inside}{f',{inside}'.join(items)}{line}}}" if value else "{}"
    if isinstance(value, list | tuple):
        if not value:
            return "[]"
        if _PLAIN.issuperset(map(type, value)):
            return _finite(json.dumps(value))  # one call for all numbers
        value = [item.tolist() if hasattr(item, "tolist") else item for item in value]
        if all(type(item) is list and item and _PLAIN.issuperset(map(type, item)) for item in value):  # rows of an array
            text = json.dumps(value).replace("], [", f"],{inside}[")
            return f"[{inside}{_finite(text[1:-1])}{line}]"
        if not any(isinstance(item, str | dict | list | tuple) for item in value):
            return f"[{', '.join(_text(item, inside) for item in value)}]"
        return f"[{inside}{f',{inside}'.join(_text(item, inside) for item in value)}{line}]"
    return json.dumps(value)


@lru_cache(4096)
def _key(key: str) -> str:
    return json.dumps(key, ensure_ascii=False)


def _finite(text: str) -> str:
    """Numbers as json writes them, with null for what is none."""
    return re.sub("-?Infinity|NaN", "null", text) if "N" in text or "I" in text else text


def _refuse_constant(name: str) -> float:
    raise ValueError(f"{name} is no number")


def load_json(path: Path, kind: str) -> dict[str, Any]:
    """The object in a JSON file of strainkit's, `kind` being the part of its schema before the version.

    Raises
    ------
    InputError
        Missing, not JSON, another kind, or written by a newer version.
    """
    try:
        value = json.loads(path.read_text(encoding="utf-8"), parse_constant=_refuse_constant)
    except OSError as error:
        raise InputError(error.strerror or "cannot be read", path) from None
    except (ValueError, RecursionError) as error:
        raise InputError(f"not valid JSON ({error})", path, "Restore the file or make it again.") from None
    schema = str(value.get("schema", "")) if isinstance(value, dict) else ""
    if not schema.startswith(f"{kind}/"):
        raise InputError(f"not a {kind} file", path)
    if schema != f"{kind}/1":
        raise InputError(f"written by a newer strainkit ({schema})", path, "Upgrade strainkit.")
    return dict(value)
