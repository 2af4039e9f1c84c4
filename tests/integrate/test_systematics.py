"""What a study of systematics asks for, by hand: failures with a probability, shares that go with
mass and metallicity, sub-classes of events, laws of metallicity. Sets made here are invented."""

import pickle
import tomllib
from dataclasses import replace

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Join, Plan, Population, StellarSource, imf
from steelyard.integrate.files import agrees, write_hdf5
from steelyard.integrate.laws import (
    Given,
    NumberLaw,
    PowerLawIMF,
    ShareLaw,
    SlopeLaw,
    VaryingDelay,
    law_of,
)
from steelyard.integrate.popfile import population_from_dict, population_to_toml
from steelyard.integrate.sources import FailureTable, Mixed
from steelyard.integrate.stars import star_table
from steelyard.yields import Slice, YieldSet
from steelyard.yields.errors import InputError

Z = 0.02
MF = imf("salpeter-1955", limits=(0.1, 100))


def invented(id, models, metallicities=(Z,), kind="core-collapse"):
    """An invented set of oxygen from {mass: (ejected, wind, oxygen)}."""
    mass = np.array(list(models), dtype=float)
    ejected, wind, oxygen = (np.array([m[k] for m in models.values()], dtype=float) for k in range(3))
    x = np.array([0.01])
    total = oxygen[:, None]
    one = Slice(Z, mass, ejected, wind, total, total - np.outer(ejected, x), x)
    return YieldSet(id, kind, ("O16",), tuple(replace(one, metallicity=z) for z in metallicities))


# straight lines: oxygen m/10 - 0.5 and twice that; ejected m - 2 and m - 4; wind m/10
A = invented("a", {10: (8, 1, 0.5), 20: (18, 2, 1.5), 40: (38, 4, 3.5)}, (0.001, 0.02))
B = invented("b", {10: (6, 1, 1.0), 20: (16, 2, 3.0), 40: (36, 4, 7.0)}, (0.001, 0.02))


def stars(sets=(A,), z=Z, mass_function=MF, **options):
    source = StellarSource("core-collapse", list(sets), **options)
    return Population(z, [source], imf=mass_function, species=["O16"], ages=["20 Gyr"])


def oxygen_between(lo, hi, low=-0.5, slope=0.1):
    return low * float(MF.number(lo, hi)) + slope * float(MF.mass(lo, hi))


def total(population):
    return float(population.weigh().get("O16")[0])


# --- explosions that fail with a probability -------------------------------------------------------------

TABLE = {"masses": ["15 Msun", "20 Msun", "30 Msun"], "probability": [0.2, 0.6]}


@pytest.mark.parametrize("interpolation", ["linear", "cubic"])
def test_a_share_of_stars_implodes(interpolation):
    """(1 - p) y + p w in each step, with the wind w = 0.01 m/10 of oxygen at birth composition."""
    population = replace(stars(implode=TABLE), interpolation=interpolation)
    wanted = oxygen_between(10, 15) + oxygen_between(30, 40)
    for lo, hi, p in ((15, 20, 0.2), (20, 30, 0.6)):
        wanted += (1 - p) * oxygen_between(lo, hi) + p * oxygen_between(lo, hi, 0.0, 0.001)
    found = population.weigh()
    assert float(found.get("O16")[0]) == pytest.approx(wanted, rel=1e-12)
    imploded = 0.2 * float(MF.number(15, 20)) + 0.6 * float(MF.number(20, 30))
    assert float(found.events["imploded"][0]) == pytest.approx(imploded, rel=1e-13)
    assert float(found.events["core-collapse"][0]) == pytest.approx(float(MF.number(8, 100)), rel=1e-13)
    assert float((found.living + found.remnants + found.returned)[0]) == pytest.approx(1, abs=1e-13)
    how = {r["served_by"] for r in found.ranges}
    assert {"a, 0.2 imploding", "a, 0.6 imploding"} <= how


def test_remnants_of_failures_are_black_holes_and_the_others_neutron_stars():
    """2 Msun where the star explodes, 0.9 m where it implodes; the mean of both is neither."""
    found = stars(implode=TABLE).weigh()
    holes = 0.9 * (0.2 * float(MF.mass(15, 20)) + 0.6 * float(MF.mass(20, 30)))
    # nothing ejects above 40 and under 10 Msun, where `edges` swallow; all over 8 collapses
    holes += float(MF.mass(40, 100)) + float(MF.mass(8, 10))
    assert float(found.remnants_by_kind["black hole"][0]) == pytest.approx(holes, rel=1e-12)
    left = float(MF.number(10, 40)) - 0.2 * float(MF.number(15, 20)) - 0.6 * float(MF.number(20, 30))
    assert float(found.remnants_by_kind["neutron star"][0]) == pytest.approx(2 * left, rel=1e-12)


def test_probabilities_of_zero_and_one_are_no_windows_and_windows():
    none = stars(implode={"masses": [15, 20], "probability": [0]})
    assert total(none) == pytest.approx(total(stars()), rel=1e-14)
    sure = stars(implode={"masses": [15, 20], "probability": [1]})
    assert total(sure) == total(stars(implode=[(15, 20)]))


def test_rates_of_failures():
    """The rate at which stars implode is the share of the rate at which they collapse."""
    population = stars(implode=TABLE)
    age = float(population.prepared.curve.lifetime(25.0))
    found = population.weigh([age])
    assert float(found.event_rates["imploded"][0]) == pytest.approx(
        0.6 * float(found.event_rates["core-collapse"][0]), rel=1e-13
    )


@pytest.mark.parametrize(
    ("table", "says"),
    [
        ({"masses": [15, 20], "probability": [0.1, 0.2]}, "2 masses and 2 probabilities don't fit together"),
        ({"masses": [20, 15], "probability": [0.1]}, "masses don't increase"),
        ({"masses": [15, 20], "probability": [1.1]}, "a probability is 1.1; give probabilities from 0 to 1"),
        ({"masses": [15, 20], "probabilities": [1]}, "did you mean probability"),
        ({"masses": [15, 20]}, "probability is missing"),
        ({"masses": ["15 yr", "20 yr"], "probability": [1]}, "wrong dimension"),
    ],
)
def test_tables_that_are_none(table, says):
    with pytest.raises(InputError, match=says) as found:
        StellarSource("core-collapse", ["x"], implode=table)
    assert str(found.value).startswith("source core-collapse: implode: ")


# --- shares that go with mass and metallicity --------------------------------------------------------------


def test_shares_in_steps_of_mass():
    """All of a below 20 Msun, half b above, whose oxygen is twice that of a."""
    mixed = stars([{A: 1, "to": "20 Msun"}, {A: 0.5, B: 0.5, "from": "20 Msun"}])
    assert total(mixed) == pytest.approx(oxygen_between(10, 20) + 1.5 * oxygen_between(20, 40), rel=1e-12)
    how = [
        (r["from"], r["to"], r["served_by"]) for r in mixed.weigh().ranges if "swallow" not in r["served_by"]
    ]
    assert how == [(10, 20, "a up to 20 Msun"), (20, 40, "0.5 a + 0.5 b from 20 Msun")]


def test_a_window_serves_and_what_comes_after_fills_in():
    mixed = stars([{B: 1, "from": 15, "to": 25}, A])
    wanted = oxygen_between(10, 15) + 2 * oxygen_between(15, 25) + oxygen_between(25, 40)
    assert total(mixed) == pytest.approx(wanted, rel=1e-12)


def test_windows_with_a_gap_are_joined():
    """From 20 to 30 Msun a straight line from 1.5 (a) to 5 (b)."""
    gap = stars([{A: 1, "to": 20}, {B: 1, "from": 30}])
    line = oxygen_between(20, 30, 1.5 - 2 * 3.5, 0.35)
    wanted = oxygen_between(10, 20) + line + 2 * oxygen_between(30, 40)
    assert total(gap) == pytest.approx(wanted, rel=1e-12)


@pytest.mark.parametrize(("z", "share"), [(0.001, 0.9), (0.0105, 0.5), (0.02, 0.1), (0.03, 0.1), (0.0, 0.9)])
def test_shares_are_linear_in_metallicity(z, share):
    mixed = stars([{A: [0.1, 0.9], B: [0.9, 0.1], "metallicities": [0.001, 0.02]}], z)
    assert total(mixed) == pytest.approx((1 + share) * oxygen_between(10, 40), rel=1e-12)
    # a copy at another metallicity gets other shares
    assert total(replace(mixed, metallicity=0.001)) == pytest.approx(1.9 * oxygen_between(10, 40), rel=1e-12)
    assert mixed.laws == ("core-collapse.sets",)


@pytest.mark.parametrize(
    ("entry", "says"),
    [
        ({"a": 0.5, "b": 0.5, "from": 20, "to": 10}, "can't serve masses from 20 to 10 Msun"),
        ({"a": 0.5, "b": 0.5, "from": "20 Myr"}, "wrong dimension"),
        ({"a": [0.5], "b": [0.5], "metallicities": [0.01]}, "give two at least"),
        ({"a": [0.5, 0.5], "b": [0.5, 0.5], "metallicities": [0.02, 0.01]}, "don't increase"),
        ({"a": [0.5, 0.5], "b": [0.5], "metallicities": [0.01, 0.02]}, "don't fit together"),
        ({"a": [0.5, 0.4], "b": [0.5, 0.5], "metallicities": [0.01, 0.02]}, "not 0.9 at Z = 0.02"),
        ({"a": [0.5, -0.5], "b": [0.5, 1.5], "metallicities": [0.01, 0.02]}, "must be positive"),
        ({"from": 20}, "needs one share for each set"),
    ],
)
def test_mixtures_that_are_none(entry, says):
    with pytest.raises(InputError, match=says):
        StellarSource("core-collapse", [entry])


def test_events_have_no_window_of_mass():
    with pytest.raises(InputError, match="events have no initial mass"):
        DelayedSource("late", [{"a": 1, "from": 20}], 1e-3, "maoz-graur-2017")


# --- sub-classes of events, and AGB sets in series ----------------------------------------------------------


def test_sub_classes_of_thermonuclear_events():
    """Iwamoto+ 1999: what half W7 and half CDD2 eject is the mean of both."""

    def iron(sets):
        late = DelayedSource("thermonuclear", sets, 1e-3, "maoz-graur-2017")
        population = Population(
            Z, [StellarSource("core-collapse", [A]), late], species=["Fe"], ages=["13.8 Gyr"]
        )
        return float(population.weigh().get("Fe", "thermonuclear")[0])

    w7, cdd2 = iron(["iwamoto-1999-W7"]), iron(["iwamoto-1999-CDD2"])
    mixed = {"iwamoto-1999-W7": 0.5, "iwamoto-1999-CDD2": 0.5}
    assert iron([mixed]) == pytest.approx(0.5 * (w7 + cdd2), rel=1e-13)
    law = {"iwamoto-1999-W7": [1, 0.6], "iwamoto-1999-CDD2": [0, 0.4], "metallicities": [0, 0.04]}
    assert iron([law]) == pytest.approx(0.8 * w7 + 0.2 * cdd2, rel=1e-13)


def test_agb_sets_in_series_hand_over_where_one_is_kept_to_its_masses():
    """Marigo 2001 below 2 Msun, Karakas 2010 above, Doherty+ 2014 from its top on."""
    series = [{"marigo-2001": 1, "to": "2 Msun"}, "karakas-2010", "doherty-2014"]
    population = Population(0.008, [StellarSource("agb", series)], species=["C"], ages=["13.8 Gyr"])
    found = population.weigh()
    served = {r["served_by"]: (r["from"], r["to"]) for r in found.ranges}
    assert served["marigo-2001 up to 2 Msun"][1] == 2 == served["karakas-2010"][0]
    assert served["doherty-2014"][0] == 6.5
    parts = []
    for sets, limits in (
        (["marigo-2001"], (0.1, 2)),
        (["karakas-2010"], (2, 6.5)),
        (["doherty-2014"], (6.5, 9)),
    ):
        alone = Population(
            0.008, [StellarSource("agb", sets, limits=limits)], species=["C"], ages=["13.8 Gyr"]
        )
        parts.append(float(alone.weigh().get("C")[0]))
    # from 6 Msun, Karakas 2010's highest model at this metallicity, to 6.5 Msun there is a join
    joined = float(found.get("C")[0]) - sum(parts)
    gap = served["bridge"]
    ends = [
        next(s for s in population.prepared.spans if s.how == n) for n in ("karakas-2010", "doherty-2014")
    ]
    low, high = ends[0].curve.values[-1, 0], ends[1].curve.values[0, 0]
    number, mass = float(population.imf.number(*gap)), float(population.imf.mass(*gap))
    slope = (high - low) / (gap[1] - gap[0])
    assert joined == pytest.approx((low - slope * gap[0]) * number + slope * mass, rel=1e-9)


# --- laws of metallicity ---------------------------------------------------------------------------------


def test_a_slope_of_the_mass_function_that_goes_with_metallicity():
    """2.3 at Z = 0.02 and 0.3 more a dex: 2.0 at 0.002."""
    law = PowerLawIMF([1.3, SlopeLaw(2.3, 0.3, 0.02)], [0.5], (0.1, 100))
    poor = stars(z=0.002, mass_function=law)
    plain = imf("power-law", slopes=[1.3, 2.0], breaks=[0.5], limits=(0.1, 100))
    assert total(poor) == pytest.approx(total(stars(z=0.002, mass_function=plain)), rel=1e-13)
    rich = replace(poor, metallicity=0.02)
    assert rich.imf.pieces[1].slope == pytest.approx(2.3)
    # a mass function given anew has no law
    other = replace(poor, imf=MF)
    assert other.laws == () and other.imf is MF and poor.laws == ("imf",)


def test_a_function_of_metallicity_that_gives_a_mass_function():
    def top_heavy_when_poor(z):
        return MF if z >= 0.01 else imf("salpeter-1955", limits=(1, 100))

    poor, rich = (stars(z=z, mass_function=top_heavy_when_poor) for z in (0.001, 0.02))
    assert poor.imf.limits == (1, 100) and rich.imf.limits == (0.1, 100)
    assert replace(poor, metallicity=0.02).imf.limits == (0.1, 100)
    assert law_of(MF) is None
    text = population_to_toml(poor)
    assert "# not held by this file: how the mass function depends on metallicity" in text
    assert "top_heavy_when_poor; here as at 0.001" in text
    with pytest.raises(InputError, match=r"doesn't return a mass function at Z = 0.02"):
        stars(mass_function=lambda z: 3)
    with pytest.raises(InputError, match="imf can't be read from 3"):
        stars(mass_function=3)


def late(number, delay="maoz-graur-2017", z=Z):
    source = DelayedSource("thermonuclear", ["nomoto-1997-w7"], number, delay)
    return Population(z, [StellarSource("core-collapse", [A]), source], species=["Fe"], ages=["1 Gyr"])


def test_numbers_of_events_that_go_with_metallicity():
    """1e-3 at Z = 0.02, to the power -0.5: 10 times as many at 2e-4."""
    law = {"value": "1e-3 / Msun", "power": -0.5, "reference": 0.02}
    assert late(law, z=2e-4).sources[1].number == pytest.approx(1e-2)
    population = late(NumberLaw(1e-3, -0.5, 0.02))
    assert population.sources[1].number == pytest.approx(1e-3)
    poor = replace(population, metallicity=2e-4)
    assert float(poor.weigh().events["thermonuclear"][0]) == pytest.approx(
        10 * float(population.weigh().events["thermonuclear"][0]), rel=1e-12
    )
    assert late(lambda z: z).sources[1].number == Z
    # a number given anew has no law
    fixed = replace(population.sources[1], number=5e-4)
    assert replace(poor, sources=[poor.sources[0], fixed]).laws == ()
    with pytest.raises(InputError, match=r"number at Z = 0.02 is negative: -0.02 per Msun"):
        late(lambda z: -z)


def test_delays_that_go_with_metallicity():
    """Slope -1.1 at 0.02 and 0.1 more a dex: -1.2 at 0.002."""
    slope = {"value": -1.1, "per_dex": 0.1, "reference": 0.02}
    limits = ["40 Myr", "13.8 Gyr"]
    varying = late(1e-3, {"form": "power-law", "slope": slope, "limits": limits}, 0.002)
    plain = late(1e-3, {"form": "power-law", "slope": -1.2, "limits": limits}, 0.002)
    assert float(varying.weigh().get("Fe")[0]) == pytest.approx(float(plain.weigh().get("Fe")[0]), rel=1e-12)
    assert varying.laws == ("thermonuclear.delay",)
    broken = {"form": "broken-power-law", "slopes": [-0.5, slope], "breaks": ["1 Gyr"], "limits": limits}
    assert late(1e-3, broken, 0.2).sources[1].delay.slopes == pytest.approx((-0.5, -1.0))
    own = late(1e-3, lambda z: {"form": "exponential", "timescale": 1e9 / (z * 100), "limits": limits})
    assert own.sources[1].delay.timescale == pytest.approx(5e8)


def test_laws_in_log_metallicity_end_at_zero():
    with pytest.raises(
        InputError, match="source thermonuclear: a law in log Z gives nothing at metallicity 0"
    ):
        late(NumberLaw(1e-3, -0.5, 0.02), z=0.0)


def test_values_keep_their_law_through_copies_and_pickles():
    rate = pickle.loads(pickle.dumps(Given(2e-3, NumberLaw(1e-3, 0.5, 0.02))))
    assert rate == 2e-3 and rate.law == NumberLaw(1e-3, 0.5, 0.02)
    share = Mixed(("a", "b"), ShareLaw([0, 0.02], [[1, 0], [0, 1]])).at(0.01)
    assert share.shares == (0.5, 0.5) and pickle.loads(pickle.dumps(share.shares)).law == law_of(share.shares)


def test_plans_and_star_tables_dont_follow_laws():
    population = late(NumberLaw(1e-3, -0.5, 0.02))
    with pytest.raises(
        InputError, match=r"metallicity can't be free where thermonuclear.number depends on it"
    ):
        Plan(population, free=["metallicity"])
    assert Plan(population, free=["thermonuclear.number"]).start == pytest.approx([1e-3])
    with pytest.raises(InputError, match=r"thermonuclear.number depends on metallicity by a law"):
        star_table(population)


@pytest.mark.parametrize("free", [[], ["events_from"], ["metallicity"]])
def test_plans_follow_failures_and_windows(free):
    """A plan gives what weighing gives."""
    sets = [{A: 1, "to": "20 Msun"}, {A: 0.5, B: 0.5, "from": "20 Msun"}]
    population = stars(sets, implode=TABLE)
    names = [f"core-collapse.{f}" if f == "events_from" else f for f in free]
    plan = Plan(population, free=names, ages=["10 Myr", "20 Gyr"])
    weighed = population.weigh(["10 Myr", "20 Gyr"]).get("O16")
    assert plan(plan.start)[:, 0] == pytest.approx(weighed, rel=1e-12)


# --- all of it in a file -----------------------------------------------------------------------------------

EVERYTHING = """
metallicity = 0.008
species = ["C", "O", "Fe"]
ages = ["100 Myr", "13.8 Gyr"]
[imf]
form = "power-law"
slopes = [1.3, { value = 2.3, per_dex = 0.2, reference = 0.014 }]
breaks = ["0.5 Msun"]
limits = ["0.1 Msun", "100 Msun"]
[[source]]
kind = "agb"
sets = [{ "marigo-2001" = 1, to = "2 Msun" }, "karakas-2010", "doherty-2014"]
[[source]]
kind = "core-collapse"
sets = [
    { "kobayashi-2006" = 1, to = "25 Msun" },
    { "limongi-chieffi-2018-R-v000" = [0.2, 0.6], "limongi-chieffi-2018-M-v300" = [0.8, 0.4], metallicities = [0.001, 0.02], from = "25 Msun" },
]
implode = { masses = ["15 Msun", "20 Msun", "120 Msun"], probability = [0.1, 0.4] }
[[join]]
between = ["agb", "core-collapse"]
[[source]]
kind = "thermonuclear"
sets = [{ "iwamoto-1999-W7" = 0.8, "iwamoto-1999-WDD2" = 0.2 }]
number = { value = "1.3e-3 / Msun", power = -0.3, reference = 0.014 }
delay = { form = "power-law", slope = { value = -1.1, per_dex = 0.1, reference = 0.014 }, limits = ["40 Myr", "13.8 Gyr"] }
"""


def test_a_file_with_everything_is_read_and_written_again(tmp_path):
    population = population_from_dict(tomllib.loads(EVERYTHING))
    assert population.laws == ("imf", "core-collapse.sets", "thermonuclear.number", "thermonuclear.delay")
    assert population.imf.pieces[1].slope == pytest.approx(2.3 + 0.2 * np.log10(0.008 / 0.014))
    assert population.sources[1].sets[1].shares == pytest.approx((0.2 + 0.4 * 7 / 19, 0.8 - 0.4 * 7 / 19))
    assert population.sources[1].implode == FailureTable([15, 20, 120], [0.1, 0.4])
    again = population_from_dict(tomllib.loads(population_to_toml(population)))
    assert "#" not in population_to_toml(population)
    assert again.laws == population.laws
    for a, b in (
        (again, population),
        (replace(again, metallicity=0.02), replace(population, metallicity=0.02)),
    ):
        assert np.array_equal(a.weigh().cumulative, b.weigh().cumulative)
    found = population.weigh()
    np.testing.assert_allclose(found.living + found.remnants + found.returned, 1, rtol=0, atol=1e-12)
    write_hdf5(found, tmp_path / "y.h5")
    same, message = agrees(tmp_path / "y.h5")
    assert same, message


def test_a_law_of_the_users_own_is_written_as_at_the_metallicity_and_weighs_the_same(tmp_path):
    population = late(lambda z: z / 10)
    text = population_to_toml(population)
    assert "how the number of source thermonuclear depends on metallicity" in text
    sources = tomllib.loads(text)["source"]
    assert sources[1]["number"] == Z / 10


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("per_dex = 0.2", "per_dx = 0.2", "imf.slopes: key 'per_dx' isn't known; did you mean per_dex?"),
        ("power = -0.3, ", "", "source 3 (thermonuclear): number: a law of metallicity lacks power"),
        ("power = -0.3", 'power = "1 Msun"', "power has the wrong dimension"),
        ("reference = 0.014 }]", "reference = 0 }]", "reference 0 isn't a metallicity above 0"),
        (
            "probability = [0.1, 0.4]",
            "probability = [0.1]",
            "source 2 (core-collapse): implode: 3 masses and 1",
        ),
        ("probability = [0.1, 0.4]", 'probability = "high"', "implode: probability is a list, not 'high'"),
        ("probability = [0.1, 0.4]", "chance = 3", "key 'chance' isn't known"),
        ('from = "25 Msun"', 'from = "25 Gyr"', "from has the wrong dimension"),
        ("metallicities = [0.001, 0.02]", "metallicities = 0.02", "metallicities is a list"),
        ("[0.2, 0.6]", "[0.2, 0.7]", "not 1.1 at Z = 0.02"),
        ("metallicity = 0.008", "metallicity = 0", "a law in log Z gives nothing at metallicity 0"),
        ("slope = { value = -1.1", "slope = { values = -1.1", "delay.slope: key 'values' isn't known"),
    ],
)
def test_mistakes_in_a_file_are_told_in_one_line(old, new, says):
    assert old in EVERYTHING
    with pytest.raises(InputError) as found:
        population_from_dict(tomllib.loads(EVERYTHING.replace(old, new, 1)), "mine.toml")
    assert str(found.value).startswith("mine.toml: ") and says in str(found.value)


def test_a_varying_delay_writes_its_preset_out():
    law = VaryingDelay({"form": "maoz-graur-2017", "slope": SlopeLaw(-1.1, 0.1, 0.02)})
    assert law.to_dict() == {
        "form": "power-law",
        "slope": {"value": -1.1, "per_dex": 0.1, "reference": 0.02},
        "limits": [4e7, 13.8e9],
    }


def test_joins_by_the_name_of_a_window():
    gap = stars([{A: 1, "to": 20}, {B: 1, "from": 30}])
    names = [entry.name for entry in gap.sources[0].sets]
    assert names == ["a up to 20 Msun", "b from 30 Msun"]
    swallowed = replace(gap, joins=[Join(tuple(names), "swallow")])
    assert total(swallowed) == pytest.approx(oxygen_between(10, 20) + 2 * oxygen_between(30, 40), rel=1e-12)
