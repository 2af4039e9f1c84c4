"""What a file of population yields holds, whatever its format: dimensions, datasets, origin."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..provenance import FORMAT, attributes
from ..results import PopulationYields
from .labelled import Entry

if TYPE_CHECKING:
    from ..spread import YieldErrors

Array = NDArray[Any]

FORMAT_VERSION = 1

_ATTRIBUTES = {"population": str, "sets": tuple, "set_checksums": tuple, "policies": tuple, "notes": tuple}

_MEND = "give a file as `steelyard weigh` or `steelyard handoff` wrote it"

_BY_SPECIES = ("metallicity", "time", "source", "species")
_BY_SOURCE = _BY_SPECIES[:3]
_BY_TIME = _BY_SPECIES[:2]

#: the dimension scales of a file, in the order they are written
SCALES: Mapping[str, Entry] = {
    "metallicity": Entry(("metallicity",), "1", "mass fraction of metals at birth"),
    "time": Entry(("time",), "yr", "age of the population"),
    "source": Entry(("source",), "1", "who ejects"),
    "species": Entry(("species",), "1", "elements such as C, nuclides such as C12"),
    "remnant_kind": Entry(("remnant_kind",), "1", "kind of remnant"),
    "event": Entry(("event",), "1", "kind of event"),
}

#: the datasets of a file
DATASETS: Mapping[str, Entry] = {
    "total": Entry(_BY_SPECIES, "Msun/Msun", "total yield up to an age, per Msun formed"),
    "net": Entry(_BY_SPECIES, "Msun/Msun", "net yield up to an age, per Msun formed; may be negative"),
    "total_rate": Entry(_BY_SPECIES, "Msun/Msun/yr", "total yield per time at an age, per Msun formed"),
    "net_rate": Entry(_BY_SPECIES, "Msun/Msun/yr", "net yield per time at an age, per Msun formed"),
    "followed": Entry(
        ("source", "species"), "1", "1 where the source follows the species; 0: missing, not zero"
    ),
    "rest_total": Entry(_BY_SOURCE, "Msun/Msun", "ejected mass of no species that the sets follow"),
    "rest_net": Entry(_BY_SOURCE, "Msun/Msun", "net yield of no species that the sets follow"),
    "ejected": Entry(_BY_SOURCE, "Msun/Msun", "all mass ejected up to an age, rest included"),
    "ejected_rate": Entry(_BY_SOURCE, "Msun/Msun/yr", "all mass ejected per time at an age"),
    "living": Entry(_BY_TIME, "Msun/Msun", "mass in living stars; living + remnants + returned = 1"),
    "returned": Entry(_BY_TIME, "Msun/Msun", "mass returned up to an age: ejected over sources"),
    "remnants": Entry((*_BY_TIME, "remnant_kind"), "Msun/Msun", "mass in remnants"),
    "events": Entry((*_BY_TIME, "event"), "1/Msun", "number of events up to an age, per Msun formed"),
    "event_rates": Entry((*_BY_TIME, "event"), "1/Msun/yr", "number of events per time at an age"),
}

#: further datasets of a file with errors, whose attribute ``spread`` states them
ERRORS: Mapping[str, Entry] = {
    "covariance": Entry(
        ("time", "species", "species"),
        "(Msun/Msun)^2",
        "covariance of yields over all sources, from the errors stated in attribute spread; the same for"
        " total and net",
    ),
    "error": Entry(
        ("time", "source", "species"), "Msun/Msun", "standard deviation of a source's yield; total and net"
    ),
    "mean_shift": Entry(
        ("time", "species"), "Msun/Msun", "mean of the yields over all sources less the yields themselves"
    ),
}


@dataclass(frozen=True, eq=False)
class StoredYields:
    """A result as its file holds it, at one metallicity or more.

    Attributes
    ----------
    population : str
        The population file it was made from, TOML.
    metallicity : ndarray, shape (z,)
    ages : ndarray, shape (t,)
        yr.
    species, sources, remnant_kinds, events : tuple of str
    arrays : dict of ndarray
        By name; dimensions and units as in `DATASETS`, and in `ERRORS` where the file has errors.
    attributes : dict
        Attributes of the file: text, numbers, tuples of text.
    """

    population: str
    metallicity: Array
    ages: Array
    species: tuple[str, ...]
    sources: tuple[str, ...]
    remnant_kinds: tuple[str, ...]
    events: tuple[str, ...]
    arrays: dict[str, Array]
    attributes: dict[str, Any]

    @property
    def scales(self) -> dict[str, Any]:
        """The dimension scales by name, as in `SCALES`."""
        held = (self.metallicity, self.ages, self.sources, self.species, self.remnant_kinds, self.events)
        return dict(zip(SCALES, held, strict=True))

    @property
    def entries(self) -> dict[str, Entry]:
        """What the arrays are, as in `DATASETS` and `ERRORS`."""
        return {**DATASETS, **(ERRORS if "spread" in self.attributes else {})}


def stored(
    results: PopulationYields | Sequence[PopulationYields],
    errors: YieldErrors | None = None,
    told: Mapping[str, Any] | None = None,
) -> StoredYields:
    """Return results as a file holds them.

    Parameters
    ----------
    results : PopulationYields, or sequence of PopulationYields
        One population at one metallicity, or at several (increasing) and the same ages.
    errors : YieldErrors, optional
        Of the one result.
    told : mapping, optional
        More attributes, or others.

    Raises
    ------
    InputError
        Results that don't belong together.

    Examples
    --------
    >>> from steelyard.integrate import Population, StellarSource
    >>> stars = [Population(z, [StellarSource("agb", ["karakas-2010"])]) for z in (0.01, 0.02)]
    >>> stored([one.weigh(["1 Gyr"]) for one in stars]).arrays["living"].shape
    (2, 1)
    """
    many = [results] if isinstance(results, PopulationYields) else list(results)
    first = many[0]
    z = np.array([one.population.metallicity for one in many])
    names = ("species", "sources", "events", "remnants_by_kind")
    if np.any(np.diff(z) <= 0) or any(
        tuple(getattr(one, name)) != tuple(getattr(first, name)) for one in many for name in names
    ):
        raise InputError(
            "results in one file are of one population, at increasing metallicities",
            mend="weigh copies of it that differ in metallicity only",
        )
    if any(not np.array_equal(one.ages, first.ages) for one in many):
        raise InputError("results in one file are at the same ages", mend="weigh them at one list of ages")
    parts = [_arrays(one) for one in many]
    arrays = {
        name: np.concatenate([p[name] for p in parts])
        if entry.dims[0] == "metallicity"
        # what is followed at some metallicities only isn't followed
        else np.min([p[name] for p in parts], axis=0)
        for name, entry in DATASETS.items()
    }
    found = attributes(many[-1]) | {name: _common(many, z, name) for name in ("policies", "notes")}
    if len(many) > 1:
        found["summary"] = f"Z = {z[0]:g} to {z[-1]:g};{found['summary'].partition(';')[2]}"
    if errors is not None:
        arrays |= error_arrays(errors)
        found["spread"] = errors.spread.to_toml()
    found |= {"format_version": FORMAT_VERSION} | dict(told or {})
    return StoredYields(
        found["population"],
        z,
        np.asarray(first.ages, dtype=float),
        tuple(first.species),
        tuple(first.sources),
        tuple(first.remnants_by_kind),
        tuple(first.events),
        arrays,
        found,
    )


def _common(many: Sequence[PopulationYields], z: Array, name: str) -> tuple[str, ...]:
    """Lines of origin that hold at every metallicity, and for the others where they hold."""
    lines = [attributes(one)[name] for one in many]
    out = []
    for line in dict.fromkeys(text for one in lines for text in one):
        holds = [line in one for one in lines]
        runs = [list(run) for has, run in groupby(range(len(z)), holds.__getitem__) if has]
        if len(runs[0]) < len(z):
            spans = (f"{z[r[0]]:g}" if len(r) == 1 else f"{z[r[0]]:g} to {z[r[-1]]:g}" for r in runs)
            line = f"{line} (at Z = {', '.join(spans)})"
        out.append(line)
    return tuple(out)


def _arrays(result: PopulationYields) -> dict[str, Array]:
    """Every dataset of the file; one metallicity long."""
    t, columns = len(result.ages), result.columns

    def kinds(parts: Mapping[str, Array]) -> Array:
        return np.stack([*parts.values()], axis=-1) if parts else np.zeros((t, 0))

    by_source = {
        "total": result.total,
        "net": result.net,
        "total_rate": result.total_rate,
        "net_rate": result.net_rate,
        "rest_total": result.cumulative[..., columns.account("rest_total")],
        "rest_net": result.cumulative[..., columns.account("rest_net")],
        "ejected": result.ejected,
        "ejected_rate": result.rates[..., columns.account("ejected")],
    }
    by_time = {
        "living": result.living,
        "returned": result.returned,
        "remnants": kinds(result.remnants_by_kind),
        "events": kinds(result.events),
        "event_rates": kinds(result.event_rates),
    }
    found = {name: np.moveaxis(values, 0, 1)[None] for name, values in by_source.items()}
    found |= {name: values[None] for name, values in by_time.items()}
    return found | {"followed": result.followed.astype(np.uint8)}


def error_arrays(errors: YieldErrors) -> dict[str, Array]:
    """Return the datasets of `ERRORS`."""
    by_source = np.moveaxis(errors.by_source, 0, 1)
    return {"covariance": errors.covariance, "error": by_source, "mean_shift": errors.shift}


def check_origin(told: Mapping[str, Any], where: str) -> None:
    """Refuse what a file tells of itself where it isn't one of population yields, or lacks something.

    Raises
    ------
    InputError
        It is so.
    """
    if told.get("format") != FORMAT:
        raise InputError("this file holds no population yields", where=where, mend=_MEND)
    if told.get("format_version") != FORMAT_VERSION:
        raise InputError(
            f"format_version is {told.get('format_version')!r}, not {FORMAT_VERSION}",
            where=where,
            mend="read it with the version of steelyard that wrote it, or weigh again",
        )
    for name, kind in _ATTRIBUTES.items():
        if not isinstance(told.get(name), kind):
            raise InputError(f"attribute {name!r} is missing", where=where, mend=_MEND)
    if not isinstance(told.get("spread", ""), str):
        raise InputError("attribute 'spread' holds no text", where=where, mend=_MEND)


def gathered(
    told: Mapping[str, Any], scales: Mapping[str, Any], arrays: Mapping[str, Array], where: str
) -> StoredYields:
    """Return what was read from a file as one thing, after a look at its shapes.

    Parameters
    ----------
    told, scales, arrays : mapping
        Attributes, dimension scales and datasets by name.
    where : str
        The file, for messages.

    Raises
    ------
    InputError
        An array that is missing or has another shape than its scales.
    """
    check_origin(told, where)
    lengths = {name: len(scales[name]) for name in SCALES}
    wanted = {**DATASETS, **(ERRORS if "spread" in told else {})}
    for name, entry in wanted.items():
        if name not in arrays:
            raise InputError(f"dataset {name!r} is missing", where=where, mend=_MEND)
        shape = tuple(lengths[dim] for dim in entry.dims)
        if arrays[name].shape != shape:
            raise InputError(
                f"dataset {name!r} has shape {arrays[name].shape}, not {shape}", where=where, mend=_MEND
            )
    return StoredYields(
        told["population"],
        *(np.asarray(scales[name], dtype=float) for name in ("metallicity", "time")),
        *(tuple(scales[name]) for name in ("species", "source", "remnant_kind", "event")),
        arrays={name: arrays[name] for name in wanted},
        attributes=dict(told),
    )
