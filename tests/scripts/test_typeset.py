"""`steelyard typeset`: what it prints, writes and refuses."""

from functools import partial
from pathlib import Path

import pandas as pd
import pytest
from astropy.io import ascii
from typer.testing import CliRunner

from steelyard.integrate.popfile import template
from steelyard.scripts.main import app

runner = CliRunner()


@pytest.fixture
def run(run):
    return partial(run, "typeset")


@pytest.fixture
def refused(refused):
    return partial(refused, "typeset")


def test_a_table_alone_is_printed(run):
    text = run("--elements", "Fe,O", "--digits", "4")
    rows = [line.split(" & ")[0] for line in text.splitlines() if line.endswith(r"\\")]
    assert rows == ["Species", "Fe", "O"]
    # the figures of `steelyard weigh`
    weighed = runner.invoke(app, ["weigh", "--species", "Fe,O", "--no-figures"]).stdout
    iron = next(line for line in weighed.splitlines() if line.startswith("Fe")).split()
    value, power = iron[4].split("e")
    assert rf"{value}\times10^{{{int(power)}}}" in next(
        line for line in text.splitlines() if line.startswith("Fe")
    )


def test_files_of_a_paper(run):
    shown = run("-f", "deluxetable", "--spread", "assumed", "-o", "y.tex", "--bibtex", "y.bib")
    assert "We weighted" in shown and "written: y.tex, y.bib" in shown
    assert r"\pm" in Path("y.tex").read_text() and "@article{Kroupa2001" in Path("y.bib").read_text()
    # files of one's own are replaced
    run("-f", "deluxetable", "--elements", "O", "-o", "y.tex", "--bibtex", "y.bib")
    assert r"\pm" not in Path("y.tex").read_text()
    assert sorted(p.name for p in Path().iterdir()) == ["y.bib", "y.tex"]


def test_forms_for_machines(run):
    for _ in range(2):
        run("-f", "mrt", "--ages", "30 Myr, 1 Gyr", "--sources", "agb,sum", "-o", "y.txt")
        run("-f", "cds", "--elements", "O,Fe", "--digits", "5", "-o", "deep")
    back = ascii.read("y.txt", format="mrt")
    assert set(back.colnames) == {"Age", "Species", "agb", "sum", "f_agb", "f_sum"} and len(back) == 64
    data = ascii.get_reader(ascii.Cds, readme="deep/ReadMe").read("deep/yields.dat")
    assert len(data) == 2
    Path("y.csv").write_text(run("-f", "csv", "--elements", "O,Fe", "--digits", "5"))
    assert list(pd.read_csv("y.csv", comment="#")["sum"]) == list(data["sum"])


def test_a_population_file_and_the_methods(run):
    Path("mine.toml").write_text(template().replace("metallicity = 0.014", "metallicity = 0.004", 1))
    text = run("mine.toml", "--methods", "-f", "csv", "--net")
    assert text.count("\n") == 1 and "metallicity Z = 0.004" in text and "published net yields" in text
    assert "Kroupa (2001, MNRAS 322, 231)" in text
    assert r"\citet{" in run("--methods", "-f", "deluxetable")


def test_refusals(refused):
    Path("paper.tex").write_text("\\documentclass{article}")
    Path("refs.bib").write_text("@article{mine}")
    assert "no file of steelyard's" in refused("-o", "paper.tex")
    assert "no file of steelyard's" in refused("-o", "new.tex", "--bibtex", "refs.bib")
    Path("old").mkdir()
    Path("old/ReadMe").write_text("mine")
    assert "no file of steelyard's" in refused("-f", "cds", "-o", "old")
    assert "did you mean" in refused("-f", "bookabs")
    assert "name a folder with -o" in refused("-f", "cds")
    assert "this is a folder" in refused("-o", "old")
    assert "no folder" in refused("-o", "none/y.tex")
    assert "one file" in refused("-o", "y", "--bibtex", "./y")
    assert "did you mean agb" in refused("--sources", "abg")
    assert "no set of the population follows" in refused("--elements", "U")
    assert "--ages" in refused("--ages", "1 kg")
    assert "digits" in refused("--digits", "0")
    assert "there is no such file" in refused("--spread", "nowhere.toml")
    assert "there is no such file" in refused("nowhere.toml")
