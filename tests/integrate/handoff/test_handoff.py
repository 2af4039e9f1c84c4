"""Yields over metallicity and age: the error of interpolation, and files read by other libraries."""

from dataclasses import replace

import h5py
import numpy as np
import pytest

from steelyard.integrate.handoff import handoff, write_handoff
from steelyard.integrate.popfile import default_population
from steelyard.yields.errors import InputError

SPECIES = ["H", "O", "Fe"]


@pytest.fixture(scope="module")
def population():
    return replace(default_population(), species=SPECIES)


@pytest.fixture(scope="module")
def made(population):
    return handoff(population, (1e-4, 0.03), error=0.05)


def test_linear_interpolation_stays_within_the_error_at_random_places(population, made):
    """By numpy's own interpolation, at places that the nodes weren't chosen by."""
    rng = np.random.default_rng(4)
    log_z, log_age = np.log10(made.metallicities), np.log10(made.ages)
    assert made.checked <= made.error == 0.05
    worst = 0.0
    for x in rng.uniform(log_z[0], log_z[-1], 30):
        ages = np.sort(10 ** rng.uniform(6, log_age[-1], 80))
        exact = replace(population, metallicity=10**x).weigh([*ages, 13.8e9])
        k = np.searchsorted(log_z, x) - 1
        w = (x - log_z[k]) / (log_z[k + 1] - log_z[k])
        for source in exact.sources:
            for species in SPECIES:
                line = (1 - w) * made.results[k].get(species, source) + w * made.results[k + 1].get(
                    species, source
                )
                off = np.interp(np.log10(ages), log_age, line) - exact.get(species, source)[:-1]
                whole = exact.get(species, source)[-1]
                if whole == 0:  # hydrogen of a white dwarf
                    assert (source, species) == ("thermonuclear", "H") and not off.any()
                else:
                    worst = max(worst, np.abs(off).max() / whole)
    assert 0.005 < worst <= 0.05


def test_a_smaller_error_takes_more_nodes(population, made):
    finer = handoff(population, (1e-4, 0.03), error=0.02)
    assert finer.checked <= 0.02
    assert len(finer.ages) > len(made.ages) and len(finer.metallicities) > len(made.metallicities)


def test_given_nodes_are_kept_and_their_error_told(population):
    made = handoff(population, [0.02, 0.004], ["1 Gyr", "10 Myr"], chosen=False)
    assert made.metallicities.tolist() == [0.004, 0.02] and made.ages.tolist() == [1e7, 1e9]
    assert made.checked > 0.05 and made.error is None


def test_hdf5(made, tmp_path):
    write_handoff(made, tmp_path / "y.h5")
    with h5py.File(tmp_path / "y.h5") as file:
        z, t = len(made.results), len(made.ages)
        assert file["total"].shape == (z, t, 3, 3) and file["events"].shape == (z, t, 2)
        for k in (0, z // 2, z - 1):
            one = made.results[k]
            assert np.array_equal(file["net_rate"][k], np.moveaxis(one.net_rate, 0, 1))
        budget = file["living"][:] + file["remnants"][:].sum(axis=-1) + file["ejected"][:].sum(axis=-1)
        assert np.abs(budget - 1).max() < 1e-12
        assert [d.label for d in file["total"].dims] == ["metallicity", "time", "source", "species"]
        assert "kroupa-2001" in file.attrs["population"].decode()
        assert b"linear in log10" in file.attrs["interpolation"] and len(file.attrs["set_checksums"]) == 4
        assert file.attrs["error_checked"] == made.checked


def test_two_metallicities_that_hardly_differ_are_told_by_their_ages(population):
    made = handoff(population, [0.01, 0.01 * (1 + 1e-9)], [1e7, 1e8, 1e9], chosen=False)
    assert 0.01 < made.checked < 1


def test_a_metal_free_population_is_interpolated_straight_next_to_0(population):
    made = handoff(population, (0.0, 0.001), error=0.05)
    assert made.metallicities[0] == 0 and made.checked <= 0.05
    assert f"between 0 and {made.metallicities[1]:g}" in made.interpolation
    z = 0.3 * made.metallicities[1]
    exact = replace(population, metallicity=z).weigh(made.ages)
    first, second = (made.results[i].get("O", "core-collapse") for i in (0, 1))
    off = 0.7 * first + 0.3 * second - exact.get("O", "core-collapse")
    assert abs(off).max() < 0.02 * exact.get("O", "core-collapse")[-1]


@pytest.mark.parametrize(
    ("zs", "settings", "says"),
    [
        ((-0.1, 0.02), {}, "mass fractions"),
        ((0.001, 0.01, 0.02), {}, "between two"),
        ((0.02,), {"chosen": False}, "no grid"),
        ((0.01, 0.02), {"error": 1e-9}, "isn't between"),
        ((0.01, 0.02), {"ages": [1e9]}, "two or more"),
    ],
)
def test_refusals(population, zs, settings, says):
    with pytest.raises(InputError, match=says):
        handoff(population, zs, **settings)
