"""`steelyard admit` and `steelyard library`, as a user runs them."""

import json
import os

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app
from steelyard.yields import load, store

runner = CliRunner()

# invented figures
WIDE = "mass,Z,remnant,C12,O16\n1.0,0.02,0.55,1.5E-03,4.0E-03\n2.0,0.02,0.65,9.0E-03,1.0E-02\n"


@pytest.fixture(autouse=True)
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv(store.VARIABLE, str(tmp_path / "library"))
    monkeypatch.delenv("FORCE_COLOR", raising=False)
    (tmp_path / "t.csv").write_text(WIDE)
    return tmp_path


def test_from_a_table_to_a_set(run, here):
    proposed = run("admit", "t.csv", "--guess")
    (here / "t.toml").write_text(proposed)
    tried = run("admit", "t.csv", "--layout", "t.toml", "--id", "invented-2026", "--dry-run")
    assert "kept     no (--dry-run)" in tried and not (here / "library").exists()
    admitted = run("admit", "t.csv", "--layout", "t.toml", "--id", "invented-2026")
    assert "2 at Z = 0.02: 1, 2 Msun" in admitted and "2: C12, O16" in admitted
    # 0.45 Msun leave, 5.5e-3 Msun of them listed
    assert "ejected - sum of total yields: up to 1.3 Msun" in admitted and "check units" in admitted
    assert load("invented-2026").value("C12", 1.0, 0.02) == 1.5e-3
    assert "invented-2026" in run("library")
    assert "invented-2026" in run("show", "invented-2026")
    assert run("library", "--layout", "invented-2026") == proposed


def test_json(run, here):
    (one,) = json.loads(run("admit", "t.csv", "-l", "wide", "--id", "a-2026", "--json"))
    assert one["models"] == 2 and one["species"] == ["C12", "O16"] and one["metallicities"] == [0.02]
    assert one["convention"] == "total" and one["kept"] == str(here / "library" / "a-2026.h5")
    assert one["budget_Msun"] == {"ejected - sum of total yields": pytest.approx(1.35 - 0.019)}
    (entry,) = json.loads(run("library", "--json"))
    assert entry["checksum"] == one["checksum"] and entry["sources"][0]["file"] == "t.csv"


def test_replacing_and_removing(run, refused):
    run("admit", "t.csv", "-l", "wide", "--id", "a-2026")
    assert "--replace" in refused("admit", "t.csv", "-l", "wide", "--id", "a-2026")
    run("admit", "t.csv", "-l", "wide", "--id", "a-2026", "--replace")
    run("admit", "t.csv", "-l", "wide", "--id", "a-2026", "--dry-run")
    assert run("library", "--remove", "a-2026") == "removed a-2026\n"
    assert "nothing admitted yet" in run("library")
    assert "a-2026" in refused("library", "--remove", "a-2026")


@pytest.mark.parametrize("name", ["out", "out.ecsv", "out.h5"])
def test_exports_are_admitted_without_a_layout(run, refused, name):
    run("admit", "t.csv", "-l", "wide", "--id", "a-2026")
    run("library", "--export", "a-2026", name)
    run("admit", name, "--id", "b-2026")
    assert load("b-2026").slices[0].total.tolist() == load("a-2026").slices[0].total.tolist()
    assert "exists already" in refused("library", "--export", "a-2026", name)


def test_a_broken_file_in_the_library(run, here):
    run("admit", "t.csv", "-l", "wide", "--id", "a-2026")
    (here / "library" / "bad.h5").write_bytes(b"x")
    result = runner.invoke(app, ["library"])
    assert result.exit_code == 0 and "a-2026" in result.stdout
    assert "bad.h5" in result.stderr and result.stderr.count("\n") == 1


def test_refusals(refused, here):
    assert "--guess` proposes one" in refused("admit", "t.csv")
    assert "kobayashi-2006 ships with steelyard" in refused(
        "admit", "t.csv", "-l", "wide", "--id", "kobayashi-2006"
    )
    assert "did you mean wide" in refused("admit", "t.csv", "-l", "wid", "--id", "a")
    assert "no id" in refused("admit", "t.csv", "-l", "wide")
    assert "no column" in refused("admit", "t.csv", "-l", "long", "--id", "a")
    assert "No such file" in refused("admit", "none.csv", "-l", "wide", "--id", "a")
    assert "one file" in refused("admit", "t.csv", "t.csv", "--guess")
    assert "t.csv line 2" in refused("admit", "t.csv", "t.csv", "-l", "wide", "--id", "a")
    assert "exclude each other" in refused("library", "--remove", "a", "--layout", "b")
    if hasattr(os, "mkfifo"):
        os.mkfifo("pipe.csv")
        assert "no regular file" in refused("admit", "pipe.csv", "-l", "wide", "--id", "a")
    assert not (here / "library").exists()


def test_one_bad_set_of_several_keeps_none(refused, here):
    table = "label,mass,Z,remnant,C12\nx,1.0,0.02,0.55,1.5E-03\ny,1.0,0.02,0.55,1.5E-03\n"
    (here / "two.csv").write_text(table)
    (here / "two.toml").write_text(
        'id = "a"\nkind = "agb"\n[model]\nmass = "mass"\nmetallicity = "Z"\nremnant = "remnant"\nvariant = "label"\n'
        '[yields]\ntotal = "{species}"\n[variants]\ndefault = "x"\n[variants.ids]\nkarakas-2010 = "y"\n'
    )
    assert "ships with steelyard" in refused("admit", "two.csv", "-l", "two.toml")
    assert not (here / "library").exists()


@pytest.mark.parametrize(
    ("file", "layout"),
    [
        ("kobayashi-2006-table.txt", "kobayashi-2006"),
        ("karakas-2010-table-a2.txt", "karakas-2010"),
        ("doherty-2014a-table1.txt", "doherty-2014"),
    ],
)
def test_raw_texts_are_admitted_as_they_are(run, raw, file, layout):
    run("admit", str(raw / file), "--layout", layout, "--id", "copy")
    copy, shipped = load("copy"), load(layout)
    assert copy.species == shipped.species
    for part in copy.slices:
        other = shipped.at(part.metallicity)
        for i, mass in enumerate(part.mass):
            j = other.mass.tolist().index(mass)
            assert part.total[i].tolist() == other.total[j].tolist()
            assert part.net[i].tolist() == other.net[j].tolist()
            assert part.ejected[i] == other.ejected[j] and part.wind[i] == other.wind[j]
