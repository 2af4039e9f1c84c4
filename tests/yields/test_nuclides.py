"""Names, masses and isotopic composition, against the IUPAC data of periodictable and half-lives."""

import pytest

from steelyard.yields.errors import InputError
from steelyard.yields.nuclides import (
    Species,
    atomic_mass,
    atomic_number,
    fractions,
    is_stable,
    isotopes,
    name,
    parse,
    symbols,
)

SPELLINGS = {
    "C12": ["C12", "12C", "C-12", "c12", " c 12 ", "^12^C", "$^{12}$C", r"{}^{12}\mathrm{C}", "C_12", "¹²C"],
    "Fe56": ["Fe56", "56fe", "FE56", "fe-56", r"$^{56}\rm Fe$", "56-Fe", "Fe⁵⁶"],
    "H1": ["p", "H1", "h1", "1H", "prot", "proton", "p1"],
    "H2": ["d", "D", "h2", "2H", "H-2"],
    "H3": ["t", "H3"],
    "n1": ["n", "n1", "neut"],
    "He4": ["alpha", "he4", "4He", r"\alpha", "α"],
    "P": ["P"],
    "P31": ["P31", "p31", "31P"],
    "N": ["N"],
    "N14": ["n14", "N14", "14n"],
    "C": ["C", "c"],
    "Co": ["Co", "CO", "co"],
    "Al26": ["al-6", "al26", "26Al", "Al-26"],
    "Al26m": ["al*6", "Al26m", "26mAl", "Al-26m", "Al26*", "26Al*", "²⁶ᵐAl"],
    "U238": ["238U", "u238"],
}


@pytest.mark.parametrize(
    ("wanted", "text"),
    [(wanted, text) for wanted, texts in SPELLINGS.items() for text in texts],
)
def test_spellings(wanted, text):
    assert name(text) == wanted


def test_every_name_reads_back():
    for symbol in symbols():
        assert name(symbol) == symbol
        for one in isotopes(symbol):
            assert parse(one.name) == one


@pytest.mark.parametrize(
    ("text", "near"),
    [
        ("Xx12", "did you mean"),
        ("99C", "C8 to C22"),
        ("12Cr3", "Cr42 to"),
        ("", "known"),
        ("N1", "N10 to"),
        ("Fee56", "Fe56"),
    ],
)
def test_unknown_names_are_refused_with_the_nearest(text, near):
    with pytest.raises(InputError, match=r"isn't known") as caught:
        parse(text)
    assert near in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_number_is_no_species():
    with pytest.raises(InputError, match="not text"):
        parse(12)


def test_order_and_kind():
    mixed = [parse(t) for t in ("Fe56", "al*6", "C13", "al-6", "C", "n", "p", "C12")]
    assert [s.name for s in sorted(mixed)] == ["n1", "H1", "C", "C12", "C13", "Al26", "Al26m", "Fe56"]
    assert parse("C13").element == Species("C")
    assert parse("n").element == parse("n")
    assert parse("n").Z == 0
    assert parse("C").is_element
    assert not parse("C12").is_element


def test_atomic_numbers():
    assert len(symbols()) == 118
    assert [atomic_number(s) for s in ("H", "C", "Fe", "Og")] == [1, 6, 26, 118]
    with pytest.raises(InputError, match="Fe"):
        atomic_number("Fee")


def test_masses_and_composition_are_those_of_iupac():
    """periodictable carries the atomic mass evaluation and IUPAC's isotopic compositions."""
    import periodictable

    # these differ from the Earth's or are measured better elsewhere, see tables/isotopes
    solar = {"H", "He", "Li", "B", "C", "N", "O", "Ne", "S", "Ar", "Kr", "Xe", "Pb", "Th", "U"}
    for symbol in symbols():
        element = getattr(periodictable, symbol)
        assert element.number == atomic_number(symbol)
        for one, share in fractions(symbol).items():
            assert atomic_mass(one) == pytest.approx(element[one.A].mass, rel=1e-12)
            if symbol not in solar:
                assert share == pytest.approx(element[one.A].abundance / 100, rel=3e-4)
        if fractions(symbol) and symbol not in solar:
            # IUPAC's mean atomic masses are rounded and, for some elements, measured apart
            assert atomic_mass(symbol) == pytest.approx(element.mass, rel=2e-4)


def test_solar_system_isotopes():
    """Asplund+ 2009, ARA&A 47, 481, table 3; from memory."""
    assert fractions("Ne")[parse("Ne20")] == pytest.approx(0.929431, rel=1e-6)
    assert fractions("Ar")[parse("Ar36")] == pytest.approx(0.845946, rel=1e-6)
    # carbon and oxygen of the Earth: 12C/13C = 89, 16O/18O = 499 (common handbook values)
    carbon, oxygen = fractions("C"), fractions("O")
    assert carbon[parse("C12")] / carbon[parse("C13")] == pytest.approx(89, abs=1)
    assert oxygen[parse("O16")] / oxygen[parse("O18")] == pytest.approx(499, abs=2)
    for symbol in symbols():
        assert not fractions(symbol) or sum(fractions(symbol).values()) == pytest.approx(1.0, abs=1e-14)
    assert fractions("Tc") == {}


def test_mean_mass_of_an_element_without_isotopes_is_refused():
    with pytest.raises(InputError, match="Tc"):
        atomic_mass("Tc")


def test_stability_against_decay_data():
    """Half-lives of ICRP 107 in radioactivedecay, for every natural nuclide and the usual gamma emitters."""
    import radioactivedecay

    known = {n.replace("-", "") for n in radioactivedecay.DEFAULTDATA.nuclides}
    for symbol in symbols():
        for one in isotopes(symbol):
            if one.name in known and one.name != "Ta180":
                half_life = radioactivedecay.Nuclide(one.name).half_life("y")
                assert is_stable(one) == (half_life > 1e13), one.name
    for fading in ("Al26", "Al26m", "Ti44", "Ni56", "Co56", "Fe60", "Be7", "K40", "Tc", "n"):
        assert not is_stable(fading)
    assert is_stable("Fe56")
    assert is_stable("Bi209")
    assert is_stable("Ta180")
