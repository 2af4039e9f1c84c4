"""A star table laid out so that each particle finds its rows side by side in memory."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from .table import Late, StarTable

Array = NDArray[np.float64]
Whole = NDArray[np.int_]

#: yr; younger particles are taken to be this old, long before any star dies
YOUNGEST = 1.0

#: panels with a smaller ratio of their ends are interpolated with powers of Z
NARROW = 1.2

#: natural log of an age factor that no particle bridges: the length of the cells without an end
ENDLESS = 1e3


class Metallicities:
    """Where a metallicity lies among the rows of a table.

    Parameters
    ----------
    table : StarTable

    Attributes
    ----------
    rows : ndarray of int, shape (q, 4)
        The rows of each panel; then of each point, four times the same.
    """

    def __init__(self, table: StarTable) -> None:
        self._edge, self._straight = table.edge, table.straight
        panels = len(table.straight)
        points = table.point[table.point >= 0]
        self.rows = np.concatenate(
            [np.arange(4 * panels).reshape(-1, 4), np.repeat(points, 4).reshape(-1, 4)]
        )
        # by edge the panel that stands for its point
        self._point = np.full(len(table.edge), -1)
        self._point[table.point >= 0] = panels + np.arange(len(points))
        at = table.metallicity[: 4 * panels]
        values = functions(at, *(np.repeat(x, 4) for x in (self._edge[:-1], self._edge[1:], self._straight)))
        cardinal = np.linalg.inv(np.moveaxis(values.reshape(4, panels, 4), 0, 2))
        alone = np.zeros((len(points), 4, 4))
        alone[:, 0, 0] = 1.0
        # by panel, function and row: what a function counts for a row
        self._cardinal = np.concatenate([np.swapaxes(cardinal, 1, 2), alone])

    def place(self, metallicity: Array) -> tuple[Whole, Array]:
        """Return the panel of each metallicity, shape (n,), and how much its rows count, shape (n, 4)."""
        found = np.searchsorted(self._edge, metallicity, side="left")
        panel = np.maximum(found - 1, 0)
        values = functions(metallicity, self._edge[panel], self._edge[panel + 1], self._straight[panel])
        own = np.flatnonzero(self._edge[found] == metallicity)
        own = own[self._point[found[own]] >= 0]
        panel[own] = self._point[found[own]]
        values[:, own] = np.array([1.0, 0.0, 0.0, 0.0])[:, None]
        return panel, np.einsum("fn,nrf->nr", values, self._cardinal[panel])


def functions(metallicity: Array, lo: Array, hi: Array, straight: NDArray[np.bool_]) -> Array:
    """Return the four functions of metallicity that a panel is interpolated with, shape (4, n)."""
    v = (metallicity - lo) / (hi - lo)
    # next to Z = 0 there is no log, and in narrow panels it is too near a straight line
    u = v * v
    by_log = np.flatnonzero(~straight)
    u[by_log] = np.log(metallicity[by_log] / lo[by_log]) / np.log(hi[by_log] / lo[by_log])
    return np.stack([np.ones_like(v), u, v, u * v])


def rows_between(lo: float, hi: float) -> tuple[Array, bool]:
    """Return the metallicities of a panel's rows, shape (4,), and whether powers of Z serve it best."""
    straight = lo == 0 or hi < NARROW * lo
    share = (1 - np.cos(np.pi * np.arange(4) / 3)) / 2
    return (lo + share * (hi - lo) if straight else lo * (hi / lo) ** share), straight


class LateLookup:
    """Events of one delayed source by log age.

    Parameters
    ----------
    late : Late
    """

    def __init__(self, late: Late) -> None:
        self._inner = late.log_age
        self._bound = np.concatenate([[-ENDLESS], late.log_age, [ENDLESS]])
        self._before = np.concatenate([[0.0], late.fraction])
        self._pace = np.concatenate([[0.0], np.diff(late.fraction), [0.0]]) / np.diff(self._bound)

    def between(self, log_start: Array, log_step: Array) -> Array:
        """Return the fraction of events from log ages on for steps of them, shape (n,)."""
        start = np.searchsorted(self._inner, log_start, side="right")
        left = self._bound[start + 1] - log_start
        out = self._pace[start] * np.minimum(left, log_step)
        over = np.flatnonzero(log_step > left)
        if len(over):
            start, more = start[over] + 1, log_step[over] - left[over]
            log_end = log_start[over] + log_step[over]
            end = np.maximum(np.searchsorted(self._inner, log_end, side="right"), start)
            run = np.where(end == start, more, log_end - self._bound[end])
            out[over] += self._before[end] - self._before[start] + self._pace[end] * run
        return out


class Lookup:
    """The rows of a table, or of one of its sources, side by side for each panel and cell.

    Parameters
    ----------
    table : StarTable
    metallicities : Metallicities
    source : str or None
    width : int
        How many columns.
    """

    def __init__(
        self, table: StarTable, metallicities: Metallicities, source: str | None, width: int
    ) -> None:
        self._metallicities = metallicities
        rows = metallicities.rows
        step, bend = table.step[..., :width], table.bend[..., :width]
        if source is not None:
            mine = (table.owner == table.sources.index(source))[..., None]
            step, bend = step * mine, bend * mine
        before = np.zeros_like(step)
        np.cumsum(step[:, :-1], axis=1, out=before[:, 1:])
        self._cells = step.shape[1]
        # by panel, cell, step or bend, row
        inside = np.stack([step[rows], bend[rows]], axis=1).transpose(0, 3, 1, 2, 4)
        blocks = [inside.reshape(-1, width), before[rows].swapaxes(1, 2).reshape(-1, width)]
        self._before = len(blocks[0])
        self._late: list[tuple[LateLookup, int, bool]] = []
        for name, late in table.late.items():
            if source in (None, name):
                fixed = len(late.rows) == 1
                self._late.append((LateLookup(late), sum(map(len, blocks)), fixed))
                blocks.append(late.rows[:, :width] if fixed else late.rows[rows, :width].reshape(-1, width))
        self._matrix = np.concatenate(blocks)
        # a power of two of bounds, so that the search needs no look at its ends
        self._reach = 1 << int(self._cells).bit_length()
        ages = table.log_age[rows].swapaxes(1, 2)
        self._bounds = np.concatenate(
            [
                ages[:, :1] - ENDLESS,
                ages,
                np.repeat(ages[:, -1:] + ENDLESS, self._reach - ages.shape[1] - 1, axis=1),
            ],
            axis=1,
        ).reshape(-1, 4)

    def eject(self, age: Array, metallicity: Array, dt: Array, mass: Array) -> Array:
        """Return what particles eject, shape (n, width), Msun."""
        panel, share = self._metallicities.place(metallicity)
        young = np.maximum(age, YOUNGEST)
        log_start = np.log(young)
        log_step = np.log1p(np.maximum(dt - (young - age), 0.0) / young)
        first = panel * self._reach
        start = self._cell(first, share, log_start)
        lower, upper = self._bound(first + start, share), self._bound(first + start + 1, share)
        left, length = upper - log_start, upper - lower
        over = np.flatnonzero(log_step > left)
        # a step inside a cell is taken by its length, not as a difference of what lies before its ends
        part, x = np.minimum(left, log_step) / length, (log_start - lower) / length
        counts = share * mass[:, None]
        weights = [part[:, None] * counts, (part * (1 - 2 * x - part))[:, None] * counts]
        index = [(8 * (panel * self._cells + start))[:, None] + np.arange(8)]
        for late, base, fixed in self._late:
            number = late.between(log_start, log_step)
            if fixed:
                weights.append((number * mass)[:, None])
                index.append(np.full((len(mass), 1), base))
            else:
                weights.append(number[:, None] * counts)
                index.append((base + 4 * panel)[:, None] + np.arange(4))
        out = self._product(weights, index)
        if len(over):
            log_end = log_start[over] + log_step[over]
            more = log_step[over] - left[over]
            out[over] += self._beyond(panel[over], share[over], mass[over], start[over] + 1, log_end, more)
        return out

    def _beyond(
        self, panel: Whole, share: Array, mass: Array, start: Whole, log_end: Array, more: Array
    ) -> Array:
        """What is ejected from the beginning of a cell until a log age."""
        first = panel * self._reach
        end = np.maximum(self._cell(first, share, log_end), start)
        lower, upper = self._bound(first + end, share), self._bound(first + end + 1, share)
        # in the next cell what is left of the step, so that the two parts add up to it exactly
        x = np.where(end == start, more, log_end - lower) / (upper - lower)
        counts = share * mass[:, None]
        cell = panel * self._cells
        weights = [x[:, None] * counts, (x * (1 - x))[:, None] * counts]
        out = self._product(weights, [(8 * (cell + end))[:, None] + np.arange(8)])
        apart = np.flatnonzero(end > start)
        if len(apart):
            base = self._before + 4 * cell[apart]
            index = [(base + 4 * c[apart])[:, None] + np.arange(4) for c in (end, start)]
            out[apart] += self._product([counts[apart], -counts[apart]], index)
        return out

    def _bound(self, at: Whole, share: Array) -> Array:
        return np.einsum("nr,nr->n", self._bounds.take(at, axis=0), share)

    def _cell(self, first: Whole, share: Array, log_age: Array) -> Whole:
        """How many bounds have been passed."""
        found = np.zeros(len(first), dtype=np.int64)
        stride = self._reach >> 1
        while stride:
            passed = self._bound(first + (found + stride), share) <= log_age
            found += stride * passed
            stride >>= 1
        return found

    def _product(self, weights: list[Array], index: list[Whole]) -> Array:
        from scipy.sparse import csr_array

        data = np.concatenate(weights, axis=1)
        n, many = data.shape
        indices = np.concatenate(index, axis=1).astype(np.int32)
        ends = np.arange(0, (n + 1) * many, many, dtype=np.int32)
        return csr_array((data.ravel(), indices.ravel(), ends), shape=(n, len(self._matrix))) @ self._matrix
