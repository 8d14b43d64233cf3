"""The content of a returned file: regular, unpacked, of bounded size, with lines that a program could have written."""

from __future__ import annotations

import bz2
import gzip
import lzma
import os
import stat
import zlib
from dataclasses import dataclass
from functools import cached_property
from io import BufferedIOBase, BytesIO
from pathlib import Path
from typing import IO, cast

from strainkit.errors import InputError

__all__ = ["HEAD", "LARGEST", "LONGEST_LINE", "Source", "damaged_packing", "file_head", "read_source"]

#: bytes looked at to tell what a file is
HEAD = 16384
#: bytes of the largest output that is read, after unpacking
LARGEST = 512 * 1024**2
#: bytes of the longest line in a program's output; bounds the time that a pattern can take
LONGEST_LINE = 20_000

_PACKED = ((b"\x1f\x8b", gzip.open), (b"\xfd7zXZ\0", lzma.open), (b"BZh", bz2.open))
_DAMAGED = "a damaged packed file, cut short or changed on its way; copy it again"
_UNPACKING_ERRORS = (OSError, EOFError, lzma.LZMAError, zlib.error, ValueError)


@dataclass(frozen=True)
class Source:
    """A file's unpacked content.

    Attributes
    ----------
    path : path
        Where it lies; neighbours of the same run may be looked up in its folder.
    content : bytes
        Unpacked.
    """

    path: Path
    content: bytes

    @cached_property
    def text(self) -> str:
        """Decoded, with plain line ends; ValueError when a line is longer than any program writes."""
        start = 0
        while len(self.content) - start > LONGEST_LINE:
            end = self.content.rfind(b"\n", start, start + LONGEST_LINE)
            if end < 0:
                raise ValueError(f"a line is longer than {LONGEST_LINE} bytes")
            start = end + 1
        return self.free_text

    @cached_property
    def free_text(self) -> str:
        """Decoded, with plain line ends and lines of any length."""
        return self.content.decode("utf-8", errors="replace").replace("\r\n", "\n")


def _open(path: Path) -> IO[bytes]:
    """Open a regular file; never waits on a pipe or device."""
    number = os.open(path, os.O_RDONLY | os.O_NONBLOCK | getattr(os, "O_CLOEXEC", 0))
    if not stat.S_ISREG(os.fstat(number).st_mode):
        os.close(number)
        raise OSError("not a regular file")
    return os.fdopen(number, "rb")


def _unpacked(file: IO[bytes]) -> IO[bytes]:
    magic = file.read(6)
    file.seek(0)
    for mark, opener in _PACKED:
        if magic.startswith(mark):
            return cast(IO[bytes], opener(file, "rb"))
    return file


def file_head(path: Path) -> bytes:
    """The first bytes of a file, unpacked, as far as a damaged one gives them; empty when it cannot be read."""
    collected = b""
    try:
        with _open(path) as file, _unpacked(file) as unpacked:
            if unpacked is file:
                return file.read(HEAD)
            while len(collected) < HEAD and (piece := cast(BufferedIOBase, unpacked).read1(HEAD - len(collected))):
                collected += piece
    except _UNPACKING_ERRORS:
        pass
    return collected


def damaged_packing(path: Path) -> str:
    """What to say of a packed file that cannot be unpacked to its end; empty for any other file."""
    try:
        with _open(path) as file, _unpacked(file) as unpacked:
            if unpacked is file:
                return ""
    except _UNPACKING_ERRORS:
        return ""
    try:
        read_source(path)
    except InputError as error:
        return error.what if error.what.startswith(_DAMAGED) else ""
    return ""


def read_source(path: Path, within: Path | None = None) -> Source:
    """Read and unpack a file.

    Parameters
    ----------
    path : path
        The file.
    within : path, optional
        Folder out of which no symbolic link may lead.

    Raises
    ------
    InputError
        When it cannot be read, leads out of the folder or holds more than LARGEST bytes.
    """
    where = path
    if within is not None and not path.resolve().is_relative_to(within.resolve()):
        raise InputError("a symbolic link leads out of the run folder", where)
    packed = False
    try:
        with _open(path) as file, _unpacked(file) as unpacked:
            packed = unpacked is not file
            if not packed and os.fstat(file.fileno()).st_size > LARGEST:
                raise InputError(f"larger than {LARGEST // 1024**2} MiB", where)
            content = _bounded(unpacked)
    except _UNPACKING_ERRORS as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"{_DAMAGED} ({error})" if packed else f"cannot be read: {error}", where) from None
    if len(content) > LARGEST:
        raise InputError(f"unpacks to more than {LARGEST // 1024**2} MiB", where)
    return Source(path, content)


def _bounded(file: IO[bytes]) -> bytes:
    """Everything, or just over LARGEST bytes of it."""
    collected = BytesIO()
    while collected.tell() <= LARGEST and (piece := file.read(1024**2)):
        collected.write(piece)
    return collected.getvalue()
