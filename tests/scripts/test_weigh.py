"""`steelyard weigh`: its table, JSON, files and refusals."""

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app

runner = CliRunner()


COLLAPSE = """
metallicity = 0.02
species = "nuclides"
ages = ["1 Myr", "1000 Gyr"]
[imf]
form = "kroupa-2001"
limits = ["0.08 Msun", "120 Msun"]
[[source]]
kind = "core-collapse"
sets = ["kobayashi-2006"]
winds = "rest"
"""


def outside(*args, **more):
    """Run the command in a process of its own."""
    code = "from steelyard.scripts.main import main; main()"
    command = [sys.executable, "-c", code, *args]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, **more)


def population(text):
    Path("population.toml").write_text(text)
    return "population.toml"


def test_weigh_gives_the_known_integral(run):
    """Kroupa 2001 on 0.08-120 Msun over the Z = 0.02 models of Kobayashi+ 2006, linear in mass."""
    result = json.loads(run("weigh", population(COLLAPSE), "--json"))
    assert result["total"]["core-collapse"]["O16"][-1] == pytest.approx(7.193084341578e-3, rel=1e-10)
    iron = sum(result["sum"]["total"][f"Fe{a}"][-1] for a in (54, 56, 57, 58))
    assert iron == pytest.approx(4.29519877813e-4, rel=1e-10)
    assert not [p for p in Path().iterdir() if p.name != "population.toml"]
    table = run("weigh", "population.toml", "--no-figures")
    row = next(line.split() for line in table.splitlines() if line.startswith("O16 "))
    assert row[1:3] == ["7.193e-03", "7.193e-03"]


def test_weigh_json_has_the_promised_shape(run):
    result = json.loads(run("weigh", "--json", "--ages", "10 Myr, 13.8 Gyr", "--species", "H,O,Fe"))
    assert result["ages_yr"] == [1e7, 13.8e9]
    assert result["species"] == ["H", "O", "Fe"]
    sources = ["agb", "core-collapse", "thermonuclear"]
    assert result["sources"] == sources
    for part in ("total", "net"):
        assert list(result[part]) == sources
        for species in result["species"]:
            rows = [result[part][s][species] for s in sources]
            np.testing.assert_allclose(np.sum(rows, axis=0), result["sum"][part][species], rtol=1e-14)
    assert result["missing"] == {"agb": [], "core-collapse": [], "thermonuclear": ["H"]}
    assert set(result["events"]) == {"core-collapse", "thermonuclear"}
    budget = np.array(result["living"]) + result["remnants"] + result["returned"]
    np.testing.assert_allclose(budget, 1, rtol=1e-12)


def test_weigh_table_marks_what_is_missing(run):
    table = run("weigh", "--no-figures", "--species", "H,Be,O,Cl,Fe")
    rows = {line.split()[0]: line.split()[1:] for line in table.splitlines() if line[:2].strip() in RATIOS}
    assert rows["H"][2] == "-" and rows["H"][3].endswith("†")
    assert rows["Cl"][0] == "-" and rows["Cl"][3].endswith("†")
    # karakas-2010 follows Be7, doherty-2014 no Be
    assert rows["Be"][0].endswith("†")
    assert not any(cell.endswith("†") or cell == "-" for cell in rows["O"])
    assert rows["Fe"][4] == "+0.00"
    assert "† sum without agb, which doesn't follow Cl" in table
    assert "† sum without thermonuclear, which doesn't follow H, Be" in table
    assert "† agb follows Be at some masses only" in table
    assert "written: yields.h5, yields.csv" in table


RATIOS = ("H", "Be", "O", "Cl", "Fe")


def test_weigh_prints_each_age_asked_for_and_both_conventions(run):
    table = run("weigh", "--no-figures", "--ages", "10 Myr,1 Gyr", "--species", "O,Fe", "--net", "--rate")
    assert "Net yields at 10 Myr, Msun per yr and Msun formed" in table
    assert "Net yields at 1 Gyr, Msun per yr and Msun formed" in table
    assert "[X/Fe]" not in table


def test_weigh_writes_all_files_and_weighs_them_again(run):
    printed = run("weigh", "--species", "C,O,Fe", "-o", "out/deep")
    names = ["production-pattern.pdf", "production-pattern.png", "yields-over-time.pdf"]
    names += ["yields-over-time.png", "yields.csv", "yields.h5"]
    assert sorted(p.name for p in Path("out/deep").iterdir()) == names
    assert all(str(Path("out/deep") / name) in printed for name in names)
    assert "the digits agree" in run("weigh", "out/deep/yields.h5")
    assert json.loads(run("weigh", "out/deep/yields.h5", "--json"))["agrees"] is True


def test_a_population_that_has_ejected_nothing_has_a_table_but_no_figures(run):
    printed = run("weigh", "--ages", "1 Myr", "--species", "O,Fe")
    assert "written: yields.h5, yields.csv" in printed
    assert printed.count("not drawn: ") == 2
    assert sorted(p.name for p in Path().iterdir()) == ["yields.csv", "yields.h5"]


def test_weighing_again_finds_a_changed_digit(run):
    import h5py

    run("weigh", population(COLLAPSE), "--no-figures")
    with h5py.File("yields.h5", "r+") as file:
        values = file["total"][()]
        values[..., list(file["species"]).index(b"O16")] *= 1 + 1e-6
        file["total"][...] = values
    result = runner.invoke(app, ["weigh", "yields.h5"])
    assert result.exit_code == 1
    assert "differ" in result.stdout and result.stderr == ""


def test_template_is_written_once_and_runs(run, refused):
    assert "population.toml" in run("weigh", "--template")
    text = Path("population.toml").read_text()
    assert run("weigh", "--template", "-") == text
    assert "exists already" in refused("weigh", "--template")
    assert Path("population.toml").read_text() == text
    run("weigh", "--template", "-o", "new/folder", "mine.toml")
    assert Path("new/folder/mine.toml").read_text() == text
    ours = json.loads(run("weigh", "population.toml", "--json"))
    assert ours == json.loads(run("weigh", "--json"))


def test_values_from_a_file_are_told_with_its_name(refused):
    good = COLLAPSE
    cases = {
        good.replace("metallicity", "metalicity"): "key 'metalicity' isn't known; did you mean metallicity?",
        good.replace("0.02", "0.1") + '[edges]\nmetallicity = "refuse"': "lies outside the set's 0 to 0.02",
        good.replace('"0.08 Msun"', '"130 Msun"'): "write the lower mass first",
        good.replace('"0.08 Msun"', '"-1 Msun"'): "-1 Msun",
        good.replace('"0.08 Msun"', '"1 kpc"'): "wrong dimension",
        good + '[[source]]\nkind = "agb"\nsets = ["kobayashi-2006"]': "overlap",
        good + '[[source]]\nkind = "agb"\nsets = ["karakas-2010"]': "there is a gap without a join",
        good.replace('"nuclides"', '["O", "Feee"]'): "species 'Feee' isn't known; did you mean Fe",
        good.replace("kobayashi-2006", "kobayashi-06"): "did you mean kobayashi-2006",
        good.replace("= 0.02", "= "): "line 2 column 15: this isn't TOML",
    }
    for text, told in cases.items():
        line = refused("weigh", population(text))
        assert line.startswith("steelyard: population.toml: ") and told in line, line


def test_a_population_that_fails_makes_no_folder(refused):
    refused("weigh", population(COLLAPSE.replace("0.02", "0.7")), "-o", "results")


def test_a_figure_that_is_no_number_is_refused():
    from steelyard.yields.build import Printed, build
    from steelyard.yields.errors import InputError

    info = {"kind": "core-collapse", "yields": "total", "ejected": "mass - remnant", "covers": "life"}
    models = [{"metallicity": "0.02", "mass": str(m), "remnant": "1.5"} for m in (13, 15)]
    for bad in ("nan", "inf", "", "1,5"):
        rows = [{"metallicity": "0.02", "mass": m["mass"], "O16": "0.5"} for m in models]
        build("mine", info, Printed(models, {"total": rows}), "asplund-2009")
        rows[1]["O16"] = bad
        with pytest.raises(InputError, match=r"mine total\.csv") as caught:
            build("mine", info, Printed(models, {"total": rows}), "asplund-2009")
        assert "O16" in str(caught.value) and "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("change", "shows"),
    [
        ("core-collapse=limongi-chieffi-2018-R-v150", "limongi-chieffi-2018-R-v150"),
        ("imf=salpeter-1955", "salpeter-1955"),
        ("agb=marigo-2001+doherty-2014", "marigo-2001"),
    ],
)
def test_one_command_swaps_a_yield_set(run, change, shows):
    text = run("weigh", "--species", "C,O", "--with", change, "--no-figures")
    assert shows in text and text != run("weigh", "--species", "C,O", "--no-figures")
    assert json.loads(run("weigh", "--species", "C,O", "--with", change, "--json")) != json.loads(
        run("weigh", "--species", "C,O", "--json")
    )


def test_swaps_that_can_not_be_made_are_refused(refused):
    assert "did you mean" in refused("weigh", "--with", "core-colapse=kobayashi-2006")
    assert "gives 2 choices" in refused("weigh", "--with", "imf=salpeter-1955,chabrier-2003")
    assert "isn't a swap" in refused("weigh", "--with", "imf")
