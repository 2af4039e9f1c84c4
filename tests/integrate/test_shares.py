import builtins
import itertools

import numpy as np
import pytest
from scipy import stats

from steelyard.integrate import DelayedSource, Join, Population, StellarSource
from steelyard.integrate.contrasting import contrast, decompose, decompose_sample, design
from steelyard.integrate.contrasting.telling import share_rows, share_sentences
from steelyard.integrate.contrasting.writing import write_csv
from steelyard.integrate.figures import save
from steelyard.integrate.figures.shares import stacked_shares
from steelyard.integrate.shares import shares
from steelyard.integrate.shares.sobol import sobol
from steelyard.yields.errors import InputError

LIMONGI = [f"limongi-chieffi-2018-{s}-v{v}" for s in "MR" for v in ("000", "150", "300")]
IWAMOTO = [f"iwamoto-1999-{m}" for m in ("CDD1", "CDD2", "W7", "W70", "WDD1", "WDD2", "WDD3")]


def population(**changes):
    given = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
    }
    return Population(**given | changes)


SWAPS = {
    "core-collapse": LIMONGI,
    "thermonuclear": IWAMOTO,
    "imf": "salpeter-1955",
    "agb": "marigo-2001+doherty-2014",
}


@pytest.fixture(scope="module")
def factorial():
    return contrast(population(), SWAPS, full=True, ages=["30 Myr", "13.8 Gyr"])


def test_a_factorial_by_hand():
    # y = 3 + a + 2 b + 4 a b with a, b in {-1, 1}: mean squares 1, 4 and 16 of 21
    a, b = np.meshgrid([-1, 1], [-1, 1], indexing="ij")
    parts = decompose(3.0 + a + 2 * b + 4 * a * b, 2)
    assert parts.variance == pytest.approx(21)
    assert parts.main == pytest.approx([1 / 21, 4 / 21]) and parts.pairs == pytest.approx([16 / 21])
    assert parts.higher == pytest.approx(0, abs=1e-15)
    # three factors of which only the product varies: all of it is of a higher order
    cube = np.prod(np.meshgrid(*[[-1.0, 1.0]] * 3), axis=0)
    parts = decompose(cube, 3)
    assert (
        parts.higher == pytest.approx(1) and abs(parts.main).max() < 1e-15 and abs(parts.pairs).max() < 1e-15
    )
    assert np.isnan(decompose(np.full((2, 3), 0.1), 2).main).all()


def test_parts_sum_to_one_and_are_those_of_statsmodels():
    """Sums of squares of a brute-force ANOVA with every interaction: statsmodels, ordinary least squares."""
    import pandas as pd

    anova = pytest.importorskip("statsmodels.stats.anova")
    formula = pytest.importorskip("statsmodels.formula.api")
    levels = (3, 2, 4, 2)
    values = np.random.default_rng(5).lognormal(size=levels)
    parts = decompose(values, 4)
    assert abs(parts.main.sum() + parts.pairs.sum() + parts.higher - 1) < 1e-12
    at = np.array(list(itertools.product(*map(range, levels))))
    frame = pd.DataFrame({f"f{k}": at[:, k] for k in range(4)} | {"y": values.ravel()})
    terms = [f"C(f{k})" for k in range(4)]
    pairs = [f"{a}:{b}" for a, b in itertools.combinations(terms, 2)]
    fit = formula.ols("y ~ " + " + ".join(terms + pairs), data=frame).fit()
    squares = anova.anova_lm(fit, typ=2)["sum_sq"]
    whole = ((values - values.mean()) ** 2).sum()
    assert parts.main == pytest.approx(squares[terms].to_numpy() / whole, abs=1e-12)
    assert parts.pairs == pytest.approx(squares[pairs].to_numpy() / whole, abs=1e-12)
    assert float(parts.higher) == pytest.approx(squares["Residual"] / whole, abs=1e-12)


def test_yields_decompose_as_statsmodels_does(factorial):
    import pandas as pd

    anova = pytest.importorskip("statsmodels.stats.anova")
    formula = pytest.importorskip("statsmodels.formula.api")
    found = shares(factorial, ratio=True)
    j = factorial.position("Mn")
    frame = pd.DataFrame({f"f{k}": factorial.at[:, k] for k in range(4)} | {"y": factorial.ratio[:, 1, j]})
    terms = [f"C(f{k})" for k in range(4)]
    pairs = [f"{a}:{b}" for a, b in itertools.combinations(terms, 2)]
    fit = formula.ols("y ~ " + " + ".join(terms + pairs), data=frame).fit()
    squares = anova.anova_lm(fit, typ=2)["sum_sq"].to_numpy()
    whole = ((frame.y - frame.y.mean()) ** 2).sum()
    assert found.parts[:, 1, j] == pytest.approx(squares / whole, abs=1e-10)


def test_a_one_way_layout_is_that_of_scipy():
    # scipy.stats.f_oneway: F = (between / (k - 1)) / (within / (n - k))
    values = np.random.default_rng(2).normal(size=(3, 10)) + np.array([[0.0], [1.0], [3.0]])
    parts = decompose(values, 2)
    between = float(parts.main[0])
    f = (between / 2) / ((1 - between) / (30 - 3))
    assert f == pytest.approx(stats.f_oneway(*values).statistic, rel=1e-12)


@pytest.mark.parametrize("ratio", [False, True])
def test_shares_of_a_full_factorial_sum_to_one(factorial, ratio):
    found = shares(factorial, ratio)
    sums = found.parts.sum(axis=0)
    told = np.isfinite(found.variance) & (found.variance > 1e-20)
    assert told[:, [j for j, s in enumerate(factorial.species) if s != "Fe" or not ratio]].all()
    assert abs(sums[told] - 1).max() < 1e-12
    assert (found.parts[:, told] > -1e-15).all()
    assert found.error is None and found.names[-1] == "higher" and len(found.names) == 4 + 6 + 1
    # before the first events of the delay nothing is due to them
    assert found.get("O", "thermonuclear")[0] == pytest.approx(0, abs=1e-20)


def test_choices_that_lack_an_element_are_left_out(factorial):
    found = shares(factorial)
    assert found.left_out["Fe"] == {"agb": ["marigo-2001+doherty-2014"]} and "O" not in found.left_out
    alone = shares(design(population(), {k: v for k, v in SWAPS.items() if k != "agb"}, species=["Fe"]))
    assert found.get("Fe", "imf")[1] == pytest.approx(alone.get("Fe", "imf")[0], abs=1e-12)
    (row,) = [r for r in share_rows(found) if r.label == "agb"]
    assert row.cells[factorial.position("Fe")] == "-" and row.cells[factorial.position("C")] != "-"


def test_low_and_high_are_of_all_combinations(factorial):
    found = shares(factorial, ratio=True)
    values = factorial.ratio[:, 1, factorial.position("Mn")]
    j = factorial.position("Mn")
    assert (found.low[1, j], found.high[1, j]) == (values.min(), values.max())
    assert found.variance[1, j] == pytest.approx(values.var())
    (line,) = [s for s in share_sentences(found, shares(factorial)) if s.startswith("[Mn/Fe]")]
    assert f"{np.ptp(values):.2f} dex in all" in line
    assert f"{100 * found.get('Mn', 'core-collapse')[1]:.0f} % from core-collapse" in line


def test_sample_estimates_are_within_their_intervals():
    levels = (5, 4, 3, 6)
    random = np.random.default_rng(11)
    effects = [random.normal(size=n) for n in levels]
    grid = np.indices(levels)
    values = sum(e[grid[k]] for k, e in enumerate(effects)) + effects[0][grid[0]] * effects[3][grid[3]]
    values = values + 0.3 * random.normal(size=levels)
    exact = decompose(values, 4)
    truth = np.concatenate([exact.main, exact.pairs, [exact.higher]])
    inside = []
    for seed in range(40):
        rows = np.random.default_rng(seed).integers(0, levels, size=(250, 4))
        found = decompose_sample(rows, levels, values[tuple(rows.T)])
        parts = np.concatenate([found.main, found.pairs, [found.higher]])
        assert parts.sum() == pytest.approx(1, abs=1e-12)
        if not len(found.pairs):  # a combination of two factors was hardly drawn
            np.testing.assert_allclose(found.main, exact.main, atol=0.12)
            continue
        inside.append(abs(parts - truth) <= found.error)
        np.testing.assert_allclose(parts, truth, atol=0.12)
    # intervals of 95 %; of 11 x 40 far fewer than 80 % inside would not be chance
    assert len(inside) > 30 and np.mean(inside) > 0.8


def test_a_sample_too_small_for_pairs_or_for_all():
    levels = (8, 7, 6)
    rows = np.random.default_rng(0).integers(0, levels, size=(120, 3))
    values = rows[:, 0] + 0.0
    found = decompose_sample(rows, levels, values)
    assert found.pairs.shape == (0,) and found.main[0] == pytest.approx(1, abs=1e-9)
    with pytest.raises(InputError, match="too few for"):
        decompose_sample(rows[:30], levels, values[:30])


def test_large_factorials_are_sampled(factorial):
    exact = shares(factorial, ratio=True)
    found = shares(factorial.design, ratio=True, most=200, seed=1)
    assert found.contrast.sampled and len(found.contrast.at) == 200 and found.error is not None
    for name in ("Mn", "O"):
        j = factorial.position(name)
        gap = abs(found.main[:, 1, j] - exact.main[:, 1, j])
        assert (gap <= 2 * found.error[: len(gap), 1, j] + 0.01).all()
    (line,) = [s for s in share_sentences(found, found) if s.startswith("[Mn/Fe]")]
    assert "at least" in line and "±" in line


def test_shares_need_all_combinations():
    one = contrast(population(), {"imf": "salpeter-1955"})
    with pytest.raises(InputError, match="full=True"):
        shares(one)
    two = shares(design(population(), {"imf": "salpeter-1955"}, species=["O"]))
    assert two.get("O", "imf") == pytest.approx([1]) and two.names == ("imf", "higher")
    with pytest.raises(InputError, match="did you mean imf"):
        two.get("O", "imff")


def test_shares_are_written_and_drawn(factorial, tmp_path):
    both = shares(factorial), shares(factorial, ratio=True)
    write_csv(both[1], tmp_path / "s.csv")
    lines = [x for x in (tmp_path / "s.csv").read_text().splitlines() if not x.startswith("#")]
    row = next(x for x in lines if x.startswith("13800000000.0,Mn,core-collapse,"))
    assert float(row.split(",")[3]) == both[1].get("Mn", "core-collapse")[1]
    figure = stacked_shares(*both)
    for panel, found in zip(figure.axes, both, strict=True):
        told = np.isfinite(found.parts[0, -1]).sum()
        tops = np.zeros(told)
        for bar in panel.patches:
            x = round(bar.get_x() + bar.get_width() / 2)
            tops[x] = max(tops[x], bar.get_y() + bar.get_height())
        assert tops == pytest.approx(1, abs=1e-9)
    hatches = {patch.get_hatch() for patch in figure.legends[0].get_patches()}
    assert len(hatches) >= 5
    save(figure, tmp_path / "s.png")
    with pytest.raises(InputError, match="no element varies"):
        stacked_shares(
            shares(contrast(population(), {"lifetimes": "raiteri-1996"}, species=["Fe"], full=True), True)
        )


EVENTS = {
    "thermonuclear.number": ("1e-3 / Msun", "2e-3 / Msun"),
    "scale[core-collapse, Fe]": (0.5, 2.0),
    "scale[thermonuclear, Fe]": (0.8, 1.2),
}


def test_sobol_indices_of_straight_lines_are_exact():
    stars = population(species=["O", "Fe"])
    found = sobol(stars, EVENTS, of="yield")
    assert found.exact and found.evaluations == 8
    base = stars.weigh([13.8e9])
    cc, ia = (base.get("Fe", k)[0] for k in ("core-collapse", "thermonuclear"))
    # Fe = rest + cc s + (ia / 1.3e-3) n t with uniform s, n, t: variances by hand
    unit = ia / 1.3e-3
    parts = [
        (unit * 1.0 * 1e-3) ** 2 / 12,
        (cc * 1.5) ** 2 / 12,
        (unit * 1.5e-3 * 0.4) ** 2 / 12,
        (unit * 1e-3 * 0.4 / 12) ** 2,
    ]
    assert found.variance[0, 1] == pytest.approx(sum(parts), rel=1e-10)
    assert found.first[:, 0, 1] == pytest.approx(np.array(parts[:3]) / sum(parts), rel=1e-9)
    assert found.pairs[1, 0, 1] == pytest.approx(parts[3] / sum(parts), rel=1e-6)
    assert found.total[0, 0, 1] == pytest.approx((parts[0] + parts[3]) / sum(parts), rel=1e-9)
    assert found.first[0, 0, 0] == pytest.approx(1) and not found.first_error.any()


def test_sampled_sobol_indices_agree_with_quadrature():
    pytest.importorskip("SALib")
    stars = population(species=["Mn", "Fe"])
    ranges = {"imf.slopes[-1]": (2.1, 2.6), "thermonuclear.number": (1e-3, 2e-3)}
    found = sobol(stars, ranges, of="log", samples=1024, seed=3)
    assert not found.exact and found.evaluations == 1024 * 6
    # Gauss-Legendre on the square of both ranges
    from steelyard.integrate import Plan

    plan = Plan(stars, tuple(ranges), [13.8e9])
    nodes, weights = np.polynomial.legendre.leggauss(12)
    weights = weights / 2
    at = [lo + (hi - lo) * (nodes + 1) / 2 for lo, hi in ranges.values()]
    thetas = np.array(list(itertools.product(*at)))
    values = np.log10(plan.batch(thetas)[:, 0]).reshape(12, 12, -1)
    mean = np.einsum("i,j,ijk->k", weights, weights, values)
    variance = np.einsum("i,j,ijk->k", weights, weights, (values - mean) ** 2)
    first = [
        np.einsum("i,ik->k", weights, (np.einsum("j,ijk->ik", weights, values) - mean) ** 2) / variance,
        np.einsum("j,jk->k", weights, (np.einsum("i,ijk->jk", weights, values) - mean) ** 2) / variance,
    ]
    assert (abs(found.first[:, 0] - first) <= 1.5 * found.first_error[:, 0]).all()
    assert found.variance[0] == pytest.approx(variance, rel=0.05)


def test_sobol_of_ratios_is_over_sources_that_follow_both():
    pytest.importorskip("SALib")
    stars = population(species=["Mn", "Fe", "O"])
    found = sobol(
        stars,
        {"thermonuclear.delay.limits[0]": ("40 Myr", "0.4 Gyr")},
        of="ratio",
        samples=64,
        ages=["1 Gyr"],
    )
    assert found.first[0, 0, 0] == pytest.approx(1, abs=0.1)
    assert np.isnan(found.first[0, 0, 1])
    ends = [
        contrast(
            stars,
            {
                "delay": {"form": "power-law", "slope": -1.1, "limits": [first, "13.8 Gyr"]},
                "imf": "salpeter-1955",
            },
            ages=["1 Gyr"],
        ).ratio[2, 0]
        for first in ("41 Myr", "0.4 Gyr")
    ]
    assert found.variance[0, 0] < np.ptp([e[0] for e in ends]) ** 2 / 4


@pytest.mark.parametrize(
    ("ranges", "more", "says"),
    [
        ({}, {}, "no range"),
        ({"imf.slope": (1, 2)}, {}, "isn't known"),
        ({"thermonuclear.number": (2e-3, 1e-3)}, {}, "isn't below"),
        ({"thermonuclear.number": 2e-3}, {}, "two values"),
        ({"thermonuclear.number": ("1 yr", "2 yr")}, {}, "number"),
        ({"metallicity": (0.01, 0.02)}, {"samples": 100}, "power of 2"),
        ({"metallicity": (0.01, 0.02)}, {"of": "mass"}, "isn't known"),
    ],
)
def test_ranges_that_cannot_be_used(ranges, more, says):
    with pytest.raises(InputError) as error:
        sobol(population(species=["O"]), ranges, **more)
    assert says in str(error.value)


def test_sobol_without_salib_says_how_to_get_it(monkeypatch):
    load = builtins.__import__

    def without(name, *args, **kwargs):
        if name.startswith("SALib"):
            raise ImportError(name)
        return load(name, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(InputError, match=r"steelyard\[sobol\]"):
        sobol(population(species=["O"]), {"metallicity": (0.01, 0.02)})
