"""The one exception a user's input can raise, and help for mistyped names."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class InputError(ValueError):
    """Input that can't be used: one line saying what, where and how to mend it.

    Parameters
    ----------
    what : str
        What is wrong, with the offending value.
    where : str, optional
        File, row, key or argument in which it stands.
    mend : str, optional
        What the user can do about it.

    Examples
    --------
    >>> str(InputError("mass is negative: -1.0", where="models.csv row 3", mend="give masses in Msun"))
    'models.csv row 3: mass is negative: -1.0; give masses in Msun'
    """

    def __init__(self, what: str, *, where: str = "", mend: str = "") -> None:
        self.what, self.where, self.mend = what, where, mend
        line = f"{where}: {what}" if where else what
        if mend:
            line = f"{line}; {mend}"
        super().__init__(" ".join(line.split()))


def nearest(name: str, known: Iterable[str], count: int = 3) -> str:
    """Say which known names stand nearest to a mistyped one.

    Parameters
    ----------
    name : str
        The name that wasn't found.
    known : iterable of str
        The names that exist.
    count : int
        How many to offer at most.

    Returns
    -------
    str
        A phrase such as ``"did you mean C12, C13?"``, or the list of all known
        names where none is near.

    Examples
    --------
    >>> nearest("metalicity", ["metallicity", "ages", "species"])
    'did you mean metallicity?'
    >>> nearest("xyz", ["ages", "species"])
    'known: ages, species'
    """
    known = list(known)
    folded = {k.casefold(): k for k in known}
    close = difflib.get_close_matches(name.casefold(), list(folded), n=count, cutoff=0.6)
    if close:
        return f"did you mean {', '.join(folded[c] for c in close)}?"
    shown = known[:12]
    more = f" and {len(known) - len(shown)} more" if len(known) > len(shown) else ""
    return f"known: {', '.join(shown)}{more}"
