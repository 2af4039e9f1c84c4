"""Files that are written whole or not at all."""

from __future__ import annotations

import os
import secrets
import stat
from pathlib import Path

from .errors import InputError


def replace_file(path: str | Path, data: bytes) -> None:
    """Write a file whole, or leave what is there as it is.

    Parameters
    ----------
    path : str or Path
    data : bytes

    Raises
    ------
    InputError
        There is no such folder, it may not be written to, or the disk is full.
    """
    try:
        # through a link to what it points at, so that the link stays
        target = Path(os.path.realpath(path))
        beside = target.with_name(f".{target.name[:100]}.{secrets.token_hex(6)}.part")
        if target.exists() and not stat.S_ISREG(target.stat().st_mode):
            raise InputError("can't be written: not an ordinary file", where=str(path), mend="name a file")
        try:
            with beside.open("xb") as file:
                file.write(data)
                file.flush()
                os.fsync(file.fileno())
            if target.exists():
                beside.chmod(stat.S_IMODE(target.stat().st_mode))
            os.replace(beside, target)
        except BaseException:
            beside.unlink(missing_ok=True)
            raise
    except InputError:
        raise
    except FileNotFoundError:
        raise InputError(
            f"there is no folder {target.parent}", where=str(path), mend="make it first"
        ) from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError(f"can't be written: {reason}", where=str(path), mend="name another place") from None
