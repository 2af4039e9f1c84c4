"""Patterns with named gaps, ``Z={metallicity} M={mass}``, that read headings, file names and column names."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import cached_property

from ..errors import InputError

#: gaps of these names hold a number
NUMBERS = frozenset(
    {"mass", "metallicity", "remnant", "ejected", "final_mass", "wind", "lifetime", "birth_hydrogen"}
)

_GAP = re.compile(r"\{([^{}]*)\}")
_NAME = re.compile(r"[A-Za-z_][A-Za-z_0-9]*")
_NUMBER = re.compile(r"[-+\u2212]?(?:\d+\.?\d*|\.\d+)(?:[eEdD][-+\u2212]?\d+)?")
_WORD = re.compile(r"[^\s,;=]+")
_ANYTHING = re.compile(r".*")
_MOST_GAPS, _LONGEST = 8, 200


@dataclass(frozen=True)
class Template:
    """A text with named gaps.

    Parameters
    ----------
    text : str
        ``{name}`` is a gap that holds a word, or a number where the name is that of a figure of
        the model (mass, metallicity, remnant, …); ``{}`` is a stretch of any text. White space
        matches any white space, letters match in either case.
    where : str
        Key of the layout, for errors.

    Examples
    --------
    >>> t = Template("{mass}M Z={metallicity} {massloss}")
    >>> t.match("7.0M  Z=0.02 VW93 ")
    {'mass': '7.0', 'metallicity': '0.02', 'massloss': 'VW93'}
    >>> t.match("C12 1.0") is None
    True
    """

    text: str
    where: str = ""

    def __post_init__(self) -> None:
        names = [g for g in self.gaps if g]
        if len(self.text) > _LONGEST or len(self.gaps) > _MOST_GAPS:
            raise InputError(
                f"pattern with more than {_MOST_GAPS} gaps or {_LONGEST} characters",
                where=self.where,
                mend="leave gaps out",
            )
        if re.search(r"\{[^{}]+\}\{[^{}]+\}", self.text):
            raise InputError(
                f"two gaps touch in {self.text!r}", where=self.where, mend="put text between them"
            )
        for name in names:
            if not _NAME.fullmatch(name) or names.count(name) > 1:
                raise InputError(
                    f"{{{name}}} in {self.text!r} can't be read",
                    where=self.where,
                    mend="use each name once, letters and _ only",
                )

    @property
    def gaps(self) -> tuple[str, ...]:
        """Names of the gaps in order, empty for ``{}``."""
        return tuple(_GAP.findall(self.text))

    @property
    def fields(self) -> tuple[str, ...]:
        """Names of the named gaps."""
        return tuple(g for g in self.gaps if g)

    @cached_property
    def _parts(self) -> tuple[tuple[str | None, re.Pattern[str]], ...]:
        """Texts (without a name) and gaps (with one) in turn, and what each takes."""
        parts: list[tuple[str | None, re.Pattern[str]]] = []
        for i, part in enumerate(_GAP.split(self.text.strip())):
            if i % 2:
                parts.append((part, _ANYTHING if not part else _NUMBER if part in NUMBERS else _WORD))
            elif part:
                literal = r"\s*".join(re.escape(piece) for piece in re.split(r"\s+", part))
                parts.append((None, re.compile(literal, re.IGNORECASE)))
        return tuple(parts)

    def match(self, text: str) -> dict[str, str] | None:
        """Return what stands in the gaps, or None where the text is another."""
        return self._from(0, 0, " ".join(text.split())[:_LONGEST], set())

    def _from(self, k: int, at: int, text: str, failed: set[tuple[int, int]]) -> dict[str, str] | None:
        """Match from a part and a place on; places that failed once aren't tried again, so that it ends."""
        if k == len(self._parts):
            return {} if at == len(text) else None
        if (k, at) in failed:
            return None
        name, pattern = self._parts[k]
        taken = pattern.match(text, at)
        if taken and name is None:
            found = self._from(k + 1, taken.end(), text, failed)
            if found is not None:
                return found
        elif taken:
            # a number takes all its digits, anything else as little as the rest allows
            longest_first = pattern is _NUMBER
            ends = range(at + (1 if name else 0), taken.end() + 1)
            for end in reversed(ends) if longest_first else ends:
                if longest_first and not _NUMBER.fullmatch(text, at, end):
                    continue
                found = self._from(k + 1, end, text, failed)
                if found is not None:
                    return ({name: text[at:end]} if name else {}) | found
        failed.add((k, at))
        return None
