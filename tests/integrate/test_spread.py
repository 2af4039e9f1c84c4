import csv
import io
from dataclasses import replace

import h5py
import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Join, Population, StellarSource, imf
from steelyard.integrate.files import agrees, read_hdf5, write_hdf5
from steelyard.integrate.leverage.nodes import nodes
from steelyard.integrate.spread import Spread, assumed
from steelyard.integrate.spread.file import read_spread, spread_from_dict, write_errors_csv
from steelyard.integrate.spread.stated import StatedError
from steelyard.yields import load
from steelyard.yields.errors import InputError
from steelyard.yields.grid import Slice, YieldSet

AGES = ["20 Myr", "13.8 Gyr"]
DRAWS = 100_000


def population(**changes):
    given = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
        "species": ["H", "C", "O", "Mg", "Fe"],
    }
    return Population(**given | changes)


STATED = Spread(
    [
        StatedError(
            0.15,
            set="kobayashi-2006",
            elements=["O", "Mg", "Fe"],
            common=0.3,
            between=[[1, 0.6, 0.2], [0.6, 1, 0.1], [0.2, 0.1, 1]],
        ),
        StatedError(0.2, source="agb", between=0.4),
        StatedError(0.1, source="thermonuclear", elements="metals", between=0.5),
    ]
)


@pytest.fixture(scope="module")
def result():
    return population().weigh(AGES)


@pytest.fixture(scope="module")
def errors(result):
    return STATED.propagate(result)


def two_models(**changes):
    """An invented set of two stars, phi = m^-2 / ln 2."""
    one = Slice(
        0.01,
        np.array([10.0, 20.0]),
        np.array([8.0, 17.0]),
        np.zeros(2),
        np.array([[1.0, 0.2], [4.0, 0.1]]),
        np.array([[0.9, 0.2], [3.8, 0.1]]),
        np.array([0.01, 0.0]),
    )
    grid = YieldSet("invented", "core-collapse", ("O", "Fe"), (one,), derived=frozenset({"net"}))
    stars = Population(
        0.01,
        [StellarSource("core-collapse", [grid])],
        imf=imf("power-law", slopes=[2.0], limits=(10, 20)),
        ages=["1 Gyr"],
    )
    given = {"sigma": 0.2, "set": "invented", "correlation_length": 0.15, "common": 0.25, "between": 0.5}
    return Spread([StatedError(**given | changes)]).propagate(stars.weigh())


def test_two_models_by_hand():
    """Covariance of lognormals, from a textbook of probability, written out for two models.

    The lower one weighs int (20 - m)/10 phi dm = (1 - ln 2) / (10 ln 2), the upper one (ln 2 - 1/2) / (10 ln 2).
    """
    found = two_models()
    weight = np.array([1 - np.log(2), np.log(2) - 0.5]) / (10 * np.log(2))
    s = 0.2 * np.log(10)
    apart = 0.25 + 0.75 * np.exp(-np.log10(2) / 0.15)
    same, other = np.exp(s**2) * np.expm1(s**2), np.exp(s**2) * np.expm1(s**2 * apart)
    oxygen, iron = weight * [1.0, 4.0], weight * [0.2, 0.1]
    variance = same * (oxygen**2).sum() + 2 * other * oxygen[0] * oxygen[1]
    at = {name: found.result.species.index(name) for name in ("O", "Fe")}
    np.testing.assert_allclose(found.covariance[0, at["O"], at["O"]], variance, rtol=1e-12)
    half = np.exp(s**2) * np.expm1(0.5 * s**2)
    crossed = np.exp(s**2) * np.expm1(0.5 * s**2 * apart)
    shared = half * (oxygen @ iron) + crossed * (oxygen[0] * iron[1] + oxygen[1] * iron[0])
    np.testing.assert_allclose(found.covariance[0, at["O"], at["Fe"]], shared, rtol=1e-12)
    np.testing.assert_allclose(found.shift[0, at["O"]], np.expm1(s**2 / 2) * oxygen.sum(), rtol=1e-12)
    np.testing.assert_allclose(found.by_source[0, 0, at["O"]], np.sqrt(variance), rtol=1e-12)


def test_limits_of_the_correlation():
    """Wholly common errors scale the yield; without any correlation they add in squares."""
    s = 0.2 * np.log(10)
    rigid = two_models(common=1.0)
    whole = rigid.result.get("O")
    np.testing.assert_allclose(rigid.get("O"), whole * np.sqrt(np.exp(s**2) * np.expm1(s**2)), rtol=1e-12)
    # [O/Fe] doesn't move where all elements err alike: sigma^2 (1 - 1)
    assert two_models(common=1.0, between=1.0).ratio("O", "Fe")[0] == pytest.approx(0, abs=1e-7)
    # and where they don't: two lognormals of 0.2 dex, exactly
    assert two_models(common=1.0, between=0.0).ratio("O", "Fe")[0] == pytest.approx(0.2 * 2**0.5, rel=1e-12)
    loose = two_models(common=0.0, correlation_length=0)
    parts = (
        nodes(loose.result.population).at(["1 Gyr"]).contribution[0, 0, :, loose.result.species.index("O")]
    )
    expected = np.sqrt(np.exp(s**2) * np.expm1(s**2) * (parts**2).sum())
    np.testing.assert_allclose(loose.get("O")[0], expected, rtol=1e-12)


def test_sampling_agrees(errors):
    """10^5 draws by a route of their own (normal variates, exponentials), within 4 standard errors."""
    drawn = errors.draw(DRAWS, seed=5)
    for t in range(2):
        x = drawn[:, t]
        mean, apart = x.mean(axis=0), x - x.mean(axis=0)
        error = x.std(axis=0) / np.sqrt(DRAWS)
        assert np.all(abs(mean - errors.shift[t]) <= 4 * error)
        # the variance of the products tells the standard error of the covariance
        products = apart[:, :, None] * apart[:, None, :]
        error = products.std(axis=0) / np.sqrt(DRAWS)
        assert np.all(abs(products.mean(axis=0) - errors.covariance[t]) <= 4 * error)
    assert errors.covariance[1].all() and (errors.covariance[1].diagonal() > 0).all()


def test_sampling_is_the_same_for_one_seed(errors):
    np.testing.assert_array_equal(errors.draw(3000, 7)[:2048], errors.draw(2048, 7))
    assert np.any(errors.draw(5, 7) != errors.draw(5, 8))


@pytest.mark.parametrize(("sigma", "within"), [(0.05, 0.02), (0.15, 0.04), (0.3, 0.12)])
def test_errors_of_ratios_agree_with_sampling(result, sigma, within):
    kinds = result.population.kinds
    stated = Spread([StatedError(sigma, source=k, elements="metals", between=0.3) for k in kinds])
    found = stated.propagate(result)
    whole = result.total.sum(axis=0) + found.draw(40_000, 3)
    iron = result.species.index("Fe")
    for name in ("C", "O", "Mg"):
        at = result.species.index(name)
        drawn = np.log10(whole[..., at] / whole[..., iron]).std(axis=0)
        np.testing.assert_allclose(found.ratio(name, "Fe"), drawn, rtol=within)


def test_factors_on_the_sets_own_figures_move_yields_so(result, errors):
    """One draw of factors, written into the sets, and the population weighed again."""
    random = np.random.default_rng(2)
    found = nodes(result.population)
    factors = dict(zip(found.models, np.exp(random.normal(0, 0.3, len(found.models))), strict=True))
    by_name = {(m.set, m.metallicity, m.mass): f for m, f in factors.items()}

    def moved(id):
        grid = load(id)
        slices = []
        for one in grid.slices:
            f = [by_name.get((id, one.metallicity, m), by_name.get((id, None, None), 1.0)) for m in one.mass]
            printed = one.net if "net" not in grid.derived else one.listed
            more = (np.array(f)[:, None] - 1) * printed
            slices.append(replace(one, total=one.total + more, net=one.net + more))
        return replace(grid, slices=tuple(slices))

    sources = [replace(s, sets=[moved(entry.name) for entry in s.sets]) for s in result.population.sources]
    again = replace(result.population, sources=sources).weigh(AGES)
    parts = found.at(AGES).contribution
    added = np.einsum("itks,k->its", parts, np.array([factors[m] - 1 for m in found.models]))
    np.testing.assert_allclose(again.total, result.total + added, rtol=1e-11)
    np.testing.assert_allclose(again.net, result.net + added, rtol=1e-9, atol=1e-16)


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
def test_covariance_is_symmetric_and_positive_semidefinite(interpolation):
    stars = population(species="nuclides", interpolation=interpolation)
    covariance = STATED.propagate(stars.weigh(AGES)).covariance
    np.testing.assert_array_equal(covariance, covariance.transpose(0, 2, 1))
    for one in covariance:
        scale = np.sqrt(one.diagonal())
        some = scale > 0
        correlation = one[np.ix_(some, some)] / np.outer(scale[some], scale[some])
        assert np.linalg.eigvalsh(correlation).min() > -1e-12
        assert abs(correlation).max() <= 1 + 1e-12


def test_nuclides_of_an_element_share_its_error(result, errors):
    """So that an element's error is the same whether it is weighed whole or not."""
    split = STATED.propagate(population(species="nuclides").weigh(AGES))
    for name in ("O", "Mg", "Fe"):
        np.testing.assert_allclose(split.get(name), errors.get(name), rtol=1e-10)
        np.testing.assert_allclose(split.get(name, "agb"), errors.get(name, "agb"), rtol=1e-10)
    np.testing.assert_allclose(split.ratio("O", "Fe"), errors.ratio("O", "Fe"), rtol=1e-10)
    assert split.ratio("Mg24", "Mg24").max() < 1e-7


def test_errors_do_not_shrink_between_metallicities():
    """At a slice and halfway to the next: models of one mass err together at both."""
    parts = []
    for z in (0.004, 0.009, 0.02):
        one = population(
            metallicity=z, sources=[StellarSource("core-collapse", ["kobayashi-2006"])], joins=[]
        )
        found = Spread([StatedError(0.15, set="kobayashi-2006")]).propagate(one.weigh(["1 Gyr"]))
        parts.append(float(found.get("O")[0] / found.result.get("O")[0]))
    assert min(parts[0], parts[2]) - 0.01 < parts[1] < max(parts[0], parts[2]) + 0.01


def test_negative_net_yields_keep_their_sign_and_net_errs_as_total(result, errors):
    oxygen = result.species.index("O")
    assert result.net[0, -1, oxygen] < 0
    # printed net yields only: the size of the error is that of what is printed
    assert 0 < errors.by_source[0, -1, oxygen] < 0.5 * abs(result.net[0, -1, oxygen])
    carbon = errors.get("C", "agb")[-1]
    assert carbon == pytest.approx(errors.by_source[0, -1, result.species.index("C")], rel=1e-12)


def test_assumption_is_of_metals_of_every_source(result):
    found = assumed(result.population).propagate(result)
    assert not found.get("H").any() and found.get("O").all()
    assert {e.source for e in found.spread.errors} == set(result.sources)


def test_hdf5_keeps_the_covariance_and_weighs_it_again(result, errors, tmp_path):
    path = tmp_path / "yields.h5"
    write_hdf5(result, path, errors)
    with h5py.File(path) as file:
        held = file["covariance"]
        assert held.attrs["units"] == b"(Msun/Msun)^2" and [d.label for d in held.dims] == [
            "time", "species", "species",
        ]  # fmt: skip
        assert held.dims[1][0].name == held.dims[2][0].name == "/species"
        assert b"kobayashi-2006" in file.attrs["spread"]
    stored = read_hdf5(path)
    np.testing.assert_array_equal(stored.arrays["covariance"], errors.covariance)
    np.testing.assert_array_equal(stored.arrays["error"], np.moveaxis(errors.by_source, 0, 1))
    np.testing.assert_array_equal(stored.arrays["mean_shift"], errors.shift)
    assert agrees(path)[0]
    with h5py.File(path, "r+") as file:
        file["covariance"][1, 2, 2] *= 1.001
    same, message = agrees(path)
    assert not same and "covariance (1.38e+10 yr, O, O)" in message
    write_hdf5(result, path)
    assert "covariance" not in read_hdf5(path).arrays


def test_file_comes_back(tmp_path):
    path = tmp_path / "spread.toml"
    path.write_text(STATED.to_toml())
    assert read_spread(path) == STATED
    path.write_text('[[spread]]\nset = "kobayashi-2006"\nsigma = 0.1\n')
    (one,) = read_spread(path).errors
    assert (one.elements, one.correlation_length, one.common, one.between) == ("all", 0.1, 0.5, 0.0)


def test_csv_holds_yields_and_errors(result, errors, tmp_path):
    write_errors_csv(errors, tmp_path / "errors.csv")
    text = (tmp_path / "errors.csv").read_text()
    assert "#     [[spread]]" in text
    rows = list(csv.DictReader(io.StringIO("".join(x for x in text.splitlines(True) if x[0] != "#"))))
    assert len(rows) == 2 * 4 * 5
    last = next(r for r in rows if (r["age_yr"], r["source"], r["species"]) == ("13800000000.0", "sum", "O"))
    assert float(last["error"]) == errors.get("O")[1] and float(last["total"]) == result.get("O")[1]


@pytest.mark.parametrize(
    ("given", "said"),
    [
        ({"sigma": 0.1}, "of one set or of one source"),
        ({"sigma": 0.1, "set": "a", "source": "agb"}, "of one set or of one source"),
        ({"sigma": -0.1, "set": "a"}, "sigma is -0.1"),
        ({"sigma": "0.1 Msun", "set": "a"}, "sigma"),
        ({"sigma": 0.1, "set": "a", "common": 1.5}, "common is 1.5, not from 0 to 1"),
        ({"sigma": 0.1, "set": "a", "correlation_length": -1}, "not 0 or more"),
        ({"sigma": 0.1, "set": "a", "between": 2}, "between is 2"),
        ({"sigma": 0.1, "set": "a", "between": [[1, 0], [0, 1]]}, "but elements lists 0"),
        (
            {"sigma": 0.1, "set": "a", "between": [[1, 2], [2, 1]], "elements": ["O", "C"]},
            "correlation matrix",
        ),
        ({"sigma": 0.1, "set": "a", "between": [[1, 0], [0]], "elements": ["O", "C"]}, "different length"),
        ({"sigma": 0.1, "set": "a", "elements": ["O16"]}, "O16 is a nuclide"),
        ({"sigma": 0.1, "set": "a", "elements": []}, "listed, each once"),
        ({"sigma": 0.1, "set": "a", "elements": "light"}, '"all", "metals"'),
        ({"sigma": 0.1, "set": "a", "sigme": 1}, "did you mean sigma"),
        ({"set": "a"}, "lacks sigma"),
    ],
)
def test_bad_errors_are_refused_in_one_line(given, said):
    with pytest.raises(InputError) as caught:
        spread_from_dict({"spread": [given]}, "mine.toml")
    assert str(caught.value).startswith("mine.toml") and said in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("stated", "said"),
    [
        ([StatedError(0.1, set="kobayashi-2007")], "did you mean kobayashi-2006"),
        ([StatedError(0.1, source="agbs")], "did you mean agb"),
        ([StatedError(0.1, set="karakas-2010", elements=["Zn"])], "Zn isn't followed"),
        ([StatedError(0.1, set="karakas-2010"), StatedError(0.1, source="agb")], "has an error already"),
    ],
)
def test_errors_of_what_is_not_there_are_refused(result, stated, said):
    with pytest.raises(InputError, match=said):
        Spread(stated).propagate(result)


@pytest.mark.parametrize("text", ["", "spread = 3", "[[spread", "[other]\nx = 1"])
def test_bad_files_are_refused(text, tmp_path):
    path = tmp_path / "bad.toml"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_spread(path)
    assert str(caught.value).startswith(str(path)) and "\n" not in str(caught.value)
    with pytest.raises(InputError, match="no such file"):
        read_spread(tmp_path / "nowhere.toml")
