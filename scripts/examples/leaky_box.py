"""A leaky box fed by a hand-off file: one zone of an invented dwarf galaxy; numpy and h5py only.

    python leaky_box.py yields.h5

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
        log = np.log10(self.metallicity)
        x = np.clip(np.log10(max(metallicity, 1e-30)), log[0], log[-1])
        i = int(np.clip(np.searchsorted(log, x) - 1, 0, len(log) - 2))
        w = (x - log[i]) / (log[i + 1] - log[i])
        return tuple((1 - w) * self.data[n][i] + w * self.data[n][i + 1] for n in ("net", "ejected"))

    def shares(self, age):
        """Position and weight of ages on the nodes, linear in log10 of age; nothing before the first."""
        log = np.log10(self.age)
        x = np.clip(np.log10(np.maximum(age, 1e-30)), log[0], log[-1])
        i = np.clip(np.searchsorted(log, x) - 1, 0, len(log) - 2)
        return i, (x - log[i]) / (log[i + 1] - log[i]), age >= self.age[0]


def read(path):
    """Read a hand-off file."""
    with h5py.File(path, "r") as file:
        names = {k: [one.decode() for one in file[k][:]] for k in ("species", "source")}
        data = {k: file[k][:] for k in NAMES}
        return Table(file["metallicity"][:], file["time"][:], names["species"], names["source"], data)


@dataclass
class Galaxy:
    """An invented dwarf galaxy: Msun and yr."""

    gas: float = 1e7
    star_formation: float = 3e-10  # of the gas, per yr
    inflow: float = 1e-3  # Msun per yr
    outflow: float = 1.0  # of the star-formation rate
    lost: dict = field(default_factory=dict)  # share of a source's ejecta that leaves at once
    until: float = 10e9
    steps: int = 200


def run(table, galaxy):
    """Follow the gas; returns masses by species over time and what went where."""
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
            i, w, on = table.shares(np.array([step - k - 1, step - k]) * dt)
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
        stars = galaxy.star_formation * whole * dt
        wind = min(galaxy.outflow * stars, 0.5 * whole)
        metals = sum(max(f, 0.0) for f, s in zip(fraction, names, strict=True) if s not in ("H", "He"))
        born.append(stars)
        composition.append(fraction)
        tables.append(table.at(metals))
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
    """Run the invented galaxy on a file, with and without losing the ejecta of Type Ia supernovae."""
    table = read(sys.argv[1])
    for share in (0.0, 0.8):
        out = run(table, Galaxy(lost={"thermonuclear": share}))
        oxygen, iron = (out["gas"][-1][table.species.index(s)] / out["mass"][-1] for s in ("O", "Fe"))
        print(f"Ia ejecta lost {share:.0%}: O {oxygen:.3e}, Fe {iron:.3e} by mass, O/Fe {oxygen / iron:.2f}")


if __name__ == "__main__":
    main()
