"""The user's own library: admitted yield sets, one HDF5 file each, beside the shipped ones.

A file is written whole under another name and then linked to its own, so that a killed process
leaves nothing half there, two processes can admit at once, and neither can lose what the other
wrote: there is no index, the files are the library.
"""

from __future__ import annotations

import os
import re
import secrets
import socket
import time
import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .errors import InputError, nearest
from .grid import YieldSet
from .storefile import decode, encode

if TYPE_CHECKING:
    from .build import Printed
    from .layouting import Reading

#: environment variable that puts the library elsewhere
VARIABLE = "STEELYARD_LIBRARY"

SUFFIX = ".h5"

_ID = re.compile(r"[A-Za-z0-9][A-Za-z0-9_+-]*(\.[A-Za-z0-9_+-]+)*")
_LONGEST_ID = 80
# a file being written belongs to nobody any more when its process is gone, or after this many seconds
_STALE = 3600.0


class LibraryWarning(UserWarning):
    """A file of the user's library that can't be used."""


@dataclass(frozen=True)
class Entry:
    """What the library knows of one admitted set.

    Attributes
    ----------
    id, kind, checksum : str
    created : str
        When it was admitted, UTC, ISO 8601.
    version : str
        steelyard's version then.
    sources : tuple of (str, str)
        Name and SHA-256 of each file it was admitted from.
    layout : str
        The layout, whole.
    path : Path
    """

    id: str
    kind: str
    checksum: str
    created: str
    version: str
    sources: tuple[tuple[str, str], ...]
    layout: str
    path: Path


def folder() -> Path:
    """Return the folder of the library; it may not exist yet.

    Returns
    -------
    Path
        ``$STEELYARD_LIBRARY`` where that is set, otherwise the user's data folder.
    """
    given = os.environ.get(VARIABLE, "")
    if given:
        return Path(given).expanduser()
    import platformdirs

    return Path(platformdirs.user_data_path("steelyard"))


def keep(reading: Reading, *, replace: bool = False) -> Path:
    """Keep a reading in the library.

    Parameters
    ----------
    reading : Reading
    replace : bool
        Whether a set of the same id may be replaced.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    InputError
        The id is that of a shipped set, can't be a file name, or is taken; or the
        folder can't be written.
    """
    check_id(reading.id, replace=replace)
    home = folder()
    try:
        home.mkdir(parents=True, exist_ok=True)
        _sweep(home)
    except OSError as error:
        raise _unwritable(home, error) from None
    path = home / f"{reading.id}{SUFFIX}"
    data = encode(reading)
    part = home / f".{reading.id}.{_host()}.{os.getpid()}.{secrets.token_hex(4)}.part"
    try:
        with open(part, "xb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        if replace:
            os.replace(part, path)
        else:
            _link(part, path)
    except FileExistsError:
        raise _taken(reading.id) from None
    except OSError as error:
        raise _unwritable(home, error) from None
    finally:
        part.unlink(missing_ok=True)
    return path


def ids() -> tuple[str, ...]:
    """Return the ids of all admitted sets that can be used, in alphabetical order.

    Warns
    -----
    LibraryWarning
        For every file that can't be used.
    """
    return tuple(entry.id for entry in entries())


def entries() -> tuple[Entry, ...]:
    """Return what the library holds, by id; files that can't be used are named in warnings."""
    found = []
    for path in _files():
        try:
            found.append(entry(path.stem))
        except InputError as error:
            warnings.warn(str(error), LibraryWarning, stacklevel=2)
    return tuple(found)


def holds(id: str) -> bool:
    """Say whether a file of that id is in the library, usable or not."""
    return bool(_ID.fullmatch(id)) and (folder() / f"{id}{SUFFIX}").is_file()


def entry(id: str) -> Entry:
    """Return what the library knows of one set.

    Raises
    ------
    InputError
        There is none of that id, or its file can't be used.
    """
    return _opened(*_signed(id))[0]


def reading(id: str) -> Reading:
    """Return an admitted set as it was read.

    Raises
    ------
    InputError
        There is none of that id, or its file can't be used.
    """
    return _opened(*_signed(id))[1]


def load(id: str, solar: str) -> YieldSet:
    """Load an admitted set.

    Parameters
    ----------
    id : str
    solar : str
        Mixture for birth compositions that the set doesn't give.

    Returns
    -------
    YieldSet

    Raises
    ------
    InputError
        There is none of that id, or its file can't be used.
    """
    return _grid(*_signed(id), solar)


def printed(id: str) -> tuple[Mapping[str, Any], Printed]:
    """Return what is said of an admitted set and its figures, as `library.printed` does for shipped ones.

    Raises
    ------
    InputError
        There is none of that id, or its file can't be used.
    """
    found = reading(id)
    return found.info, found.printed()


def remove(id: str) -> None:
    """Remove an admitted set, usable or not.

    Raises
    ------
    InputError
        There is none of that id, or it is a shipped one.
    """
    from .library import shipped

    if id in shipped():
        raise InputError(f"{id} ships with steelyard and can't be removed", mend="remove admitted sets only")
    if not holds(id):
        raise _unknown(id)
    try:
        (folder() / f"{id}{SUFFIX}").unlink()
    except OSError as error:
        raise _unwritable(folder(), error) from None


def check_id(id: str, *, replace: bool = False) -> None:
    """Refuse an id that is a shipped set's, can't be a file name, or is taken.

    Parameters
    ----------
    id : str
    replace : bool
        Whether an admitted set may have it.

    Raises
    ------
    InputError
    """
    from .library import shipped

    if not _ID.fullmatch(id) or len(id) > _LONGEST_ID:
        raise InputError(
            f"{id[:60]!r} can't be the id of a set",
            mend="use letters, digits, - and _, such as author-2026",
        )
    if id in shipped():
        raise InputError(f"{id} ships with steelyard and isn't overwritten", mend="give another id with --id")
    if not replace and holds(id):
        raise _taken(id)


def _files() -> list[Path]:
    try:
        return sorted(p for p in folder().iterdir() if p.suffix == SUFFIX and not p.name.startswith("."))
    except FileNotFoundError:
        return []
    except OSError as error:
        warnings.warn(f"{folder()}: can't be read: {error.strerror}", LibraryWarning, stacklevel=3)
        return []


def _signed(id: str) -> tuple[Path, tuple[int, int, int]]:
    """The file of a set, and what changes when it is written anew."""
    if not holds(id):
        raise _unknown(id)
    path = folder() / f"{id}{SUFFIX}"
    try:
        status = path.stat()
    except OSError:
        raise _unknown(id) from None
    return path, (status.st_mtime_ns, status.st_size, status.st_ino)


@lru_cache(maxsize=16)
def _opened(path: Path, signature: tuple[int, int, int]) -> tuple[Entry, Reading]:
    from .readers import open_source

    facts, found = decode(open_source(path).data, str(path))
    if found.id != path.stem:
        raise InputError(f"holds the set {found.id!r}", where=str(path), mend="give the file its name back")
    known = Entry(
        found.id,
        str(found.info.get("kind", "")),
        facts["checksum"],
        facts["created"],
        facts["version"],
        found.sources,
        found.layout,
        path,
    )
    return known, found


@lru_cache(maxsize=16)
def _grid(path: Path, signature: tuple[int, int, int], solar: str) -> YieldSet:
    return _opened(path, signature)[1].grid(solar)


def _link(part: Path, path: Path) -> None:
    """Give a file its name, failing where another process was first."""
    try:
        os.link(part, path)
    except FileExistsError:
        raise
    except OSError:
        # file systems without hard links: an empty file claims the name
        os.close(os.open(path, os.O_CREAT | os.O_EXCL | os.O_WRONLY))
        os.replace(part, path)


def _sweep(home: Path) -> None:
    """Take away what killed processes left half written."""
    for part in home.glob(".*.part"):
        try:
            old = time.time() - part.stat().st_mtime > _STALE
            *_, host, pid, _, _ = part.name.split(".")
            if old or (host == _host() and not _runs(int(pid))):
                part.unlink(missing_ok=True)
        except (OSError, ValueError):
            continue


def _runs(pid: int) -> bool:
    if os.name != "posix":
        return True  # asking would end the process there
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _host() -> str:
    return re.sub(r"[^A-Za-z0-9_-]", "_", socket.gethostname()) or "host"


def _taken(id: str) -> InputError:
    return InputError(
        f"{id} is in the library already", mend="replace it with --replace, or give another --id"
    )


def _unknown(id: str) -> InputError:
    known = [p.stem for p in _files()]
    return InputError(
        f"{id!r} isn't in the library", mend=nearest(id, known) if known else "it holds nothing yet"
    )


def _unwritable(home: Path, error: OSError) -> InputError:
    return InputError(
        f"can't be written: {error.strerror or error}",
        where=str(home),
        mend=f"name another folder in {VARIABLE}",
    )
