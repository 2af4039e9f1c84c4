"""What an audit reports."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass
from typing import Any, Literal

from ..errors import InputError, nearest

Severity = Literal["note", "warning", "error"]

#: in order of weight: to know, to look at, not to be used as it stands
SEVERITIES: tuple[Severity, ...] = ("note", "warning", "error")


@dataclass(frozen=True)
class Finding:
    """One thing that an audit found.

    Attributes
    ----------
    severity : {"note", "warning", "error"}
        To know, to look at before use, not to be used as it stands.
    check : str
        Name of the check.
    set : str
        Id of the yield set.
    explanation : str
        One plain sentence with figures.
    advice : str
        What to do.
    metallicity, mass : float, optional
        The model; without a mass the whole slice, without both the whole set.
    species : tuple of str
        What is concerned, the worst first; empty for the model as a whole.
    size : float
        How large it is, in `unit`.
    unit : str
        ``"Msun"``, or ``"dex"`` for a factor in log10, or empty for a pure number.
    """

    severity: Severity
    check: str
    set: str
    explanation: str
    advice: str
    metallicity: float | None = None
    mass: float | None = None
    species: tuple[str, ...] = ()
    size: float = 0.0
    unit: str = ""

    @property
    def model(self) -> str:
        """The model in words."""
        if self.metallicity is None:
            return "all models"
        if self.mass is None:
            return f"Z = {self.metallicity:g}"
        return f"{self.mass:g} Msun, Z = {self.metallicity:g}"

    def to_dict(self) -> dict[str, Any]:
        """Return the finding as plain values, for JSON."""
        return {**asdict(self), "species": list(self.species)}


def at_least(findings: Iterable[Finding], severity: str) -> list[Finding]:
    """Return the findings of a severity or a heavier one.

    Parameters
    ----------
    findings : iterable of Finding
    severity : {"note", "warning", "error"}

    Returns
    -------
    list of Finding

    Raises
    ------
    InputError
        No such severity.
    """
    if severity not in SEVERITIES:
        raise InputError(f"severity {severity!r} isn't known", mend=nearest(severity, SEVERITIES))
    lowest = SEVERITIES.index(severity)
    return [f for f in findings if SEVERITIES.index(f.severity) >= lowest]


def listed(names: Sequence[str], most: int = 8) -> str:
    """Write names in a row, the last of many only counted."""
    more = f" and {len(names) - most} more" if len(names) > most else ""
    return ", ".join(names[:most]) + more
