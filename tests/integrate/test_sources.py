"""What is declared of sources, joins and edges."""

import pytest

from steelyard.integrate import DelayedSource, Edges, Join, StellarSource
from steelyard.integrate.sources import Mixed, mass_range, mixed
from steelyard.yields import load
from steelyard.yields.errors import InputError


def test_a_source_reads_units_and_writes_itself_back():
    source = StellarSource(
        "core-collapse",
        ["kobayashi-2006", {"limongi-chieffi-2018-R-v000": 0.5, "limongi-chieffi-2018-M-v000": 0.5}],
        limits=["13 Msun", 40],
        implode=[("20 Msun", "25 Msun")],
        events_from="9 Msun",
    )
    assert source.limits == (13.0, 40.0)
    assert source.implode == ((20.0, 25.0),)
    assert source.events_from == 9.0
    again = StellarSource(**source.to_dict())
    assert again == source
    assert source.to_dict()["sets"][1] == {
        "limongi-chieffi-2018-R-v000": 0.5,
        "limongi-chieffi-2018-M-v000": 0.5,
    }


def test_an_agb_source_writes_nothing_that_only_core_collapse_has():
    assert StellarSource("agb", ["karakas-2010"]).to_dict() == {"kind": "agb", "sets": ["karakas-2010"]}


def test_a_delayed_source_writes_itself_back():
    source = DelayedSource("thermonuclear", ["nomoto-1997-w7"], "1.3e-3 / Msun", "maoz-graur-2017")
    assert source.number == 1.3e-3
    again = DelayedSource(**source.to_dict())
    assert again == source


def test_a_kind_of_the_users_own():
    source = DelayedSource("kilonova", ["nomoto-1997-w7"], 1e-5, "maoz-graur-2017", consumes="neutron star")
    assert source.to_dict()["consumes"] == "neutron star"


def test_joins_and_edges_write_themselves_back():
    assert Join(**Join(["agb", "core-collapse"], "reach-up").to_dict()) == Join(
        ("agb", "core-collapse"), "reach-up"
    )
    assert Edges(**Edges("reach-down", "return-only", "refuse").to_dict()) == Edges(
        "reach-down", "return-only", "refuse"
    )


def test_entries_of_a_source():
    own = load("karakas-2010")
    assert mixed(own).name == "karakas-2010"
    assert mixed(own).load("asplund-2009") == (own,)
    both = mixed({"karakas-2010": 0.25, own: 0.75})
    assert both.name == "0.25 karakas-2010 + 0.75 karakas-2010"
    assert mixed(both) is both
    assert Mixed(("a",), (1.0,)).name == "a"


def test_mass_range_reads_quantities():
    pint = pytest.importorskip("pint")
    kg = 1.988409870698051e30  # IAU 2015 nominal solar mass parameter over CODATA 2018 G
    assert mass_range(pint.UnitRegistry().Quantity([kg, 2 * kg], "kg"), "x") == pytest.approx((1.0, 2.0))


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: StellarSource("AGB", ["karakas-2010"]), "isn't one of agb, core-collapse"),
        (lambda: StellarSource("agb", "karakas-2010"), "list of at least one set"),
        (lambda: StellarSource("agb", []), "list of at least one set"),
        (lambda: StellarSource("agb", [3]), "can't be read from 3"),
        (lambda: StellarSource("agb", ["x"], limits=(9, 1)), "write the lower mass first"),
        (lambda: StellarSource("agb", ["x"], limits=(-1, 9)), "mass isn't positive"),
        (lambda: StellarSource("agb", ["x"], limits=8), "two masses"),
        (lambda: StellarSource("agb", ["x"], limits=("1 yr", "2 yr")), "wrong dimension"),
        (lambda: StellarSource("core-collapse", ["x"], implode=(20, 25)), "implode needs two masses"),
        (lambda: StellarSource("core-collapse", ["x"], winds="lost"), 'choose "birth" or "rest"'),
        (lambda: StellarSource("core-collapse", ["x"], events_from=0), "events_from must be positive"),
        (lambda: StellarSource("core-collapse", ["x"], neutron_star_limit=-1), "must be positive"),
        (lambda: StellarSource("agb", [{"a": 0.5, "b": 0.4}]), "sum to 1, not 0.9"),
        (lambda: StellarSource("agb", [{"a": 1.5, "b": -0.5}]), "positive"),
        (lambda: StellarSource("agb", [{}]), "one share for each set"),
        (lambda: DelayedSource("agb", ["x"], 1, "maoz-graur-2017"), "takes no delay"),
        (lambda: DelayedSource("t", ["x", "y"], 1, "maoz-graur-2017"), "list of one set"),
        (lambda: DelayedSource("t", "x", 1, "maoz-graur-2017"), "list of one set"),
        (lambda: DelayedSource("t", ["x"], -1, "maoz-graur-2017"), "number is negative"),
        (lambda: DelayedSource("t", ["x"], "1 Msun", "maoz-graur-2017"), "wrong dimension"),
        (lambda: DelayedSource("t", ["x"], 1, "maoz-2017"), "did you mean maoz-graur-2017"),
        (lambda: DelayedSource("t", ["x"], 1, "maoz-graur-2017", "white dwarfs"), "did you mean white dwarf"),
        (lambda: Join("agb"), "two names"),
        (lambda: Join(("a", "b", "c")), "two names"),
        (lambda: Join(("a", "b"), "reach"), "choose bridge, reach-up"),
        (lambda: Edges(below="reach-up"), "edges.below: policy 'reach-up' isn't known"),
        (lambda: Edges(above="bridge"), "edges.above"),
        (lambda: Edges(metallicity="extend"), "choose hold, refuse"),
    ],
)
def test_refusals_say_how_to_mend(make, says):
    with pytest.raises(InputError, match=says) as caught:
        make()
    assert "\n" not in str(caught.value)
