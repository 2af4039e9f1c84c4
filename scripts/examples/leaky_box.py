"""A leaky box fed by a hand-off file: one zone of an invented dwarf galaxy; numpy and h5py only.

    python leaky_box.py yields.h5
    python leaky_box.py yields.h5 scatter.h5

The second line draws galaxies of few stars: every generation takes populations at random from a
file of populations drawn star by star (`steelyard scatter --net`), so that the same history ends
with a spread of metallicities.

The galaxy and its numbers are invented. Gas flows in pristine, forms stars, and each source's
ejecta leave with a factor of their own. Metallicity is the sum of the file's elements but H and
He, so hand on all elements for real work.
"""

import sys
from dataclasses import dataclass, field

import h5py
import numpy as np

#: mass fractions at birth of a gas without metals (about the primordial helium, common practice)
PRISTINE = {"H": 0.75, "He": 0.25}

#: what of the file is used
NAMES = ("net", "ejected")


@dataclass
class Table:
    """Yields over metallicity and age, per Msun formed."""

    metallicity: np.ndarray
    age: np.ndarray
    species: list
    sources: list
    data: dict

    def at(self, metallicity):
        """Net yields and ejected mass by source at one metallicity: linear in log10 of it, ends held."""
        nodes = self.metallicity
        z = min(max(metallicity, nodes[0]), nodes[-1])
        i = int(np.clip(np.searchsorted(nodes, z) - 1, 0, len(nodes) - 2))
        lo, hi = nodes[i : i + 2]
        # next to a metallicity of 0 straight in metallicity itself, as the file says
        w = np.log(z / lo) / np.log(hi / lo) if lo > 0 else z / hi
        return tuple((1 - w) * self.data[n][i] + w * self.data[n][i + 1] for n in NAMES)


@dataclass
class Chance:
    """Populations drawn star by star: what each ejects more or less than their mean, Msun."""

    mass: float
    age: np.ndarray
    net: np.ndarray  # population, time, source, species
    ejected: np.ndarray  # population, time, source

    def departure(self, stars, age, random):
        """What a generation of this mass ejects more or less than its mean, per Msun formed, at ages."""
        count = max(1, round(stars / self.mass))
        drawn = random.integers(len(self.net), size=count)
        i, w, on = shares(self.age, age)
        found = []
        for values in (self.net, self.ejected):
            one = values[drawn].sum(axis=0).reshape(len(self.age), -1) / (count * self.mass)
            one = ((1 - w)[:, None] * one[i] + w[:, None] * one[i + 1]) * on[:, None]
            found.append(one.reshape(len(age), *values.shape[2:]))
        return found


def shares(nodes, age):
    """Position and weight of ages on nodes, linear in log10 of age; nothing before the first."""
    log = np.log10(nodes)
    x = np.clip(np.log10(np.maximum(age, 1e-30)), log[0], log[-1])
    i = np.clip(np.searchsorted(log, x) - 1, 0, len(log) - 2)
    return i, (x - log[i]) / (log[i + 1] - log[i]), age >= nodes[0]


def read(path):
    """Read a hand-off file."""
    with h5py.File(path, "r") as file:
        names = {k: [one.decode() for one in file[k][:]] for k in ("species", "source")}
        data = {k: file[k][:] for k in NAMES}
        return Table(file["metallicity"][:], file["time"][:], names["species"], names["source"], data)


def read_chance(path, table):
    """Read a file of populations drawn star by star; its species and sources are those of the table."""
    with h5py.File(path, "r") as file:
        species, sources = ([one.decode() for one in file[k][:]] for k in ("species", "source"))
        if (species, sources) != (table.species, table.sources) or file.attrs["convention"] != b"net":
            raise SystemExit(f"{path}: draw net yields of the same population and species")
        net, ejected = file["yields"][:], file["ejected"][:]
        means = net.mean(axis=0), ejected.mean(axis=0)
        return Chance(float(file.attrs["mass"]), file["time"][:], net - means[0], ejected - means[1])


@dataclass
class Galaxy:
    """An invented dwarf galaxy: Msun and yr."""

    gas: float = 1e7
    star_formation: float = 3e-10  # of the gas, per yr
    history: tuple = ((2e9, 2.0), (6e9, 0.3), (1e11, 1.0))  # until when, yr, how many times that
    inflow: float = 1e-3  # Msun per yr
    outflow: float = 1.0  # of the star-formation rate
    lost: dict = field(default_factory=dict)  # share of a source's ejecta that leaves at once
    until: float = 10e9
    steps: int = 200


def run(table, galaxy, chance=None, seed=0):
    """Follow the gas; returns masses by species over time and what went where."""
    random = np.random.default_rng(seed)
    names = table.species
    count, dt = galaxy.steps, galaxy.until / galaxy.steps
    pristine = np.array([PRISTINE.get(s, 0.0) for s in names])
    lost = np.array([galaxy.lost.get(s, 0.0) for s in table.sources])
    gas, whole = galaxy.gas * pristine, galaxy.gas
    locked, left, came = np.zeros(len(names)), np.zeros(len(names)), gas.copy()
    made = np.zeros(len(names))
    born, tables, composition, path = [], [], [], [gas.copy()]
    mass = [whole]
    for step in range(count):
        # what older generations eject during this step: unprocessed matter and net yields
        for k in range(step):
            net, ejected = tables[k]
            i, w, on = shares(table.age, np.array([step - k - 1, step - k]) * dt)
            u = [
                ((1 - w)[:, None] * v[i].reshape(2, -1) + w[:, None] * v[i + 1].reshape(2, -1)) * on[:, None]
                for v in (net, ejected)
            ]
            net_step = born[k] * np.diff(u[0], axis=0)[0].reshape(len(table.sources), -1)
            back = born[k] * np.diff(u[1], axis=0)[0]
            ejecta = net_step + back[:, None] * composition[k]
            made += net_step.sum(axis=0)
            locked -= (back[:, None] * composition[k]).sum(axis=0)
            left += (lost[:, None] * ejecta).sum(axis=0)
            gas += ((1 - lost)[:, None] * ejecta).sum(axis=0)
            whole += ((1 - lost) * back).sum()
        fraction = gas / whole
        vigour = next(factor for end, factor in galaxy.history if (step + 0.5) * dt < end)
        stars = galaxy.star_formation * vigour * whole * dt
        wind = min(galaxy.outflow * stars, 0.5 * whole)
        metals = sum(max(f, 0.0) for f, s in zip(fraction, names, strict=True) if s not in ("H", "He"))
        born.append(stars)
        composition.append(fraction)
        mean = table.at(metals)
        more = chance.departure(stars, table.age, random) if chance else (0.0, 0.0)
        tables.append(tuple(a + b for a, b in zip(mean, more, strict=True)))
        came += galaxy.inflow * dt * pristine
        gas = gas + galaxy.inflow * dt * pristine - (stars + wind) * fraction
        whole += galaxy.inflow * dt - stars - wind
        locked += stars * fraction
        left += wind * fraction
        path.append(gas.copy())
        mass.append(whole)
    return {
        "species": names,
        "gas": np.array(path),
        "mass": np.array(mass),
        "locked": locked,
        "left": left,
        "came": came,
        "made": made,
    }


def main():
    """Run the invented galaxy with and without ejecta of Type Ia supernovae, then small ones by chance."""
    table = read(sys.argv[1])
    for share in (0.0, 0.8):
        out = run(table, Galaxy(lost={"thermonuclear": share}))
        oxygen, iron = (out["gas"][-1][table.species.index(s)] / out["mass"][-1] for s in ("O", "Fe"))
        print(f"Ia ejecta lost {share:.0%}: O {oxygen:.3e}, Fe {iron:.3e} by mass, O/Fe {oxygen / iron:.2f}")
    if len(sys.argv) > 2:
        chance = read_chance(sys.argv[2], table)
        small = Galaxy(gas=3e4, inflow=3e-6, steps=50)
        ends = [run(table, small, chance, seed)["gas"][-1] for seed in range(30)]
        iron = np.log10([gas[table.species.index("Fe")] / gas[table.species.index("H")] for gas in ends])
        print(f"30 galaxies of {small.gas:g} Msun: [Fe/H] spread by {iron.std(ddof=1):.2f} dex")


if __name__ == "__main__":
    main()
