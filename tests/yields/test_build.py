"""From printed figures to the grid: conventions, winds, birth compositions, refusals."""

import numpy as np
import pytest

from steelyard.yields import birth_composition, load
from steelyard.yields.build import Printed, build, number
from steelyard.yields.errors import InputError

SOLAR = "asplund-2009"
INFO = {
    "kind": "agb",
    "yields": "total",
    "ejected": "mass - remnant",
    "covers": "life",
    "units": {"mass": "Msun"},
}
MODELS = [
    {"metallicity": "0.02", "mass": "3.0", "remnant": "0.7", "final_mass": "2.5"},
    {"metallicity": "0.02", "mass": "2.0", "remnant": "0.6", "final_mass": "1.9"},
    {"metallicity": "0.004", "mass": "2.0", "remnant": "0.65", "final_mass": "2.0"},
]
KEYS = [{"metallicity": m["metallicity"], "mass": m["mass"]} for m in MODELS]
TOTAL = [
    k | {"12C": a, "O16": b, "H1": c}
    for k, a, b, c in zip(
        KEYS, ("0.02", "0.01", "0.015"), ("1e-2", "2e-2", "3E-3"), ("1.5", "0.9", "0.9"), strict=True
    )
]
INITIAL = [
    {"metallicity": "0.0200", "H1": "0.7", "12C": "0.003", "O16": "0.009"},
    {"metallicity": "0.004", "H1": "0.75", "12C": "0.0006", "O16": "0.002"},
]


def made(info=None, models=MODELS, yields=None, initial=INITIAL):
    return build("invented", INFO | (info or {}), Printed(models, yields or {"total": TOTAL}, initial), SOLAR)


def test_models_are_sorted_and_species_ordered():
    grid = made()
    assert grid.species == ("H1", "C12", "O16")
    assert grid.metallicities == (0.004, 0.02)
    assert grid.at(0.02).mass.tolist() == [2.0, 3.0]
    assert grid.at(0.02).total[0].tolist() == [0.9, 0.01, 0.02]
    assert grid.at(0.02).ejected.tolist() == [1.4, 2.3]
    assert grid.derived == {"net"}


def test_net_from_total_and_back():
    """net = total - X0 ejected, whichever is printed."""
    from_total = made()
    one = from_total.at(0.02)
    np.testing.assert_allclose(one.net, one.total - np.outer([1.4, 2.3], [0.7, 0.003, 0.009]), rtol=1e-14)
    by_key = {
        (s.metallicity, m): row for s in from_total.slices for m, row in zip(s.mass, s.net, strict=True)
    }
    net = [
        k
        | {
            n: repr(float(v))
            for n, v in zip(
                ("H1", "12C", "O16"), by_key[float(k["metallicity"]), float(k["mass"])], strict=True
            )
        }
        for k in KEYS
    ]
    from_net = made({"yields": "net"}, yields={"net": net})
    assert from_net.derived == {"total"}
    for a, b in zip(from_total.slices, from_net.slices, strict=True):
        np.testing.assert_allclose(b.total, a.total, rtol=1e-12, atol=1e-15)


def test_winds_before_the_explosion_come_at_birth_composition():
    grid = made({"covers": "explosion"})
    one = grid.at(0.02)
    np.testing.assert_allclose(one.wind, [0.1, 0.5], rtol=1e-12)
    np.testing.assert_allclose(one.listed, [[0.9, 0.01, 0.02], [1.5, 0.02, 0.01]], rtol=1e-12)
    np.testing.assert_allclose(one.total[1], [1.5 + 0.35, 0.02 + 0.0015, 0.01 + 0.0045], rtol=1e-12)
    assert any("wind before it" in n for n in grid.notes)


def test_the_mixture_stands_in_for_compositions_that_arent_printed():
    grid = made(initial=None)
    wanted = birth_composition(["H1", "C12", "O16"], 0.004, SOLAR)
    np.testing.assert_allclose(grid.at(0.004).initial, wanted, rtol=1e-14)
    assert any("scaled from asplund-2009" in n for n in grid.notes)
    declared = made(
        {"birth": {"mixture": "anders-grevesse-1989", "enhancement": {"O": 0.4}, "below": 0.01}}, initial=None
    )
    raised = birth_composition(["O16"], 0.004, "anders-grevesse-1989", {"O": 0.4})
    assert declared.at(0.004).initial[2] == pytest.approx(float(raised[0]), rel=1e-14)
    plain = birth_composition(["O16"], 0.02, "anders-grevesse-1989")
    assert declared.at(0.02).initial[2] == pytest.approx(float(plain[0]), rel=1e-14)


@pytest.mark.parametrize(
    "rule, extra, wanted",
    [
        ("mass - remnant", {}, [1.4, 2.3]),
        ("printed", {"ejected": "1.25"}, [1.25, 1.25]),
        ("sum of total", {}, [0.93, 1.53]),
        ("birth hydrogen", {"birth_hydrogen": "0.98"}, [1.4, 1.4]),
    ],
)
def test_ways_to_know_the_ejected_mass(rule, extra, wanted):
    grid = made({"ejected": rule}, models=[m | extra for m in MODELS])
    np.testing.assert_allclose(grid.at(0.02).ejected, wanted, rtol=1e-12)


def test_both_printed_leave_the_birth_composition_to_be_found():
    """X0 = sum of (expelled - net) over sum of expelled: doherty-2014 prints both, and no X0."""
    grid = load("doherty-2014")
    assert grid.derived == frozenset()
    for one in grid.slices:
        x = (one.total - one.net).sum(axis=0) / one.ejected.sum()
        np.testing.assert_allclose(one.initial, x, rtol=1e-12, atol=1e-18)
        assert 0.68 < one.initial[grid.species.index("H1")] < 0.78
        # model by model the same, to the printed digits of the larger of the two
        miss = np.abs(one.total - one.net - np.outer(one.ejected, one.initial))
        assert np.all(miss <= 2e-3 * np.maximum(np.abs(one.total), np.outer(one.ejected, one.initial)) + 2e-3)
    # metals at birth add up to Z, those past Ni62 and of the gap at Cl to Mn aside
    one = grid.at(0.02)
    metals = sum(x for s, x in zip(grid.parsed, one.initial, strict=True) if s.Z > 3)
    assert metals == pytest.approx(0.02, rel=0.1)


def test_lifetimes_come_in_years():
    grid = load("limongi-chieffi-2018-R-v000")
    one = grid.slices[-1]
    assert one.lifetime[0] == pytest.approx(1.733510020177e7)


@pytest.mark.parametrize(
    "change, says",
    [
        ({"info": {"ejected": "guess"}}, "ejected = 'guess' isn't known; use printed"),
        (
            {"models": [{k: v for k, v in m.items() if k != "remnant"} for m in MODELS]},
            "column 'remnant' is missing",
        ),
        (
            {"models": [m | {"remnant": "nan"} for m in MODELS]},
            "models.csv row 2 column remnant: 'nan' isn't a number",
        ),
        (
            {
                "models": [m | {"mass": "-2"} for m in MODELS],
                "yields": {"total": [t | {"mass": "-2"} for t in TOTAL]},
            },
            "mass isn't positive",
        ),
        ({"yields": {"total": TOTAL[:2]}}, "2 rows for 3 models"),
        ({"yields": {"total": TOTAL[::-1]}}, "keep the rows in the same order"),
        ({"yields": {"total": [t | {"O16": ""} for t in TOTAL]}}, "column O16: '' isn't a number"),
        ({"yields": {"total": [t | {"Qq9": "1"} for t in TOTAL]}}, "Qq9"),
        ({"initial": INITIAL[:1]}, "no row for metallicity 0.004"),
        ({"initial": [{k: v for k, v in r.items() if k != "O16"} for r in INITIAL]}, "O16"),
        ({"models": [], "yields": {"total": []}}, "no models"),
    ],
)
def test_refusals_name_the_place(change, says):
    with pytest.raises(InputError, match=says) as caught:
        made(**change)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize("text", ["", "x", "nan", "inf", "-inf", None, "1,5", "1.0.0"])
def test_what_is_no_number(text):
    with pytest.raises(InputError, match="row 7: "):
        number(text, "row 7")


def test_numbers_as_journals_print_them():
    assert [number(t, "") for t in ("1.57E+00", " 13 ", "-4e-3", "+.5")] == [1.57, 13.0, -0.004, 0.5]
