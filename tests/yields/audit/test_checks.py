"""Each check on a small invented set: silent where all is well, and naming what was spoilt."""

import numpy as np
import pytest

from steelyard.yields import InputError, Slice, YieldSet
from steelyard.yields.audit import at_least, audit, audit_printed
from steelyard.yields.audit.printed_figures import half_unit
from steelyard.yields.audit.smoothness import departures
from steelyard.yields.build import Printed, build

MASSES = ("1.0", "2.0", "3.0", "4.0", "5.0")
METALS = ("0.004", "0.02")
INFO = {
    "kind": "agb",
    "species": "nuclides",
    "yields": "net",
    "covers": "life",
    "ejected": "mass - remnant",
    "units": {"mass": "Msun", "yield": "Msun"},
}


def invented():
    """Rows of an invented set with H1, He4, C12: remnants rise, helium and carbon are made of hydrogen."""
    models, net, initial = [], [], []
    for z in METALS:
        initial.append({"metallicity": z, "H1": f"{0.73 - float(z):.4f}", "He4": "0.2700", "C12": z})
        for mass in MASSES:
            m = float(mass)
            remnant = 0.5 + 0.08 * m - float(z)
            carbon, helium = 0.002 * (m - remnant) * m, 0.01 * (m - remnant)
            models.append({"metallicity": z, "mass": mass, "remnant": f"{remnant:.3f}"})
            row = {
                "H1": f"{-round(carbon, 6) - round(helium, 6):.6f}",
                "He4": f"{helium:.6f}",
                "C12": f"{carbon:.6f}",
            }
            net.append({"metallicity": z, "mass": mass, **row})
    return models, net, initial


def look(models, net, initial, info=INFO):
    printed = Printed(models, {"net": net}, initial)
    return audit(build("invented", info, printed, "asplund-2009"), printed)


def test_a_clean_set_has_no_findings_but_its_gaps():
    assert {f.check for f in look(*invented())} == {"species gap"}


@pytest.mark.parametrize(
    ("row", "column", "figure", "check"),
    [
        (2, "He4", "0.200000", "sum of nets"),
        (2, "C12", "0.000130", "smooth run"),
        (3, "C12", "-0.200000", "negative total"),
        (3, "H1", "-9.0", "negative total"),
        (1, "C12", "1.0e31", "sum of totals"),
    ],
)
def test_a_spoilt_yield_is_found_with_its_model(row, column, figure, check):
    models, net, initial = invented()
    net[row][column] = figure
    found = [f for f in look(models, net, initial) if f.check == check]
    assert (0.004, float(MASSES[row])) in {(f.metallicity, f.mass) for f in found}
    assert all(not f.species or column in f.species for f in found)


def test_grams_are_recognised():
    models, net, initial = invented()
    net[1]["C12"] = repr(float(net[1]["C12"]) * 1.99e33)
    found = [f for f in look(models, net, initial) if f.severity == "error" and "C12" in f.species]
    assert any("look like g" in f.advice for f in found)


@pytest.mark.parametrize(
    ("remnant", "check"), [("9.0", "mass budget"), ("-0.5", "mass budget"), ("1.9", "mass budget")]
)
def test_impossible_remnants_are_found(remnant, check):
    models, net, initial = invented()
    models[4]["remnant"] = remnant
    found = [f for f in look(models, net, initial) if f.check == check]
    assert found and all((f.metallicity, f.mass) == (0.004, 5.0) for f in found)


def test_a_remnant_out_of_line_is_found():
    models, net, initial = invented()
    models[2]["remnant"] = "1.250"
    assert any(f.check == "smooth run" and f.mass == 3.0 for f in look(models, net, initial))


def test_exchanged_masses_stand_out_of_order():
    models, net, initial = invented()
    for rows in (models, net):
        rows[1]["mass"], rows[3]["mass"] = rows[3]["mass"], rows[1]["mass"]
    found = {(f.metallicity, f.mass) for f in look(models, net, initial) if f.check == "order"}
    assert len(found) == 2 and found & {(0.004, 4.0), (0.004, 2.0)}


def test_copied_figures_are_found():
    models, net, initial = invented()
    net[7] |= {c: net[6][c] for c in ("H1", "He4", "C12")}
    found = [f for f in look(models, net, initial) if f.check == "duplicate"]
    assert [(f.metallicity, f.mass, f.severity) for f in found] == [(0.02, 3.0, "error")]


def test_a_model_twice_is_found_in_print_and_refused_on_the_grid():
    models, net, initial = invented()
    models.insert(2, dict(models[1]))
    net.insert(2, dict(net[1]))
    with pytest.raises(InputError, match="don't increase"):
        look(models, net, initial)
    found = audit_printed("invented", INFO, Printed(models, {"net": net}, initial))
    assert any(f.check == "duplicate" and f.mass == 2.0 for f in found)


def test_metals_that_disagree_with_z_are_found():
    models, net, initial = invented()
    for rows in (models, net, initial):
        for row in rows:
            row["metallicity"] = repr(float(row["metallicity"]) / 0.02)
    models[-1]["metallicity"] = net[-1]["metallicity"] = "1.0"
    with pytest.raises(InputError, match="mass fraction"):
        look(models, net, initial)
    found = audit_printed("invented", INFO, Printed(models, {"net": net}, initial))
    assert {f.metallicity for f in found if f.check == "birth composition"} == {0.2, 1.0}
    assert any("Z/Zsun" in f.advice for f in found)


def test_z_over_a_tenth_is_taken_for_suns():
    models, net, initial = invented()
    for rows in (models, net, initial):
        for row in rows:
            row["metallicity"] = {"0.004": "0.2", "0.02": "0.9"}[row["metallicity"]]
    assert {f.metallicity for f in look(models, net, initial) if f.check == "units"} == {0.2, 0.9}


def test_logarithms_are_recognised():
    models, net, initial = invented()
    for row in net:
        row |= {"H1": "-1.2", "He4": "-2.0", "C12": "-3.1"}
    assert any("log10" in f.explanation for f in look(models, net, initial))


def test_a_slice_born_with_other_proportions_is_found():
    z = (0.004, 0.008, 0.02)
    slices = []
    for k, one in enumerate(z):
        mass = np.array([1.0, 2.0, 3.0])
        birth = np.array([0.7, 0.28, 0.6 * one, 0.3 * one, 0.1 * one])
        if k == 1:
            birth[[2, 3]] = [0.06 * one, 0.84 * one]
        ejected = mass - 0.6
        total = np.outer(ejected, birth)
        slices.append(Slice(one, mass, ejected, np.zeros(3), total, total * 0, birth))
    grid = YieldSet("invented", "agb", ("H1", "He4", "C12", "O16", "Fe56"), tuple(slices))
    found = [f for f in audit(grid) if f.check == "birth composition"]
    assert [(f.metallicity, f.species) for f in found] == [(0.008, ("C12",))]


def test_a_model_born_unlike_its_siblings_is_found():
    # X0 of Ni62 of the 5.5 Msun model at Z = 1e-4 of Karakas 2010 (its siblings have 1.39e-8); others alike
    models, net, _ = invented()
    initial = [
        {
            "metallicity": "0.004",
            "mass": m,
            "H1": "0.72",
            "He4": "0.276",
            "C12": "0.004",
            "Ni62": "1.3896132E-08",
        }
        for m in MASSES
    ]
    initial[3]["Ni62"] = "5.2E-19"
    found = [
        f
        for f in audit_printed("invented", INFO, Printed(models, {"net": net}, initial))
        if f.check == "birth composition"
    ]
    assert [(f.mass, f.species) for f in found] == [(4.0, ("Ni62",))]
    assert found[0].size == pytest.approx(-10.4, abs=0.1)


def test_an_element_that_isnt_the_sum_of_its_isotopes_is_found():
    models, net, initial = invented()
    for row in net:
        carbon = float(row["C12"])
        row |= {"C13": f"{0.1 * carbon:.6f}", "C": f"{1.1 * carbon:.6f}"}
    net[3]["C"] = f"{1.3 * float(net[3]['C12']):.6f}"
    info = INFO | {"ignore": {"columns": ["C"]}}
    printed = Printed(models, {"net": net}, initial)
    found = [f for f in audit_printed("invented", info, printed) if f.check == "isotopes and element"]
    assert [(f.metallicity, f.mass, f.species) for f in found] == [(0.004, 4.0, ("C", "C12", "C13"))]


def test_lifetimes_that_rise_and_units_of_lifetimes():
    mass = np.array([10.0, 15.0, 20.0])
    ejected = mass - 1.5
    total = np.outer(ejected, [0.01])
    for lifetimes, check in (([2e7, 3e7, 1e7], "order"), ([20.0, 13.0, 9.0], "units")):
        one = Slice(0.02, mass, ejected, mass * 0, total, total, np.zeros(1), np.array(lifetimes))
        assert check in {f.check for f in audit(YieldSet("x", "core-collapse", ("O16",), (one,)))}


def test_sums_are_checked_without_printed_figures():
    mass = np.array([1.0, 2.0])
    ejected = mass - 0.6
    total = np.outer(ejected, [0.7, 0.28, 0.02])
    total[1, 1] *= 1.3
    one = Slice(0.02, mass, ejected, mass * 0, total, total * 0, total[0] / ejected[0])
    found = [
        f for f in audit(YieldSet("x", "agb", ("H1", "He4", "C12"), (one,))) if f.check == "sum of totals"
    ]
    assert [(f.mass, f.severity) for f in found] == [(2.0, "error")]


def test_departures_need_both_mass_and_metallicity():
    mass = np.arange(1.0, 6.0)
    run = np.array([0.0, 1.0, 0.0, 1.0, 0.0])[:, None]
    # a zigzag that both slices share is nature; a peak that only one has is not
    assert np.all(departures([mass, mass], [run, run]) == 0)
    peak = run + np.array([0.0, 0.0, 2.0, 0.0, 0.0])[:, None]
    found = departures([mass, mass], [run, peak]).ravel()
    assert found.argmax() == 7 and found[7] == pytest.approx(1.0)


def test_half_units_of_printed_figures():
    assert half_unit("1.57E+00") == pytest.approx(0.005)
    assert half_unit("-4.832E-01") == pytest.approx(5e-5)
    assert half_unit("13") == 0.5


def test_severities_are_ordered_and_checked():
    models, net, initial = invented()
    net[1]["C12"] = "1.0e31"
    found = look(models, net, initial)
    assert len(at_least(found, "error")) < len(at_least(found, "note")) == len(found)
    assert [f.severity for f in found] == sorted(
        (f.severity for f in found), key=["error", "warning", "note"].index
    )
    with pytest.raises(InputError, match="did you mean warning"):
        at_least(found, "warnings")


def test_an_admitted_set_is_audited_with_its_printed_figures(tmp_path, monkeypatch):
    from steelyard.yields import store
    from steelyard.yields.layouting import read_sets

    monkeypatch.setenv(store.VARIABLE, str(tmp_path / "library"))
    models, net, _ = invented()
    lines = ["mass,Z,remnant,H1,He4,C12"]
    for model, row in zip(models, net, strict=True):
        lines.append(
            ",".join([model["mass"], model["metallicity"], model["remnant"], *list(row.values())[2:]])
        )
    lines[2], lines[4] = lines[4], lines[2]
    file = tmp_path / "invented.csv"
    file.write_text("\n".join(lines) + "\n")
    layout = tmp_path / "net.toml"
    layout.write_text(
        'id = "invented-2026"\nkind = "agb"\nejected = "mass - remnant"\n'
        '[model]\nmass = "mass"\nmetallicity = "Z"\n'
        'remnant = "remnant"\n[yields]\nnet = "{species}"\n'
    )
    (reading,) = read_sets([file], layout)
    store.keep(reading)
    found = store.load("invented-2026", "asplund-2009").audit()
    assert any(f.check == "order" for f in found)
