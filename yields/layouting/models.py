"""Models as gathered from sheets: texts as printed, and the names of their species."""

from __future__ import annotations

from dataclasses import dataclass, field

from ..errors import InputError
from ..nuclides import parse
from .declared import Layout

#: convention, and which of the columns that are summed
Place = tuple[str, int]


@dataclass
class Model:
    """One model as gathered: texts as printed."""

    where: str
    fields: dict[str, str] = field(default_factory=dict)
    values: dict[Place, dict[str, str]] = field(default_factory=dict)

    @property
    def label(self) -> str:
        """The model in words, for messages."""
        parts = []
        if "mass" in self.fields:
            parts.append(f"{self.fields['mass']} Msun")
        if "metallicity" in self.fields:
            parts.append(f"Z = {self.fields['metallicity']}")
        if self.fields.get("variant"):
            parts.append(self.fields["variant"])
        return ", ".join(parts) or self.where


@dataclass
class Gathered:
    """All models of some files."""

    models: list[Model]
    species: list[str]
    units: dict[str, str]
    warnings: list[str]


class Names:
    """Printed names of species and what they become; None for what isn't read."""

    def __init__(self, layout: Layout) -> None:
        self.layout = layout
        self.known: dict[str, str | None] = {}
        self.order: dict[str, None] = {}

    def __call__(self, printed: str, where: str) -> str | None:
        """Return what a printed name becomes."""
        if printed not in self.known:
            self.known[printed] = self._read(printed, where)
            if self.known[printed] is not None:
                self.order[self.known[printed]] = None
        return self.known[printed]

    def _read(self, printed: str, where: str) -> str | None:
        layout = self.layout
        if printed in layout.ignore_species:
            return None
        name = layout.rename.get(printed, printed)
        try:
            canonical = parse(name).name
        except InputError as error:
            if name in layout.rest or printed in layout.rest:
                return name
            mend = f"{error.mend}; or list it under [rest], [ignore] or [rename] of the layout"
            raise InputError(error.what, where=where, mend=mend) from None
        return None if canonical in layout.ignore_species else canonical
