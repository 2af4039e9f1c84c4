"""Solar mixtures and birth compositions, against their papers and closed sums."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.yields import composition
from steelyard.yields.composition import abundance_ratio, birth_composition, mixture, mixtures
from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import isotopes, symbols

NUCLIDES = [one.name for symbol in symbols() for one in isotopes(symbol)]
LIGHT = {"H", "He", "Li"}

metallicities = st.floats(0.0, 0.1)
enhancements = st.dictionaries(st.sampled_from(["C", "O", "Mg", "Fe", "Ba"]), st.floats(-2, 2), max_size=3)


@given(metallicities, st.sampled_from(mixtures()), enhancements)
def test_everything_sums_to_one_and_metals_to_z(z, id, enhancement):
    elements = birth_composition(symbols(), z, id, enhancement)
    nuclides = birth_composition(NUCLIDES, z, id, enhancement)
    metals = [x for s, x in zip(symbols(), elements, strict=True) if s not in LIGHT]
    assert math.fsum(elements) == pytest.approx(1.0, abs=1e-15)
    assert math.fsum(nuclides) == pytest.approx(1.0, abs=1e-14)
    assert math.fsum(metals) == pytest.approx(z, rel=1e-14)
    assert nuclides.min() >= 0.0


@given(metallicities, enhancements)
def test_nuclides_add_up_to_their_elements(z, enhancement):
    x = dict(zip(NUCLIDES, birth_composition(NUCLIDES, z, "lodders-2003", enhancement), strict=True))
    for symbol, whole in zip(
        symbols(), birth_composition(symbols(), z, "lodders-2003", enhancement), strict=True
    ):
        assert sum(x[one.name] for one in isotopes(symbol)) == pytest.approx(whole, rel=1e-12, abs=1e-300)


@pytest.mark.parametrize("id", mixtures())
def test_the_sun_comes_out_at_its_own_metallicity(id):
    solar = mixture(id).mass_fractions()
    z = math.fsum(x for e, x in solar.items() if e not in LIGHT)
    names = [e for e in solar if e != "Li"]
    assert birth_composition(names, z, id) == pytest.approx([solar[e] for e in names], rel=1e-7)


def test_lithium_is_that_of_meteorites_at_solar_and_of_the_big_bang_at_zero():
    sun = mixture("asplund-2009")
    lithium, hydrogen = birth_composition(["Li", "H"], sun.Z, sun)
    assert math.log10(lithium / 6.94 / (hydrogen / 1.008)) + 12 == pytest.approx(3.26, abs=0.01)
    lithium, hydrogen = birth_composition(["Li7", "H1"], 0.0, sun)
    assert lithium / 7.016 / (hydrogen / 1.008) == pytest.approx(4.68e-10, rel=1e-3)


def test_big_bang():
    """Cyburt+ 2016, RMP 88, 015004, from memory: Y 0.2471, D/H 2.58e-5, 3He/H 1.00e-5."""
    h, d, he3, he4, c = birth_composition(["H1", "H2", "He3", "He4", "C12"], 0.0, "asplund-2021")
    assert he3 + he4 == pytest.approx(0.24709, rel=1e-12)
    assert d / 2.01410178 / (h / 1.00782503) == pytest.approx(2.58e-5, rel=1e-6)
    assert he3 / 3.01602932 / (h / 1.00782503) == pytest.approx(1.0039e-5, rel=1e-6)
    assert c == 0.0


def test_halfway_to_the_sun_is_the_mean():
    solar = mixture("asplund-2009").mass_fractions()
    z = math.fsum(x for e, x in solar.items() if e not in LIGHT)
    names = ["He4", "He3", "H2", "Fe56"]
    none, half, whole = (birth_composition(names, f * z, "asplund-2009") for f in (0.0, 0.5, 1.0))
    assert half == pytest.approx((none + whole) / 2, rel=1e-12)


def test_enhancement_raises_over_iron_by_its_dex():
    names = ["O", "Mg", "Fe", "H"]
    raised = birth_composition(names, 1e-3, "asplund-2009", {"O": 0.4, "Mg": -0.1})
    for index, dex in ((0, 0.4), (1, -0.1)):
        got = abundance_ratio(raised[index], raised[2], names[index], "Fe", "asplund-2009")
        assert got == pytest.approx(dex, abs=1e-12)
    assert raised[2] < birth_composition(["Fe"], 1e-3, "asplund-2009")[0]


def test_unstable_nuclides_are_not_there_at_birth():
    assert not birth_composition(["Al26", "Al26m", "Ni56", "Tc", "n"], 0.02, "asplund-2009").any()


@pytest.mark.parametrize("id", mixtures())
def test_the_sun_has_no_abundance_ratio(id):
    x = mixture(id).mass_fractions()
    assert abundance_ratio(x["O"], x["Fe"], "O", "Fe", id) == pytest.approx(0.0, abs=1e-12)
    x12, x13 = birth_composition(["C12", "C13"], 0.01, id)
    assert abundance_ratio(x12, x13, "C12", "C13", id) == pytest.approx(0.0, abs=1e-12)


def test_ratio_by_hand():
    """[O/Fe] of 1 Msun O and 0.1 Msun Fe: log(10 * 55.845 / 15.999) - (8.69 - 7.50)."""
    wanted = math.log10(10 * 55.845 / 15.999) - 1.19
    assert abundance_ratio(1.0, 0.1, "O", "Fe", "asplund-2009") == pytest.approx(wanted, abs=2e-5)


def test_ratio_of_what_is_not_there_is_nan_without_a_warning():
    with np.errstate(all="raise"):
        found = abundance_ratio(
            [1.0, 0.0, -1.0, 1.0, np.nan], [1.0, 1.0, 1.0, 0.0, 1.0], "O", "Fe", "asplund-2009"
        )
    assert np.isfinite(found).tolist() == [True, False, False, False, False]


def test_known_solar_ratios():
    """C/O 0.55, Mg/Si 1.23 (Asplund+ 2009), Fe 7.51 (solar system of Anders & Grevesse 1989); from memory."""
    sun = mixture("asplund-2009")
    assert sun.number_ratio("C", "O") == pytest.approx(0.55, abs=0.005)
    assert sun.number_ratio("Mg", "Si") == pytest.approx(1.23, abs=0.005)
    assert sun.number_ratio("He", "H") == pytest.approx(0.085, abs=0.0005)
    assert math.log10(mixture("anders-grevesse-1989").number_ratio("Fe", "H")) + 12 == pytest.approx(7.51)


def test_metals_to_hydrogen_of_the_papers():
    """(Z/X)sun 0.0231, 0.0177, 0.0181, 0.0187 as the papers quote it; from memory."""
    quoted = {
        "grevesse-sauval-1998": 0.0231,
        "lodders-2003": 0.0177,
        "asplund-2009": 0.0181,
        "asplund-2021": 0.0187,
    }
    for id, wanted in quoted.items():
        x = mixture(id).mass_fractions()
        assert (1 - x["H"] - x["He"]) / x["H"] == pytest.approx(wanted, rel=0.01)


def test_bad_input_says_what_and_how_to_mend():
    with pytest.raises(InputError, match=r"asplund-2008.*asplund-2009"):
        mixture("asplund-2008")
    with pytest.raises(InputError, match="no mass fraction"):
        birth_composition(["H"], -0.01, "asplund-2009")
    with pytest.raises(InputError, match="no mass fraction"):
        birth_composition(["H"], 0.9, "asplund-2009")
    with pytest.raises(InputError, match="not a metal"):
        birth_composition(["H"], 0.01, "asplund-2009", {"He": 0.1})
    with pytest.raises(InputError, match="isn't known"):
        birth_composition(["H"], 0.01, "asplund-2009", {"Oxygen": 0.1})
    with pytest.raises(InputError, match="has no Tc"):
        abundance_ratio(1.0, 1.0, "Tc", "Fe", "asplund-2009")
    with pytest.raises(InputError, match="isn't found"):
        abundance_ratio(1.0, 1.0, "Al26", "Al27", "asplund-2009")


def test_altered_figures_are_refused(tmp_path, monkeypatch):
    import shutil
    from pathlib import Path

    folder = tmp_path / "solar" / "asplund-2009"
    shipped = Path(composition.__file__).parents[1] / "tables" / "solar" / "asplund-2009"
    shutil.copytree(shipped, folder)
    monkeypatch.setattr(composition, "files", lambda _: tmp_path)
    mixture.cache_clear()
    mixtures.cache_clear()
    try:
        assert mixture("asplund-2009").Z == 0.0134
        mixture.cache_clear()
        figures = folder / "abundances.csv"
        figures.write_text(figures.read_text().replace("8.69", "8.96"))
        with pytest.raises(InputError, match="checksum"):
            mixture("asplund-2009")
    finally:
        mixture.cache_clear()
        mixtures.cache_clear()
