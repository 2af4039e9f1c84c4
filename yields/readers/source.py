"""Opening a file: what may be opened, how much of it, out of which wrapping, in which encoding."""

from __future__ import annotations

import bz2
import gzip
import hashlib
import io
import lzma
import os
import stat
import zipfile
import zlib
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import BinaryIO

from ..errors import InputError

#: bytes; a table of 2,000 models and 400 nuclides takes 10 MB as text
LARGEST = 256 * 2**20

_WRAPPINGS = {b"\x1f\x8b": "gzip", b"\xfd7zXZ\x00": "xz", b"BZh": "bzip2", b"PK\x03\x04": "zip"}
_SUFFIXES = (".gz", ".xz", ".bz2", ".zip")


@dataclass(frozen=True)
class Source:
    """The bytes of one file, unwrapped.

    Attributes
    ----------
    path : Path
        Where it was read from.
    name : str
        Its name without folders and without .gz or its like.
    data : bytes
        What it holds, uncompressed.
    sha256 : str
        Digest of the file as it lies on disk.
    """

    path: Path
    name: str
    data: bytes
    sha256: str

    @cached_property
    def text(self) -> str:
        """The bytes as text: UTF-8 where they are that, Latin-1 otherwise; every line ends in a line feed.

        Raises
        ------
        InputError
            The file isn't text.
        """
        if self.data.startswith((b"\xff\xfe", b"\xfe\xff")):
            text = self.data.decode("utf-16", errors="replace")
        elif b"\0" in self.data:
            raise InputError("this is no text file", where=self.name, mend="name its format with --format")
        else:
            try:
                text = self.data.decode("utf-8-sig")
            except UnicodeDecodeError:
                text = self.data.decode("latin-1")
        return text.replace("\r\n", "\n").replace("\r", "\n").replace("\u00a0", " ")

    @cached_property
    def lines(self) -> list[str]:
        """The text by lines, line ends taken off.

        Form feeds and other odd separators don't count as line ends.
        """
        return self.text.split("\n")


def open_source(path: str | Path) -> Source:
    """Read a file whole, compressed or not.

    Parameters
    ----------
    path : path-like
        A regular file of at most `LARGEST` bytes, also after decompression.

    Returns
    -------
    Source

    Raises
    ------
    InputError
        No such file, not a regular file, too large, or damaged.
    """
    path = Path(path)
    data = _bytes(path)
    digest = hashlib.sha256(data).hexdigest()
    name = path.name
    wrapping = next((w for magic, w in _WRAPPINGS.items() if data.startswith(magic)), "")
    if wrapping == "zip":
        data, name = _unzip(data, path)
    elif wrapping:
        opened: BinaryIO = {"gzip": gzip.open, "xz": lzma.open, "bzip2": bz2.open}[wrapping](io.BytesIO(data))
        data = _limited(opened, path, wrapping)
        if path.suffix.lower() in _SUFFIXES:
            name = path.stem
    return Source(path, name, data, digest)


def _bytes(path: Path) -> bytes:
    try:
        # O_NONBLOCK: opening a pipe that nobody writes to must not wait
        handle = os.open(path, os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0))
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"can't be opened: {reason}", where=str(path), mend="check the path") from None
    status = os.fstat(handle)
    if not stat.S_ISREG(status.st_mode):
        os.close(handle)
        raise InputError("this is no regular file", where=str(path), mend="name a file")
    with os.fdopen(handle, "rb") as file:
        if status.st_size > LARGEST:
            raise _too_large(path)
        data = file.read(LARGEST + 1)
    if len(data) > LARGEST:
        raise _too_large(path)
    return data


def _limited(opened: BinaryIO, path: Path, wrapping: str) -> bytes:
    try:
        with opened:
            data = opened.read(LARGEST + 1)
    except (OSError, EOFError, lzma.LZMAError, zlib.error, zipfile.BadZipFile, RuntimeError) as error:
        raise InputError(
            f"damaged {wrapping} file: {error}", where=path.name, mend="fetch it again"
        ) from None
    if len(data) > LARGEST:
        raise _too_large(path)
    return data


def _unzip(data: bytes, path: Path) -> tuple[bytes, str]:
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            members = [m for m in archive.infolist() if not m.is_dir()]
            if len(members) != 1:
                raise InputError(
                    f"holds {len(members)} files, not one", where=path.name, mend="unpack it and name one"
                )
            opened = archive.open(members[0])
            return _limited(opened, path, "zip"), Path(members[0].filename.replace("\\", "/")).name
    except (zipfile.BadZipFile, NotImplementedError, RuntimeError, ValueError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"damaged zip file: {error}", where=path.name, mend="fetch it again") from None


def _too_large(path: Path) -> InputError:
    return InputError(
        f"holds more than {LARGEST // 2**20} MB",
        where=path.name,
        mend="yield tables are smaller; cut out the table",
    )
