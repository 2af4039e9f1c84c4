"""Star tables: the bound on their error, and that steps add up and keep their digits."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource
from steelyard.integrate.stars import StarTable, star_table
from steelyard.yields.errors import InputError

IA = {"form": "power-law", "slope": -1.1, "limits": ["40 Myr", "13.8 Gyr"]}


def population(**changes):
    sources = [
        StellarSource("agb", ["karakas-2010", "doherty-2014"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, IA),
    ]
    return Population(0.014, sources, **{"joins": [Join(("agb", "core-collapse"))], **changes})


@pytest.fixture(scope="module")
def table():
    return star_table(population(), error=1e-3)


def worst(table, made_from, metallicities, ages):
    """Largest error of cumulative yields by source, in units of the bound, against weighing afresh."""
    found = 0.0
    for z in metallicities:
        result = replace(made_from, metallicity=float(z)).weigh(ages)
        dense = replace(made_from, metallicity=float(z)).weigh(np.geomspace(1e6, table.until, 4000))
        values = {"total": result.total, "net": result.net}[table.convention]
        track = {"total": dense.total, "net": dense.net}[table.convention]
        for i, source in enumerate(table.sources):
            got = table.eject(0.0, z, ages, source=source, accounts=True)
            moved = np.abs(np.diff(track[i], axis=0, prepend=0.0)).sum(axis=0)
            species = got[:, : len(table.species)]
            found = max(found, (np.abs(species - values[i]) / (moved + 1e-12)).max())
            found = max(found, (np.abs(got[:, len(table.species)] - result.ejected[i])).max())
        got = table.eject(0.0, z, ages, accounts=True)[:, len(table.species) + 1 :]
        for column, kind in zip(got.T, table.events, strict=True):
            found = max(found, np.abs(column - result.events[kind]).max() / dense.events[kind][-1])
    return found / table.error


def test_the_bound_holds_at_random_ages_and_metallicities(table):
    rng = np.random.default_rng(20)
    between = [*10 ** rng.uniform(-6, np.log10(0.05), 12), *rng.uniform(0, 0.05, 6)]
    own = [0.0, 1e-4, 0.001, 0.004, 0.008, 0.02, 0.05]
    beside = [0.004 * (1 - 1e-6), 0.004 * (1 + 1e-6), 0.02 * (1 + 1e-6)]
    ages = np.sort(10 ** rng.uniform(6.4, np.log10(13.8e9), 300))
    assert worst(table, population(), [*between, *own, *beside], ages) < 1
    assert table.checked < table.error


@pytest.mark.parametrize(
    "changes",
    [
        {"lifetimes": "padovani-matteucci-1993", "imf": "chabrier-2003", "interpolation": "cubic"},
        {"lifetimes": "raiteri-1996", "edges": Edges(below="return-only", above="reach-up")},
    ],
)
def test_the_bound_holds_for_other_populations_and_net_yields(changes):
    stars = population(species=["C", "N", "O", "Fe", "Be"], **changes)
    made = star_table(stars, metallicities=(0.002, 0.03), until="2 Gyr", error=1e-2, convention="net")
    rng = np.random.default_rng(21)
    ages = np.sort(10 ** rng.uniform(6.4, np.log10(2e9), 200))
    if changes["lifetimes"] == "raiteri-1996":
        # the most massive die together, at an age that moves with metallicity: excepted by the bound
        assert made.mass[0] == 120
        ages = ages[ages > 4e6]
    zs = [*10 ** rng.uniform(np.log10(0.002), np.log10(0.03), 8), 0.004]
    assert worst(made, stars, zs, ages) < 1


def test_totals_close_and_events_are_those_of_the_laws(table):
    got = table.eject(0.0, 0.014, 13.8e9, accounts=True)[0]
    columns = dict(zip(table.columns, got, strict=True))

    # Kroupa (2001, MNRAS 322, 231): slopes 0.3, 1.3, 2.3, by quadrature. Stars up to 8.5 Msun
    # are super-AGB stars in Doherty+ (2014, MNRAS 441, 582) at Z = 0.008 to 0.02, those above collapse
    def phi(m):
        return m**-1.3 if m < 0.5 else 0.5 * m**-2.3

    whole = quad(lambda m: m * phi(m), 0.08, 0.5)[0] + quad(lambda m: m * phi(m), 0.5, 120)[0]
    assert columns["events: core-collapse"] == pytest.approx(quad(phi, 8.5, 120)[0] / whole, rel=1e-9)
    assert columns["events: thermonuclear"] == pytest.approx(1.3e-3, rel=1e-12)
    first = table.eject(0.0, 0.014, 1e9, accounts=True)[0]
    # a power law of slope -1.1 between 40 Myr and 13.8 Gyr, integrated by hand
    fraction = (0.04**-0.1 - 1.0**-0.1) / (0.04**-0.1 - 13.8**-0.1)
    assert first[table.columns.index("events: thermonuclear")] == pytest.approx(1.3e-3 * fraction, rel=2e-3)
    # all elements together are what is returned, to what the papers' tables leave out or round
    assert sum(got[: len(table.species)]) == pytest.approx(columns["returned"], rel=1e-3)


def test_steps_add_up_to_the_whole(table):
    rng = np.random.default_rng(22)
    ends = np.sort(10 ** rng.uniform(6, np.log10(13.8e9), 400))
    starts = np.concatenate([[0.0], ends[:-1]])
    for z in (0.0, 3e-4, 0.004, 0.0123):
        parts = table.eject(starts, z, ends - starts, mass=50.0)
        whole = table.eject(0.0, z, ends[-1], mass=50.0)[0]
        assert parts.sum(axis=0) == pytest.approx(whole, rel=1e-11, abs=1e-16)
        assert parts.min() > -1e-13


def test_short_steps_keep_their_digits(table):
    rng = np.random.default_rng(23)
    age, z = 10 ** rng.uniform(6.6, 10, 500), 10 ** rng.uniform(-4, -1.4, 500)
    second, year = table.eject(age, z, 3e-8), table.eject(age, z, 1.0)
    inside = (second > 0) & (year > 0)
    assert inside.mean() > 0.8
    # but for the few that pass into another cell within the year
    off = np.abs(second / 3e-8 - year)[inside] / year[inside]
    assert np.quantile(off, 0.99) < 1e-6


def test_sources_sum_to_the_whole_and_masses_scale(table):
    rng = np.random.default_rng(24)
    n = 20_000
    age, z, dt = 10 ** rng.uniform(5, 10, n), rng.uniform(0, 0.05, n), 10 ** rng.uniform(3, 9, n)
    mass = rng.uniform(1, 1e5, n)
    whole = table.eject(age, z, dt, mass, threads=2)
    parts = sum(table.eject(age, z, dt, mass, source=s) for s in table.sources)
    assert np.allclose(parts, whole, rtol=1e-9, atol=1e-8)
    assert np.array_equal(whole, table.eject(age, z, dt, mass, threads=1))
    some = slice(7000, 7050)
    alone = table.eject(age[some], z[some], dt[some], mass[some])
    assert np.array_equal(alone, whole[some])
    narrow = np.empty((n, len(table.species)), dtype=np.float32)
    assert table.eject(age, z, dt, mass, out=narrow) is narrow
    assert np.array_equal(narrow, whole.astype(np.float32))
    assert table.eject([], [], []).shape == (0, len(table.species))


def test_a_table_comes_back_from_its_file_as_it_was(table, tmp_path):
    import h5py

    path = tmp_path / "stars.h5"
    table.save(path)
    again = StarTable.load(path)
    age, z = np.geomspace(3e6, 1e10, 100), np.geomspace(1e-4, 0.05, 100)
    here, there = (t.eject(age, z, 1e6, accounts=True) for t in (table, again))
    assert np.array_equal(here, there)
    assert (again.columns, again.error, again.checked) == (table.columns, table.error, table.checked)
    assert 'sets = ["karakas-2010", "doherty-2014"]' in again.attributes["population"]
    assert all(len(sha) == 64 for sha in again.attributes["set_checksums"])
    with h5py.File(path, "r+") as file:
        file["step"][3, 20, 5] *= 1.000001
    with pytest.raises(InputError, match="checksum"):
        StarTable.load(path)
    (tmp_path / "text").write_text("no table")
    for name in ("text", "nothing"):
        with pytest.raises(InputError, match=name):
            StarTable.load(tmp_path / name)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"age": -1.0}, "age is negative"),
        ({"dt": -1.0}, "dt is negative"),
        ({"age": 1.4e10}, "the table ends"),
        ({"metallicity": 0.06}, "outside the table"),
        ({"metallicity": [0.01, 0.02], "age": [1.0, 2.0, 3.0]}, "shapes"),
        ({"age": float("nan")}, "finite"),
        ({"dt": "3 Msun"}, "dimension"),
        ({"source": "agn"}, "agb"),
        ({"out": np.empty((2, 2))}, "out has shape"),
    ],
)
def test_what_a_table_refuses(table, given, words):
    with pytest.raises(InputError, match=words):
        table.eject(**{"age": 1e7, "metallicity": 0.01, "dt": 1e6, **given})


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"error": 1e-9}, "1e-6"),
        ({"convention": "gross"}, "total or net"),
        ({"metallicities": (0.02, 0.01)}, "lowest and the highest"),
        ({"until": 0}, "until"),
    ],
)
def test_what_no_table_is_made_of(given, words):
    with pytest.raises(InputError, match=words):
        star_table(population(species=["O"]), **given)
