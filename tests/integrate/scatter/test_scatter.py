"""Populations drawn: their statistics against the exact law, budgets, seeds, biases, files."""

import csv

import h5py
import numpy as np
import pytest
from scipy.stats import t as student

from steelyard.integrate import DelayedSource, Population, StellarSource, from_function
from steelyard.integrate.figures.scatter import delta_sigma, ratio_scatter
from steelyard.integrate.scatter import scatter, write_scatter, write_statistics
from steelyard.integrate.scatter.law import second_moment
from steelyard.yields.errors import InputError

from .populations import PLAIN, RICH, SALPETER, Z, massive, published

SEEDS, COUNT = 50, 120


@pytest.fixture(scope="module")
def many():
    """Means and covariances of 50 draws, each with a seed of its own."""
    population = published()
    drawn = [scatter(population, 400, COUNT, seed=s, survivors=False) for s in range(SEEDS)]
    return (
        drawn[0].law,
        np.array([d.sample_mean() for d in drawn]),
        np.array([d.sample_covariance() for d in drawn]),
    )


def test_means_agree_with_the_law(many):
    """Every element at every age within 4 standard errors over 50 seeds: 21 tests, 0.1 % by chance."""
    law, means, _ = many
    error = law.sigma / np.sqrt(COUNT * SEEDS)
    off = np.abs(means.mean(axis=0) - law.mean) / error
    assert off.max() < 4
    # and no seed by itself is off by more than Chebyshev allows for so many
    single = np.abs(means - law.mean) / (law.sigma / np.sqrt(COUNT))
    assert (single > 4).mean() < 1 / 16


def test_covariances_agree_with_the_law(many):
    """Within 4 standard errors, found from the spread among seeds, for every element's variance;
    for all pairs the level of 4 standard errors is that of Student's t for as many tests."""
    law, _, covariances = many
    error = covariances.std(axis=0, ddof=1) / np.sqrt(SEEDS)
    off = np.abs(covariances.mean(axis=0) - law.covariance) / error
    assert np.einsum("tii->ti", off).max() < 4
    assert off.max() < student.isf(0.5 * 0.01 / off.size, SEEDS - 1)


def test_third_cumulants_agree_with_the_law():
    drawn = scatter(massive(), 200, 20_000, survivors=False)
    apart = drawn.get("O")[:, 0] - drawn.law.mean[0, 0]
    cubes = apart**3
    assert abs(cubes.mean() - drawn.law.third[0, 0]) < 4 * cubes.std() / np.sqrt(len(cubes))


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
@pytest.mark.parametrize("mode", ["poisson", "number", "mass"])
def test_every_star_is_somewhere(mode, interpolation):
    """In each population living + remnants + ejected = the mass of its stars."""
    drawn = scatter(published(interpolation=interpolation), 300, 60, mode=mode)
    whole = drawn.living + drawn.remnants + drawn.ejected.sum(axis=1)
    np.testing.assert_allclose(whole, np.broadcast_to(drawn.born[:, None], whole.shape), rtol=1e-12)
    assert np.all(np.diff(drawn.living, axis=1) <= 1e-12)
    assert np.all(np.diff(drawn.ejected, axis=2) >= -1e-12)
    assert np.all(drawn.yields.sum(axis=3) <= drawn.ejected * (1 + 1e-12) + 1e-12)
    assert np.array_equal(drawn.events, np.rint(drawn.events))


@pytest.mark.parametrize("mode", ["poisson", "number", "mass"])
def test_the_same_seed_gives_the_same_digits_on_any_number_of_workers(mode):
    population = published(species=("O", "Fe"))
    runs = [scatter(population, 50, 600, seed=7, mode=mode, workers=w) for w in (1, 2, 5)]
    for other in runs[1:]:
        for name in ("yields", "ejected", "remnants", "living", "born", "stars", "events"):
            assert np.array_equal(getattr(runs[0], name), getattr(other, name)), name
    assert not np.array_equal(runs[0].yields, scatter(population, 50, 600, seed=8, mode=mode).yields)


def test_survivors_change_nothing_but_masses_born():
    a, b = (scatter(published(), 100, 40, survivors=s) for s in (True, False))
    assert np.array_equal(a.yields, b.yields) and np.array_equal(a.events, b.events)
    assert b.born is None and b.living is None and a.living.min() > 0


def test_young_populations_have_ejected_nothing():
    drawn = scatter(published(ages=("0 yr", "1 Myr")), 1000, 30)
    assert not drawn.yields.any() and not drawn.events.any()
    np.testing.assert_allclose(drawn.living, np.repeat(drawn.born[:, None], 2, axis=1))
    assert not drawn.law.covariance.any() and not drawn.law.skewness.any()


def test_numbers_born_are_poisson():
    drawn = scatter(massive(), 100, 20_000)
    mean = 100 * float(SALPETER.number(0.1, 40))
    n = len(drawn.stars)
    assert abs(drawn.stars.mean() - mean) < 4 * np.sqrt(mean / n)
    # the variance of a Poisson number's sample variance is (mu + 2 mu^2)/n
    assert abs(drawn.stars.var() - mean) < 4 * np.sqrt((mean + 2 * mean**2) / n)
    collapse = 100 * float(SALPETER.number(8, 40))
    assert abs(drawn.events[:, -1, 0].mean() - collapse) < 4 * np.sqrt(collapse / n)
    q = 100 * second_moment(SALPETER)
    assert abs(drawn.born.mean() - 100) < 4 * np.sqrt(q / n)


def test_delayed_events_are_poisson_in_time():
    """Numbers up to each age, and independent of one another from age to age."""
    population = published(species=("Fe",), ages=("100 Myr", "1 Gyr", "13.8 Gyr"))
    drawn = scatter(population, 1000, 5000, survivors=False)
    late = drawn.events[:, :, drawn.event_kinds.index("thermonuclear")]
    expected = 1.3 * population.sources[2].delay.fraction(drawn.ages)
    assert np.all(np.abs(late.mean(axis=0) - expected) < 4 * np.sqrt(expected / 5000))
    steps = np.diff(late, axis=1, prepend=0)
    assert np.all(np.abs(np.corrcoef(steps.T)[np.triu_indices(3, 1)]) < 4 / np.sqrt(5000))
    # no event of this set ejects nothing but iron: what it ejected is its number times one event's
    np.testing.assert_allclose(
        drawn.get("Fe", "thermonuclear"), late * drawn.population.prepared.events[0, 0], rtol=1e-12
    )


def test_a_fixed_number_has_that_number_and_the_bias_of_its_rounding():
    drawn = scatter(massive(), 20, 20_000, mode="number")
    n1 = float(SALPETER.number(0.1, 40))
    stars = round(20 * n1)
    assert np.all(drawn.stars == stars)
    assert drawn.law.born / 20 - 1 == pytest.approx(stars / (20 * n1) - 1)
    error = drawn.law.sigma[0, 0] / np.sqrt(20_000)
    assert abs(drawn.get("O")[:, 0].mean() - drawn.law.mean[0, 0]) < 4 * error


def test_a_fixed_mass_is_overshot_by_half_the_second_moment():
    """Inspection paradox: the star that reaches the mass is a heavy one. Wald: nothing per Msun born."""
    drawn = scatter(massive(), 400, 8000, mode="mass")
    assert np.all(drawn.born >= 400) and np.all(drawn.born < 440)
    over = drawn.born - 400
    error = over.std() / np.sqrt(len(over))
    assert abs(over.mean() - second_moment(SALPETER) / 2) < 4 * error
    oxygen, law = drawn.get("O")[:, 0], drawn.law
    assert abs(oxygen.mean() - law.mean[0, 0]) < 4 * law.sigma[0, 0] / np.sqrt(8000)
    weighed = float(massive().weigh().get("O")[0])
    rest = oxygen - weighed * drawn.born
    assert abs(rest.mean()) < 4 * rest.std() / np.sqrt(8000)
    # what is left of the scatter, to terms that don't grow with the mass
    assert oxygen.var() == pytest.approx(law.covariance[0, 0, 0], rel=0.06)


def test_each_star_of_a_mixture_follows_one_set():
    """Of one star that has ejected all it can, oxygen is that of one set or the other."""
    drawn = scatter(massive([{PLAIN: 0.5, RICH: 0.5}]), 30, 3000, survivors=False)
    alone = drawn.events[:, -1, 0] == 1
    ejected, oxygen = drawn.ejected[alone, 0, 0], drawn.get("O")[alone, 0]
    served = ejected > 8
    # 8 Msun ejected at 10 Msun, 38 at 40: the ejected mass tells the star's
    plain = 1 + (ejected[served] - 8) / 10
    times = oxygen[served] / plain
    assert np.all(np.isclose(times, 1) | np.isclose(times, 2))
    assert 0.4 < np.isclose(times, 2).mean() < 0.6


def test_failed_explosions_are_counted():
    table = {"masses": [20, 30], "probability": [0.25]}
    drawn = scatter(massive(implode=table), 1000, 3000, survivors=False)
    expected = 250 * float(SALPETER.number(20, 30))
    found = drawn.events[:, -1, drawn.event_kinds.index("imploded")]
    assert abs(found.mean() - expected) < 4 * np.sqrt(expected / 3000)
    error = drawn.law.sigma[0, 0] / np.sqrt(3000)
    assert abs(drawn.get("O")[:, 0].mean() - drawn.law.mean[0, 0]) < 4 * error


def test_mass_functions_given_as_functions():
    same = from_function(lambda m: m**-2.35, (0.1, 40))
    drawn = scatter(massive(mass_function=same), 300, 3000, survivors=False)
    exact = scatter(massive(), 300, 1).law
    np.testing.assert_allclose(drawn.law.covariance, exact.covariance, rtol=1e-11)
    assert abs(drawn.get("O")[:, 0].mean() - exact.mean[0, 0]) < 4 * exact.sigma[0, 0] / np.sqrt(3000)


def test_net_yields_and_single_sources():
    population = published(species=("C", "O"))
    drawn = scatter(population, 1000, 30, convention="net")
    np.testing.assert_allclose(drawn.law.mean, 1000 * population.weigh().net.sum(axis=0), rtol=1e-12)
    parts = sum(drawn.get("C", s) for s in drawn.sources)
    np.testing.assert_allclose(parts, drawn.get("C"), rtol=1e-12)
    assert np.isnan(drawn.ratio("C", "O")).sum() == ((drawn.get("C") <= 0) | (drawn.get("O") <= 0)).sum()


def test_events_that_use_up_more_than_there_is_are_told():
    late = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 0.5, "maoz-graur-2017")
    population = Population(Z, [StellarSource("core-collapse", [PLAIN]), late], imf=SALPETER, species=["Fe"])
    drawn = scatter(population, 10, 50)
    assert any("use up more remnants than there are in" in note for note in drawn.notes)


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        ((-1, 10), "mass isn't one mass above 0"),
        (("10 Myr", 10), "wrong dimension"),
        ((10, 0), "count isn't a whole number from 1 on"),
        ((10, 2.5), "count isn't a whole number"),
        ((10, 10, -3), "seed isn't a whole number from 0 on"),
        ((10, 10, 1, "masses"), "did you mean mass?"),
        ((1e9, 10**6), "hold more than 1e\\+12 stars"),
        ((1, 10**9), "GiB, more than 4; give fewer ages or species"),
    ],
)
def test_refusals(arguments, says):
    with pytest.raises(InputError, match=says):
        scatter(published(), *arguments)


def test_one_population_has_no_covariance():
    drawn = scatter(massive(), 100, 1)
    with pytest.raises(InputError, match="no covariance"):
        drawn.sample_covariance()
    assert "sigma" not in drawn.to_dict()["sample"]


# --- files and figure ----------------------------------------------------------------------------------


def test_the_file_holds_every_population_and_where_it_comes_from(tmp_path):
    drawn = scatter(published(), 200, 25, seed=3)
    path = tmp_path / "drawn.h5"
    write_scatter(drawn, path)
    with h5py.File(path) as file:
        assert file["yields"].shape == (25, 3, 3, 7)
        assert [d.label for d in file["yields"].dims] == ["population", "time", "source", "species"]
        names = [n.decode() for n in file["species"][()]]
        assert names == list(drawn.species)
        iron = file["yields"][:, :, :, names.index("Fe")]
        assert np.array_equal(iron.sum(axis=2), np.moveaxis(drawn.yields, 1, 2)[..., -1].sum(axis=2))
        assert np.array_equal(file["born"][()], drawn.born)
        assert np.array_equal(file["covariance"][()], drawn.law.covariance)
        assert file["events"].attrs["units"] == b"1" and file["yields"].attrs["units"] == b"Msun"
        assert (file.attrs["mass"], file.attrs["seed"], file.attrs["count"]) == (200.0, 3, 25)
        assert b"kobayashi-2006" in file.attrs["population"] and file.attrs["mode"] == b"poisson"
        np.testing.assert_allclose(
            file["living"][()] + file["remnants"][()] + file["ejected"][()].sum(axis=2),
            np.repeat(file["born"][()][:, None], 3, axis=1),
        )
    again = tmp_path / "again.h5"
    write_scatter(scatter(published(), 200, 25, seed=3, workers=3), again)
    assert again.read_bytes() == path.read_bytes()
    write_scatter(drawn, path)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["again.h5", "drawn.h5"]


def test_a_file_that_cannot_be_written_is_told(tmp_path):
    drawn = scatter(massive(), 100, 2)
    with pytest.raises(InputError, match="can't be written"):
        write_scatter(drawn, tmp_path / "nowhere" / "a.h5")
    with pytest.raises(InputError, match="not an ordinary file"):
        write_scatter(drawn, tmp_path)
    assert not list(tmp_path.iterdir())


def test_statistics_as_a_table(tmp_path):
    drawn = scatter(published(), 200, 50)
    write_statistics(drawn, tmp_path / "s.csv")
    lines = (tmp_path / "s.csv").read_text().splitlines()
    assert any("kobayashi-2006" in line for line in lines if line.startswith("#"))
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) == 3 * 7
    last = rows[-1]
    assert last["species"] == "Fe" and float(last["exact_mean"]) == drawn.law.mean[-1, -1]
    assert float(last["quantile_0.5"]) == np.quantile(drawn.get("Fe")[:, -1], 0.5)
    assert int(last["gaussian"]) == drawn.law.gaussian[-1, -1]


def test_the_delta_method_agrees_with_large_populations():
    drawn = scatter(published(ages=("13 Gyr",)), 1e5, 400, survivors=False)
    sigma, holds = delta_sigma(drawn.law, "O", "Fe")
    assert holds and drawn.ratio("O", "Fe")[:, 0].std() == pytest.approx(sigma, rel=4 / np.sqrt(800))
    assert not delta_sigma(scatter(published(ages=("13 Gyr",)), 100, 1).law, "O", "Fe")[1]


def test_the_figure_has_a_panel_for_each_ratio():
    figure = ratio_scatter(published(), [("O", "Fe"), ("C", "O")], masses=[300, 3000, 30000])
    titles = [panel.get_title(loc="left") for panel in figure.axes]
    assert titles == ["[O/Fe]", "[C/O]"]
    for panel in figure.axes:
        assert panel.get_xlim() == (300, 30000)
        band = panel.collections[0].get_paths()[0].get_extents()
        assert band.height > 0 and len(panel.lines) == 4
    with pytest.raises(InputError, match="isn't defined at"):
        ratio_scatter(published(), [("O", "Fe")], age="1 Myr")
    with pytest.raises(InputError, match="no ratio to draw"):
        ratio_scatter(published(species=("H",)))
