"""What the audit finds in the shipped sets: the oddities known of them, and the rest judged one by one."""

import pytest

from steelyard.yields import load, shipped
from steelyard.yields.audit import at_least

# oddities that are known of the papers' own tables: set, metallicity, mass, check, species
KNOWN = [
    ("karakas-2010", 1e-4, 5.5, "smooth run", "Ni62"),  # born with Ni62 ten orders below its siblings
    ("karakas-2010-reimers", 1e-4, 5.5, "smooth run", "Ni62"),
    ("karakas-2010", 1e-4, 1.0, "negative total", "C14"),  # net C14 -1.7e-11 without C14 at birth
    ("doherty-2014", 1e-4, 7.5, "sum of nets", None),  # 1.0e-3 instead of 0
    ("doherty-2014", 8e-3, 8.0, "sum of nets", None),  # 1.9e-4 instead of 0
    ("kobayashi-2006", 1e-3, 30.0, "sum of totals", None),  # +0.06 Msun
    ("kobayashi-2006", 0.0, 25.0, "sum of totals", None),  # -0.039 Msun
    ("kobayashi-2006", 4e-3, 30.0, "sum of totals", None),  # -0.035 Msun
    ("limongi-chieffi-2018-R-v150", 0.01345, 15.0, "smooth run", "Fe"),  # four times the iron
    ("limongi-chieffi-2018-R-v300", 0.01345, 15.0, "smooth run", "Fe"),
    ("limongi-chieffi-2018-M-v150", 0.01345, 15.0, "smooth run", "Fe"),
    ("limongi-chieffi-2018-M-v300", 0.01345, 15.0, "smooth run", "Fe"),
]

# Everything else that is found in a model. The causes are judged from the figures alone, not looked up in the
# papers; "as printed" says no more than that the figure stands so in the table.
JUDGED = {
    "doherty-2014": {
        (1e-4, 6.5): "Mg25: the lightest of three models; hot-bottom burning of Mg sets in: nature",
        (
            1e-3,
            7.5,
        ): "He3 and Li7: the model is cut off while Li is rich in its envelope: nature of the mass loss",
        (4e-3, 6.5): "net C12 is positive here and negative in the heavier ones: dredge-up wins over burning",
    },
    "karakas-2010": {
        (1e-4, 1.0): "Ne22: no third dredge-up in the lightest model, at the edge of the grid: nature",
        (1e-4, 3.0): "Al26: dips between dredge-up below and hot-bottom burning above: nature",
        (
            1e-4,
            6.0,
        ): "He3, Ne21: the model with another mass loss (VW93) than the slice's others: known variant",
        (4e-3, 1.0): "S35: none made without dredge-up: nature",
    },
    "karakas-2010-reimers": {
        (1e-4, 1.0): "as karakas-2010: C14 and Ne22",
        (1e-4, 3.0): "as karakas-2010",
        (4e-3, 1.0): "as karakas-2010",
        (4e-3, 6.0): "Mg24: burnt in the hottest envelope of the slice: nature",
        (1e-4, 6.0): "net Mg24 is positive with Reimers mass loss, with more pulses: known variant",
    },
    "kobayashi-2006": {
        (
            0.0,
            13.0,
        ): "Ne20 to Ne22 a factor 70 low: little carbon burning left outside the mass cut; as printed",
        (0.0, 25.0): "N14: protons mixed into the helium shell at Z = 0; its sum also misses (known)",
        (0.0, 30.0): "Cr54 and 10 more neutron-rich nuclides low at Z = 0: trace, as printed",
        (0.0, 40.0): "S36, Li7: trace at Z = 0, as printed",
        (4e-3, 18.0): "N15 is 0.05 Msun, 2000 times its neighbours', with C13: protons mixed into the helium"
        " shell, or a misprint; as printed, and it governs N15 at Z = 0.004",
        (4e-3, 20.0): "B11: trace, as printed",
        (0.02, 30.0): "the weak s-process from Ni64 to Ge a factor 10 to 26 low: as printed",
        (1e-3, 40.0): "sum of totals +0.045 Msun: within the printed digits",
        (4e-3, 25.0): "sum of totals +0.033 Msun: within the printed digits",
    },
    "limongi-chieffi-2018-M-v000": {
        (3.236e-5, 15.0): "Ar, K, Ca, Sc, Cu: carbon and oxygen shells merge before the collapse: nature",
        (0.01345, 40.0): "F is made where its neighbours burn it: the wind of this model lays it bare",
    },
    "limongi-chieffi-2018-M-v150": {
        (3.236e-5, 25.0): "Kr, Rb: lowest s-process of the slice; from rotation's mixing, erratic by nature",
        (3.236e-5, 30.0): "Pb: highest s-process of the slice, likewise",
        (3.236e-3, 13.0): "K: shell merger",
        (3.236e-4, 25.0): "net Mo, Nb: s-process of rotation",
    },
    "limongi-chieffi-2018-M-v300": {
        (3.236e-5, 15.0): "Sc: shell merger",
        (3.236e-5, 25.0): "no s-process past Zr, with 20 and 30 Msun full of it: erratic mixing, as printed",
    },
    "limongi-chieffi-2018-R-v000": {
        (3.236e-5, 15.0): "S to Ca, Sc: shell merger",
        (3.236e-4, 80.0): "ejected mass: the only one of its slice that loses more than 1 Msun in its wind",
        (3.236e-3, 25.0): "F: the last model that explodes, next to those that implode",
        (3.236e-3, 30.0): "N: the wind brings no nitrogen yet, that of 40 Msun does",
    },
    "limongi-chieffi-2018-R-v150": {
        (3.236e-5, 20.0): "Kr, Rb: s-process of rotation",
        (3.236e-4, 25.0): "La, Pr, Ce, Cs: s-process of rotation",
        (3.236e-4, 20.0): "net Ce, La: s-process of rotation",
        (3.236e-3, 13.0): "K: shell merger",
        (3.236e-3, 40.0): "C: no helium-burnt layers in its wind yet, those of 60 Msun have them",
    },
    "limongi-chieffi-2018-R-v300": {
        (3.236e-5, 15.0): "Sc: shell merger",
        (3.236e-5, 25.0): "Mg: the last model that explodes",
        (3.236e-4, 60.0): "Ga to Zr: a wind with the ashes of helium burning, alone in its slice",
        (3.236e-3, 30.0): "C: between explosion below and winds above",
        (3.236e-3, 60.0): "Li is made, on a level of 1e-10 of the ejecta",
        (0.01345, 13.0): "F a factor 5 high: made by rotation; as printed",
    },
}


@pytest.mark.parametrize(("id", "metallicity", "mass", "check", "species"), KNOWN)
def test_known_oddities_are_found_by_model_and_species(id, metallicity, mass, check, species):
    hits = [
        f
        for f in load(id).audit()
        if f.check == check and f.mass == mass and f.metallicity == pytest.approx(metallicity, rel=1e-3)
    ]
    assert hits
    assert species is None or any(species in f.species for f in hits)


def test_sizes_of_known_oddities():
    doherty = {
        (f.mass, f.metallicity): f.size for f in load("doherty-2014").audit() if f.check == "sum of nets"
    }
    assert doherty[7.5, 1e-4] == pytest.approx(1.0e-3, rel=0.05)
    assert doherty[8.0, 8e-3] == pytest.approx(1.9e-4, rel=0.05)
    sums = [f.size for f in load("kobayashi-2006").audit() if f.check == "sum of totals"]
    assert max(abs(s) for s in sums) == pytest.approx(0.06, abs=0.002)


@pytest.mark.parametrize("id", shipped())
def test_every_other_finding_is_a_judged_one_and_they_are_few(id):
    known = [(z, m) for i, z, m, *_ in KNOWN if i == id]
    judged = list(JUDGED.get(id, {}))
    models = {(f.metallicity, f.mass) for f in load(id).audit() if f.mass is not None}
    others = {m for m in models if not any(_same(m, k) for k in known)}
    assert all(any(_same(m, j) for j in judged) for m in others), sorted(others)
    assert all(any(_same(m, j) for m in models) for j in judged)
    assert len(others) <= 8


def _same(a, b):
    return a[1] == b[1] and a[0] == pytest.approx(b[0], rel=1e-3)


@pytest.mark.parametrize("id", shipped())
def test_no_shipped_set_has_an_error(id):
    assert at_least(load(id).audit(), "error") == []


def test_findings_are_plain_sentences_with_advice():
    for id in shipped():
        for f in load(id).audit():
            assert f.explanation and "\n" not in f.explanation and f.advice and f.set == id
            assert f.to_dict()["species"] == list(f.species)


def test_radioactive_nuclides_and_gaps_are_told():
    by_check = {f.check: f for f in load("karakas-2010").audit()}
    assert "Al26" in by_check["undecayed"].species
    # neither chlorine nor the elements to manganese are in the network, says the paper
    assert {"Cl35", "K39", "Ca40", "Mn55"} <= set(by_check["species gap"].species)


def test_the_middle_of_the_run_is_shown():
    found = next(f for f in load("karakas-2010").audit() if "Ni62" in f.species and f.mass == 5.5)
    assert "5 Msun:" in found.explanation and "6 Msun:" in found.explanation
    assert found.size > 3 and found.unit == "dex"
