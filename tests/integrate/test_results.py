"""Labels, sums, units and marks of a result."""

import json
import math

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Join, Population, StellarSource
from steelyard.yields import mixture
from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import atomic_mass

AGES = (1e7, 1e9, 1.38e10)


@pytest.fixture(scope="module")
def out():
    return Population(
        0.02,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        joins=[Join(("agb", "core-collapse"))],
        species="nuclides",
        ages=AGES,
    ).weigh()


def test_the_sum_of_sources_is_the_sum(out):
    for convention in ("total", "net"):
        for rate in (False, True):
            whole = out.get("O16", None, convention, rate)
            parts = [out.get("O16", s, convention, rate) for s in out.sources]
            np.testing.assert_allclose(whole, np.sum(parts, axis=0), rtol=1e-14)
    np.testing.assert_allclose(out.returned, out.ejected.sum(axis=0), rtol=1e-15)
    np.testing.assert_allclose(out.remnants, np.sum(list(out.remnants_by_kind.values()), axis=0), rtol=1e-15)


def test_names_are_read_as_papers_write_them(out):
    assert out.get("16O").tolist() == out.get("O16").tolist() == out.get("o-16").tolist()
    iron = sum(out.get(n) for n in out.species if n.startswith("Fe"))
    np.testing.assert_allclose(out.get("Fe"), iron, rtol=1e-14)


def test_ratios_by_hand(out):
    """[O/Fe] = log10 of the number ratio over that of Asplund et al. (2009): log eps 8.69 and 7.50."""
    o, fe = out.get("O"), out.get("Fe")
    wanted = np.log10(o / atomic_mass("O") / (fe / atomic_mass("Fe"))) - (8.69 - 7.50)
    np.testing.assert_allclose(out.ratio("O", "Fe"), wanted, atol=1e-12)
    assert mixture("asplund-2009").log_eps["O"] == 8.69
    assert mixture("asplund-2009").log_eps["Fe"] == 7.50
    early = out.ratio("Mg", "Fe", source="thermonuclear")
    assert math.isnan(early[0])
    assert early[-1] < -1
    assert np.isnan(out.ratio("O", "Fe", source="agb", convention="net")).any()


def test_quantities_carry_their_units(out):
    pytest.importorskip("pint")
    mass, speed = out.quantity("Fe56"), out.quantity("Fe56", rate=True)
    assert mass.check("[]")
    assert speed.check("1/[time]")
    np.testing.assert_allclose(speed.m_as("1/Gyr"), out.get("Fe56", rate=True) * 1e9, rtol=1e-12)


def test_missing_is_not_zero(out):
    assert out.lacking("H1") == ("thermonuclear",)
    assert "agb" in out.lacking("Cl35")
    assert out.lacking("Ge74") == ("agb", "thermonuclear")
    assert out.lacking("O16") == ()
    assert "H1" in out.missing["thermonuclear"]
    frame = out.to_pandas()
    assert np.isnan(frame.loc[("thermonuclear", 1.38e10), "H1"])
    assert frame.loc[("sum", 1.38e10), "H1"] == pytest.approx(float(out.get("H1")[-1]))
    assert not np.isnan(frame.loc["core-collapse"]["O16"]).any()


def test_the_table_is_labelled(out):
    frame = out.to_pandas("net", rate=True)
    assert frame.index.names == ["source", "age_yr"]
    assert frame.shape == (4 * len(AGES), len(out.species))
    assert frame.loc[("agb", 1e9), "N14"] == float(out.get("N14", "agb", "net", True)[1])
    assert frame.attrs["convention"] == "net"


def test_the_plain_form_goes_through_json_without_loss(out):
    plain = json.loads(json.dumps(out.to_dict()))
    keys = {"metallicity", "ages_yr", "species", "sources", "total", "net", "sum", "missing", "returned"}
    assert keys | {"living", "remnants", "events", "notes"} <= set(plain)
    assert plain["ages_yr"] == list(AGES)
    assert plain["total"]["agb"]["C12"] == out.get("C12", "agb").tolist()
    assert plain["sum"]["net"]["C12"] == pytest.approx(out.get("C12", None, "net").tolist())
    assert list(plain["events"]) == ["core-collapse", "thermonuclear"]
    assert np.add(np.add(plain["living"], plain["remnants"]), plain["returned"]) == pytest.approx([1.0] * 3)


def test_ranges_tile_the_mass_function(out):
    assert [(r["from"], r["to"], r["source"], r["served_by"]) for r in out.ranges] == [
        (0.08, 1.0, "agb", "swallow"),
        (1.0, 6.5, "agb", "karakas-2010"),
        (6.5, 7.0, "agb", "bridge"),
        (7.0, 9.0, "agb", "doherty-2014"),
        (9.0, 13.0, "core-collapse", "bridge"),
        (13.0, 40.0, "core-collapse", "kobayashi-2006"),
        (40.0, 120.0, "core-collapse", "swallow"),
    ]


def test_notes_say_what_was_assumed(out):
    notes = "\n".join(out.notes)
    assert "the wind before it is returned at birth composition" in notes
    assert "derived with birth composition scaled from anders-grevesse-1989" in notes
    held = Population(0.03, [StellarSource("agb", ["karakas-2010"])]).weigh()
    assert any("the slice at 0.02 is held" in n for n in held.notes)


def test_delayed_events_may_not_use_up_more_than_there_is_unsaid():
    late = DelayedSource("thermonuclear", ["nomoto-1997-w7"], 0.5, "maoz-graur-2017")
    out = Population(0.02, [StellarSource("agb", ["karakas-2010"]), late]).weigh(1.38e10)
    assert any("use up more white dwarf mass than there is" in n for n in out.notes)


@pytest.mark.parametrize(
    "ask, says",
    [
        (lambda r: r.get("Mg27"), "Mg27"),
        (lambda r: r.get("Magnesia"), "Magnesia"),
        (lambda r: r.get("Mg24", "AGB"), "did you mean agb"),
        (lambda r: r.get("Mg24", convention="gross"), "choose total or net"),
        (lambda r: r.lacking("U"), "isn't in the result"),
    ],
)
def test_refusals(out, ask, says):
    with pytest.raises(InputError, match=says):
        ask(out)
