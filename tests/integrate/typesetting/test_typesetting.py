"""Tables of papers: digits, marks, and each format read back by what isn't ours."""

import io
import re
import shutil
import subprocess
import tomllib
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from astropy.io import ascii

from steelyard.integrate import DelayedSource, Population, StellarSource, from_function, imf
from steelyard.integrate.citations import Citation, citations
from steelyard.integrate.laws import NumberLaw, PowerLawIMF, SlopeLaw
from steelyard.integrate.popfile import default_population, population_from_dict
from steelyard.integrate.spread import assumed
from steelyard.integrate.typesetting import bibtex, booktabs, cds, csv, deluxetable, mrt, paper_table
from steelyard.integrate.typesetting.digits import last_place, log_error, scaled
from steelyard.integrate.typesetting.latex import prose
from steelyard.integrate.typesetting.machine import prose as plain_prose
from steelyard.integrate.typesetting.tex import escape
from steelyard.yields.errors import InputError

CHOICE = ["H", "C", "O", "Ca", "Fe"]


@pytest.fixture(scope="module")
def result():
    return replace(default_population(), species=CHOICE, ages=["100 Myr", "13.8 Gyr"]).weigh()


@pytest.fixture(scope="module")
def errors(result):
    return assumed(result.population).propagate(result)


def test_last_place_follows_the_rule_of_the_particle_data_group():
    # Review of Particle Physics, introduction, section 5.3: 0.827 +- 0.119 -> 0.83 +- 0.12 and
    # 0.827 +- 0.367 -> 0.8 +- 0.4 (its own examples, from memory)
    assert scaled(0.827, 0.119, last_place(0.119)) == ("8.3", "1.2", -1)
    assert scaled(0.827, 0.367, last_place(0.367)) == ("8", "4", -1)
    assert last_place(0.9501) == -1 and last_place(0.949) == -1 and last_place(0.354) == -2


def test_error_of_a_logarithm_is_that_of_a_lognormal():
    # mean and variance of a lognormal: any textbook of probability
    draws = np.random.default_rng(1).normal(0.0, 0.2 * np.log(10), 400_000)
    assert log_error(1.0, np.exp(draws).std()) == pytest.approx(0.2, abs=0.002)
    assert log_error(2.0, 2e-6) == pytest.approx(1e-6 / np.log(10), rel=1e-5)


def test_cells_hold_the_result(result):
    table = paper_table(result, ["Fe", "O"], ["sum", "agb"])
    assert table.columns == ("sum", "agb") and [r.species for r in table.rows] == ["Fe", "O", "Fe", "O"]
    assert table.rows[2].cells[0].value == result.get("Fe")[1]
    assert table.rows[3].cells[1].value == result.get("O", "agb")[1]
    assert paper_table(result, convention="net").rows[1].cells[0].value == result.get("C", "agb", "net")[0]


def test_missing_is_marked_and_not_zero(result):
    table = paper_table(result)
    calcium = next(row for row in table.rows if row.species == "Ca")
    assert calcium.cells[0].value is None and calcium.cells[-1].marks == "a"
    assert dict(table.marks)["a"].startswith("Without AGB stars")
    hydrogen = table.rows[0]
    assert hydrogen.cells[2].value is None and hydrogen.cells[-1].marks == "b"
    assert paper_table(result, ["O", "Fe"]).marks == ()


def test_a_logarithm_needs_a_yield_above_zero(result):
    table = paper_table(result, ["Fe", "O"], ["agb"], "net", log=True)
    # the yields of AGB stars of iron are as at birth, so the net yield isn't above zero
    assert all(row.cells[0].value is None and row.cells[0].marks for row in table.rows)
    assert table.marks == (("a", "Not above zero: no logarithm."),)
    shown = paper_table(result, ["O"], ["core-collapse"], log=True).rows[0].cells[0]
    assert 10**shown.value == pytest.approx(result.get("O", "core-collapse")[0], rel=1e-12)


@pytest.mark.parametrize("log", [False, True])
@pytest.mark.parametrize("stated", [False, True])
def test_machine_readable_is_read_back_with_the_same_digits(result, errors, log, stated):
    table = paper_table(result, log=log, digits=4, errors=errors if stated else None)
    text = mrt(table)
    assert text.isascii()
    header = text[: text.rindex("-" * 80)]
    assert max(map(len, header.splitlines())) <= 80
    back = ascii.read(text, format="mrt")
    _, readme = cds(table)
    assert max(map(len, readme.splitlines())) <= 80 and readme.isascii()
    assert str(len(table.rows)) in readme
    comma = pd.read_csv(io.StringIO(csv(table)), comment="#", keep_default_na=False, dtype=str)
    assert list(back["Species"]) == [r.species for r in table.rows] == list(comma["species"])
    assert list(back["Age"]) == [r.age for r in table.rows] == [float(a) for a in comma["age_yr"]]
    for k, source in enumerate(table.columns):
        name = source.replace("-", "_")
        column = np.ma.filled(np.ma.masked_array(back[name], dtype=float), np.nan)
        for i, row in enumerate(table.rows):
            cell = row.cells[k]
            if cell.value is None:
                assert np.isnan(column[i]) and comma[name][i] == ""
                continue
            # at least the digits that are asked for, and the same in both
            assert abs(column[i] - cell.value) <= 0.5001 * 10.0**cell.last
            assert float(comma[name][i]) == column[i]
            if cell.error:
                assert abs(back[f"e_{name}"][i] - cell.error) <= 0.5001 * 10.0**cell.last
    assert str(back["f_sum"][0]) == "b"


def test_the_data_of_the_cds_are_read_with_their_readme(result, tmp_path):
    table = paper_table(result)
    data, readme = cds(table)
    (tmp_path / "yields.dat").write_text(data)
    (tmp_path / "ReadMe").write_text(readme)
    reader = ascii.get_reader(ascii.Cds, readme=str(tmp_path / "ReadMe"))
    back = reader.read(str(tmp_path / "yields.dat"))
    assert back["sum"][2] == float(f"{result.get('O')[0]:.2e}") and len(back) == len(table.rows)
    summary = next(line for line in readme.splitlines() if line.startswith("yields.dat"))
    assert summary.split()[1:3] == [str(max(map(len, data.splitlines()))), str(len(table.rows))]


def test_a_column_may_be_empty(result):
    table = paper_table(result, ["H"], ["thermonuclear", "sum"])
    back = ascii.read(mrt(table), format="mrt")
    assert np.ma.getmaskarray(back["thermonuclear"]).all()
    assert r"\ldots" in booktabs(table)


def test_every_file_says_what_made_it(result):
    table = paper_table(result)
    for text in (deluxetable(table), booktabs(table), csv(table), mrt(table), cds(table)[1]):
        assert "population file:" in text and "[[source]]" in text and "\x1b" not in text
        for one in result.population.prepared.sets:
            assert one.id in text and one.checksum in text
        for words in ("0.08", "120", "bridge", "swallow", "40 Myr"):
            assert words in text
    lines = csv(table).splitlines()
    start = lines.index("# population file:")
    toml = "\n".join(line[6:] for line in lines[start + 1 :] if line.startswith("#"))
    again = population_from_dict(tomllib.loads(toml)).weigh()
    assert np.array_equal(again.total, result.total)


def test_errors_set_the_digits(result, errors):
    table = paper_table(result, ["O"], ["sum"], errors=errors)
    cell = table.rows[1].cells[0]
    assert cell.error == errors.get("O")[1] and cell.last == last_place(cell.error)
    text = booktabs(table)
    found = re.search(r"O & \$\((.*) \\pm (.*)\)\\times10\^\{(-\d)\}\$ \\\\\n\\bottomrule", text)
    scale = 10.0 ** int(found[3])
    assert abs(float(found[1]) * scale - cell.value) <= 0.5 * 10.0**cell.last
    assert abs(float(found[2]) * scale - cell.error) <= 0.5 * 10.0**cell.last


def test_papers_of_everything_used(result):
    found = citations(result.population)
    keys = [paper.key for paper in found]
    assert len(set(keys)) == len(keys)
    by_year = {(p.names[0][0], p.year) for p in found}
    assert by_year == {
        *{("Kroupa", 2001), ("Karakas", 2010), ("Doherty", 2014), ("Kobayashi", 2006), ("Nomoto", 1997)},
        *{("Maoz", 2017), ("Portinari", 1998), ("Asplund", 2009), ("Anders", 1989)},
    }
    stars = Population(0.02, [StellarSource("agb", ["marigo-2001"])], imf="chabrier-2003-system")
    other = {(p.names[0][0], p.year) for p in citations(replace(stars, lifetimes="raiteri-1996"))}
    assert {("Chabrier", 2003), ("Marigo", 2001), ("Raiteri", 1996)} <= other
    assert not {("Kroupa", 2001), ("Maoz", 2017), ("Portinari", 1998)} & other


def test_text_cites_papers_that_the_bibliography_has(result, errors):
    table = paper_table(result, errors=errors)
    entries = bibtex(table.papers)
    for text in (deluxetable(table), booktabs(table), prose(table.methods)):
        for key in re.findall(r"\\citet?\{(.*?)\}", text):
            assert f"{{{key},\n" in entries
    assert r"$\alpha$" in entries and r"A\&A" in entries
    told = plain_prose(table.methods)
    for words in (
        "Kroupa (2001, MNRAS 322, 231)",
        "0.08 to 120 Msun",
        "Portinari",
        "0.0013 events",
        "0.15 dex",
    ):
        assert words in told


AGB = StellarSource("agb", ["karakas-2010"])

OWN = {
    "a power law of slopes 1.3 and 2.227 (at Z = 0.01) with break at 0.5 Msun": Population(
        0.01, [AGB], imf=PowerLawIMF([1.3, SlopeLaw(2.3, 0.5, 0.014)], [0.5], (0.08, 120))
    ),
    "a lognormal around 0.2 Msun of width 0.5 dex": Population(
        0.01, [AGB], imf=imf("lognormal", centre=0.2, sigma=0.5)
    ),
    "Stellar lifetimes are a function of our own": Population(
        0.01, [AGB], imf=from_function(lambda m: m**-2.35, (0.1, 100)), lifetimes=lambda m, z: 1e10 * m**-2.5
    ),
    "0.0007071 events per Msun formed at this metallicity, with delays distributed exponentially": Population(
        0.01,
        [
            AGB,
            DelayedSource(
                "thermonuclear",
                [{"iwamoto-1999-W7": 0.8, "iwamoto-1999-WDD2": 0.2}],
                NumberLaw(1e-3, 0.5, 0.02),
                {"form": "exponential", "timescale": "1 Gyr", "limits": ["40 Myr", "13 Gyr"]},
            ),
        ],
    ),
}


@pytest.mark.parametrize("words", OWN)
def test_what_is_the_users_own_is_told_and_has_no_paper(words):
    result = OWN[words].weigh(["0 yr", "1 Gyr"])
    table = paper_table(result)
    assert words in plain_prose(table.methods)
    assert words in " ".join(csv(table).split()) and words in " ".join(mrt(table).split())
    cited = set(re.findall(r"\\citet\{(.*?)\}", prose(table.methods)))
    assert cited == {paper.key for paper in table.papers}
    assert len(ascii.read(mrt(table), format="mrt")) == len(table.rows)


def test_names_without_initials_and_odd_references():
    paper = Citation("IUPAC Commission on Weights", 2013, "Masses & more", "a web page")
    assert paper.names == (("IUPAC Commission on Weights", ""),) and paper.key.isalnum()
    text = bibtex([paper])
    assert text.startswith("@misc{") and "author = {{IUPAC Commission on Weights}}" in text
    assert Citation("Hix W. R., Thielemann F.-K.", 1999, "", "ApJ 1, 2").names[1] == ("Thielemann", "F.-K.")


@pytest.mark.parametrize(
    "choice", [{"digits": 0}, {"digits": 16}, {"sources": ["agbs"]}, {"species": ["Xq"]}]
)
def test_what_cannot_be_set_is_refused(result, choice):
    with pytest.raises(InputError):
        paper_table(result, **choice)


def compiled(body, tmp_path, document, packages=()):
    """The log of a document that pdflatex has made, twice, with its bibliography."""
    used = "".join(rf"\usepackage{{{p}}}" for p in packages)
    style = "aasjournal" if document.startswith("aastex") else "plain"
    text = (
        rf"\documentclass{{{document}}}{used}\begin{{document}}\title{{T}}"
        + "\nText.\n\n"
        + body
        + "\n"
        + rf"\bibliographystyle{{{style}}}\bibliography{{yields}}\end{{document}}"
    )
    (tmp_path / "paper.tex").write_text(text)
    latex = ["pdflatex", "-halt-on-error", "-interaction=nonstopmode", "paper.tex"]
    for command in (latex, ["bibtex", "paper"], latex, latex):
        run = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=100)
        assert run.returncode == 0, run.stdout[-2000:]
    assert (tmp_path / "paper.pdf").stat().st_size > 10_000
    log = (tmp_path / "paper.log").read_text(errors="replace")
    assert not re.search("Citation .* undefined|Missing character", log)


def has(*names):
    if not shutil.which("pdflatex") or not shutil.which("kpsewhich"):
        return False
    return subprocess.run(["kpsewhich", *names], capture_output=True).stdout.count(b"\n") == len(names)


@pytest.mark.skipif(not has("booktabs.sty", "longtable.sty"), reason="no LaTeX with booktabs")
@pytest.mark.parametrize("long", [False, True])
def test_booktabs_compiles(result, errors, tmp_path, long):
    if long:
        population = replace(default_population(), ages=["30 Myr", "1 Gyr"])
        table = paper_table(population.weigh(), log=True)
    else:
        table = paper_table(result, errors=errors)
    assert (r"\begin{longtable}" in booktabs(table)) == long
    (tmp_path / "yields.bib").write_text(bibtex(table.papers))
    compiled(booktabs(table) + prose(table.methods, "cite"), tmp_path, "article", ["booktabs", "longtable"])


@pytest.mark.skipif(not has("booktabs.sty"), reason="no LaTeX with booktabs")
def test_hostile_names_compile(tmp_path):
    odd = r"50% of_{it} & \so #on ~ ^ $x$ <a> | \"β\" ± é"
    delayed = DelayedSource(odd, ["nomoto-1997-w7"], 1e-3, "maoz-graur-2017")
    population = Population(0.02, [StellarSource("agb", ["karakas-2010"]), delayed], species=["Fe", "Al26"])
    table = paper_table(population.weigh(["1 Gyr"]))
    assert r"$^{26}$Al" in booktabs(table)
    (tmp_path / "yields.bib").write_text(bibtex(table.papers))
    compiled(booktabs(table) + prose(table.methods, "cite"), tmp_path, "article", ["booktabs"])
    assert len(ascii.read(mrt(table), format="mrt")) == 2


@pytest.mark.skipif(
    not has("aastex631.cls", "aasjournal.bst", "epsf.sty", "ulem.sty", "phvr7t.tfm"),
    reason="no LaTeX with aastex631",
)
def test_deluxetable_compiles(result, errors, tmp_path):
    table = paper_table(result, errors=errors)
    (tmp_path / "yields.bib").write_text(bibtex(table.papers))
    compiled(deluxetable(table) + prose(table.methods), tmp_path, "aastex631")


def test_escape_leaves_nothing_special():
    assert escape("a_b & 5 % {x} \\ # $ ~ ^") == (
        r"a\_b \& 5 \% \{x\} \textbackslash{} \# \$ \textasciitilde{} \textasciicircum{}"
    )
    assert escape("-3 <= [Fe/H] <= 0\nnext") == r"-3 $\leq$ [Fe/H] $\leq$ 0 next"
