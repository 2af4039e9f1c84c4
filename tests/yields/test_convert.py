import numpy as np
import pint
import pytest

from steelyard.yields import InputError, Slice, YieldSet, load, mixture
from steelyard.yields.conventions import factor_from_total, net_from_total, total_from_factor, total_from_net
from steelyard.yields.convert import (
    birth_mixture,
    overabundance,
    rescaled,
    to_elements,
)


def closes(grid):
    for one in grid.slices:
        at_birth = one.ejected[:, None] * one.initial
        assert np.allclose(one.net, one.total - at_birth, rtol=1e-12, atol=1e-12)
        assert np.allclose(one.total.sum(axis=1) + one.rest(), one.ejected, rtol=1e-12)


def test_net_and_total_are_each_others_inverse():
    one = load("kobayashi-2006").slices[2]
    net = net_from_total(one.total, one.initial, one.ejected)
    assert np.allclose(net, one.net, rtol=1e-12, atol=1e-15)
    assert np.allclose(total_from_net(net, one.initial, one.ejected), one.total, rtol=1e-13)


def test_total_of_a_printed_model():
    # Karakas 2010, table A2, 1 Msun, Z = 0.02: p: yield -8.1048310E-03, mass(i)_lost 2.9179156E-01,
    # X0 6.8791503E-01, mass(i)_0 2.9989639E-01
    ejected = 2.9989639e-01 / 6.8791503e-01
    total = total_from_net([[-8.1048310e-03]], [6.8791503e-01], [ejected])
    assert total[0, 0] == pytest.approx(2.9179156e-01, rel=1e-7)


def test_log_production_factor_of_a_printed_model():
    # the same model: log10(<X(i)>/X0(i)) of p is -1.1948545E-02, of c12 -6.1675999E-02, of he4 2.6124727E-02
    # (ejected and remnant mass of these tables miss the initial mass by 5.03e-5 of it: 5.0e-5 dex here)
    agb = load("karakas-2010")
    factors = overabundance(agb)[-1][0]
    for name, printed in (("H1", -1.1948545e-02), ("C12", -6.1675999e-02), ("He4", 2.6124727e-02)):
        assert np.log10(factors[agb.species.index(name)]) == pytest.approx(printed, abs=6e-5)


def test_factors_come_back_as_totals():
    one = load("marigo-2001").slices[0]
    factors = factor_from_total(one.total, one.initial, one.ejected)
    assert np.allclose(total_from_factor(factors, one.initial, one.ejected), one.total, rtol=1e-13)


def test_factors_against_the_sun():
    # a star that ejects the Sun's own mixture has factors of 1
    sun = mixture("asplund-2009")
    names = ("O", "Fe")
    x = np.array([sun.mass_fractions()[n] for n in names])
    one = Slice(0.02, np.array([1.0]), np.array([0.4]), np.zeros(1), 0.4 * x[None], np.zeros((1, 2)), x)
    assert np.allclose(overabundance(YieldSet("x", "agb", names, (one,)), "asplund-2009")[0], 1.0, rtol=1e-9)


def test_no_reference_is_not_a_number_and_not_a_yield():
    assert np.isnan(factor_from_total([[0.1]], [0.0], [1.0])[0, 0])
    with pytest.raises(InputError, match="reference mass fraction of 0"):
        total_from_factor([[2.0]], [0.0], [1.0])
    with pytest.raises(InputError, match="no composition at birth"):
        overabundance(load("nomoto-1997-w7"))


def test_units_and_shapes_are_checked():
    kg = pint.UnitRegistry().Quantity([1.98841e30], "kg")
    assert net_from_total([[0.05]], [0.01], kg)[0, 0] == pytest.approx(0.04, rel=1e-5)
    with pytest.raises(InputError, match="wrong dimension"):
        net_from_total([[0.05]], [0.01], ["3 Myr"])
    with pytest.raises(InputError, match="shape"):
        net_from_total([[0.05, 0.1]], [0.01], [4.0])


@pytest.mark.parametrize("id", ["karakas-2010", "kobayashi-2006", "iwamoto-1999-W7"])
def test_elements_keep_every_sum(id):
    nuclides = load(id)
    elements = to_elements(nuclides)
    assert elements.follows_elements
    closes(elements)
    for a, b in zip(nuclides.slices, elements.slices, strict=True):
        assert np.allclose(a.total.sum(axis=1), b.total.sum(axis=1), rtol=1e-13)
        assert np.allclose(a.rest("net"), b.rest("net"), atol=1e-13)
        o = [i for i, s in enumerate(nuclides.parsed) if s.symbol == "O"]
        assert np.allclose(a.net[:, o].sum(axis=1), b.net[:, elements.species.index("O")], rtol=1e-12)


def test_elements_say_what_they_lack_and_refuse_twice():
    made = to_elements(load("doherty-2014"))
    assert "H without H2" in made.notes[-1]
    with pytest.raises(InputError, match="elements already"):
        to_elements(made)


def test_ids_notes_and_checksums():
    parent = load("karakas-2010")
    a, b = to_elements(parent), to_elements(parent)
    assert a.id == "karakas-2010+elements"
    assert a.checksum == b.checksum != parent.checksum and len(a.checksum) == 64
    assert parent.notes == a.notes[:-1]
    assert a.info["species"] == "elements" and parent.info["species"] == "nuclides"


def test_birth_mixtures():
    assert birth_mixture(load("kobayashi-2006")) == "anders-grevesse-1989"
    assert birth_mixture(load("limongi-chieffi-2018-R-v000")) == "asplund-2009"
    assert birth_mixture(load("doherty-2014")) is None


@pytest.mark.parametrize("solar", ["anders-grevesse-1989", "lodders-2003", "asplund-2021"])
def test_rescaling_leaves_what_was_printed(solar):
    for id, printed in (("marigo-2001", "net"), ("kobayashi-2006", "listed")):
        old = load(id)
        new = rescaled(old, solar)
        closes(new)
        for a, b in zip(old.slices, new.slices, strict=True):
            assert np.allclose(getattr(a, printed), getattr(b, printed), rtol=1e-12, atol=1e-14)


def test_rescaling_is_loading_with_that_mixture():
    for a, b in zip(
        rescaled(load("marigo-2001"), "lodders-2003").slices,
        load("marigo-2001", "lodders-2003").slices,
        strict=True,
    ):
        assert np.allclose(a.total, b.total, rtol=1e-13)


def test_rescaling_to_the_same_mixture_changes_nothing():
    assert rescaled(load("marigo-2001"), "asplund-2009") is load("marigo-2001")


@pytest.mark.parametrize(
    ("id", "solar", "why"),
    [
        ("karakas-2010", "asplund-2009", "own composition at birth"),
        ("doherty-2014", "asplund-2009", "own composition at birth"),
        ("nomoto-1997-w7", "asplund-2009", "isn't born from gas"),
        ("limongi-chieffi-2018-R-v000", "anders-grevesse-1989", "rule it out"),
        ("marigo-2001", "asplund-2008", "asplund-2009"),
    ],
)
def test_rescaling_is_refused_where_it_means_nothing(id, solar, why):
    with pytest.raises(InputError, match=why):
        rescaled(load(id), solar)
