"""Every table and page of the command line, made again from itself by `steelyard weigh FILE`."""

import json
import re
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.integrate.figures import yields_over_time
from steelyard.integrate.popfile import default_population
from steelyard.integrate.provenance import command, made_by
from steelyard.integrate.record import read_record
from steelyard.scripts.main import app
from steelyard.scripts.recorded import compared
from steelyard.yields.figures import save

runner = CliRunner()

SPREAD = '[[spread]]\nsource = "core-collapse"\nelements = ["O", "Fe"]\nsigma = 0.1\n'

#: command lines, and what each leaves that is made again
MADE = {
    "weigh": (["weigh", "--species", "C,O,Fe", "--spread", "errors.toml", "-o", "out"], ["out/yields-errors.csv"]),
    "weigh2": (["weigh", "-Z", "0.004", "--ages", "10 Myr, 1 Gyr", "--with", "imf=salpeter-1955", "-o", "out"], ["out/yields.csv"]),
    "deluxetable": (["typeset", "-e", "C,O", "-f", "deluxetable", "--spread", "errors.toml", "-o", "t.tex"], ["t.tex"]),
    "booktabs": (["typeset", "-e", "C,O", "--net", "--log", "-o", "t.tex"], ["t.tex"]),
    "mrt": (["typeset", "-e", "C,O,Ca", "-f", "mrt", "--spread", "assumed", "-o", "t.txt"], ["t.txt"]),
    "cds": (["typeset", "-e", "C,O", "-f", "cds", "-o", "cds"], ["cds/ReadMe", "cds/yields.dat"]),
    "csv": (["typeset", "-e", "C,O", "-f", "csv", "--sources", "agb,sum", "-o", "t.csv"], ["t.csv"]),
    "contrast": (
        ["contrast", "-s", "imf=salpeter-1955,chabrier-2003", "--elements", "O,Fe", "--full", "--no-figures", "-o", "out"],
        ["out/contrast.csv", "out/contrast.tex", "out/shares-yields.csv", "out/shares-ratios.csv"],
    ),
    "leverage": (["leverage", "-e", "O", "--net", "--no-figures", "-o", "out"], ["out/leverage.csv"]),
    "scatter": (
        ["scatter", "--species", "O,Fe", "--count", "200", "--seed", "7", "--no-figures", "-o", "out"],
        ["out/scatter.csv", "out/scatter.h5"],
    ),
    "report": (["report", "-e", "O,Fe", "--swap", "imf=salpeter-1955", "--spread", "errors.toml", "-o", "out"], ["out/report.html"]),
}  # fmt: skip


@pytest.fixture(autouse=True)
def _elsewhere(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("errors.toml").write_text(SPREAD)


def weigh(path, *options):
    result = runner.invoke(app, ["weigh", str(path), *options])
    assert "Traceback" not in result.output and not isinstance(result.exception, AssertionError)
    return result


def made(*words):
    result = runner.invoke(app, list(words))
    assert result.exit_code == 0, result.output


@pytest.mark.parametrize("name", MADE)
def test_is_made_again_with_equal_digits(name):
    words, files = MADE[name]
    made(*words)
    for file in files:
        before = Path(file).read_bytes()
        result = weigh(file)
        assert result.exit_code == 0, result.output
        assert re.search(r"to the last (byte|bit)\n$", result.stdout), result.stdout
        assert Path(file).read_bytes() == before and result.stdout.count("\n") == 1
        told = json.loads(weigh(file, "--json").stdout)
        assert told["agrees"] is True and Path(told["file"]).parent == Path(file).parent


@pytest.mark.parametrize("name", ["deluxetable", "mrt", "csv", "contrast", "leverage", "report"])
def test_one_other_digit_is_found(name):
    words, files = MADE[name]
    made(*words)
    path = Path(files[0])
    text = path.read_text()
    head, last = text[: len(text) // 3], text[len(text) // 3 :]
    if name == "report":
        spoilt = text.replace("(1.01 ± ", "(1.02 ± ", 1)
    else:
        at = [m for m in re.finditer(r"(?<=\d\.)(\d+)(?=[e\\ ×)])|(?<=,0\.)\d{9}", text)][-1]
        digit = str((int(at[0][0]) + 1) % 10)
        spoilt = text[: at.start()] + digit + text[at.start() + 1 :]
    assert spoilt != text and head and last
    path.write_text(spoilt)
    result = weigh(path)
    assert result.exit_code == 1 and "the digits differ: line " in result.stdout, result.stdout


@pytest.mark.parametrize("ending", ["png", "pdf"])
def test_figures_are_drawn_again(ending):
    made("weigh", "--species", "C,O,Fe", "-o", "out")
    made("leverage", "-e", "O", "-o", "out")
    for name in ("yields-over-time", "production-pattern", "mass-function-and-weights"):
        path = Path(f"out/{name}.{ending}")
        result = weigh(path)
        assert result.exit_code == 0 and result.stdout == f"{path}: drawn again, it agrees to the last byte\n"
    data = path.read_bytes()
    path.write_bytes(data.replace(b"kroupa-2001", b"kroupa-1993") if ending == "pdf" else data[:-60])
    result = weigh(path)
    assert result.exit_code in (1, 2) and (result.stdout or result.stderr).count("\n") == 1


def test_pictures_of_something_else_say_so():
    made("sets", "--kind", "agb", "--figure", "map.svg")
    result = weigh("map.svg")
    assert result.exit_code == 2 and "doesn't say which population" in result.stderr
    Path("not.png").write_bytes(b"steelyard, but no picture")
    assert "picture can't be read" in weigh("not.png").stderr


def test_svg_tells_its_population():
    stars = default_population()
    with made_by("weigh population.toml"):
        save(yields_over_time(stars.weigh(["10 Myr", "1 Gyr"]), ["O"]), "a.svg")
    record = read_record("a.svg")
    assert record.command == "weigh population.toml" and 'form = "kroupa-2001"' in record.population


def test_a_scatter_file_with_another_figure_is_found():
    import h5py

    words, (_, path) = MADE["scatter"]
    made(*words)
    with h5py.File(path, "r+") as file:
        file["yields"][3, 2, 1, 0] = 9.0
    result = weigh(path)
    assert result.exit_code == 1 and "most in yields" in result.stdout


def test_another_population_gives_other_digits():
    made(*MADE["csv"][0])
    path = Path("t.csv")
    path.write_text(path.read_text().replace('form = "kroupa-2001"', 'form = "salpeter-1955"'))
    result = weigh(path)
    assert result.exit_code == 1 and "digits differ" in result.stdout


def test_text_may_be_edited():
    made(*MADE["mrt"][0])
    path = Path("t.txt")
    path.write_text(
        path.read_text()
        .replace("Title:", "Title: Yields of our galaxy")
        .replace("Authors:", "Authors: A. Nyone")
    )
    result = weigh(path)
    assert result.exit_code == 0 and result.stdout.endswith("the digits agree; text was edited, first in line 1\n")  # fmt: skip
    path.write_text("% ours\n" + path.read_text())
    assert weigh(path).exit_code == 0


def test_other_figures_of_a_set_are_told():
    made(*MADE["csv"][0])
    path = Path("t.csv")
    text = re.sub(r"(set karakas-2010 sha256 )[0-9a-f]{64}", r"\g<1>" + "0" * 64, path.read_text())
    path.write_text(text.replace("steelyard 0.", "steelyard 0.0"))
    result = weigh(path)
    assert result.exit_code == 0 and "the digits agree" in result.stdout
    assert "the figures of karakas-2010 aren't those it was made with" in result.stdout
    assert "written by steelyard 0.0" in result.stdout


@pytest.mark.parametrize(
    ("spoil", "says"),
    [
        (lambda t: t.replace("made by: steelyard typeset", "made by: steelyard library"), "makes no table"),
        (lambda t: t.replace("made by: steelyard typeset", "made by: steelyard rm -rf"), "makes no table"),
        (lambda t: t.replace("--sources agb,sum", "--bibtex victim.bib"), "'--bibtex' isn't an option"),
        (lambda t: t.replace("--sources agb,sum", "-o victim.csv"), "'-o' isn't an option"),
        (lambda t: t.replace("--sources agb,sum", "--spread /etc/passwd"), "errors aren't stated"),
        (lambda t: t.replace("population.toml --", "/etc/passwd --"), "of no population"),
        (lambda t: t.replace("--sources agb,sum", "'"), "makes no table"),
        (lambda t: t.replace("made by: ", "once by: "), "doesn't say which command"),
        (lambda t: t.replace("population file:", "population file:\n# x"), "doesn't say which population"),
        (lambda t: t.replace("C,", "\ud800,").encode("utf-8", "surrogatepass"), "UTF-8"),
    ],
)
def test_a_hostile_file_is_refused(spoil, says):
    made(*MADE["csv"][0])
    path = Path("t.csv")
    text = path.read_text()
    spoilt = spoil(text)
    assert spoilt != text
    path.write_bytes(spoilt if isinstance(spoilt, bytes) else spoilt.encode())
    before = sorted(Path().rglob("*"))
    result = weigh(path)
    assert result.exit_code == 2, result.output
    assert result.stderr.count("\n") == 1 and says in result.stderr and not result.stdout
    assert sorted(Path().rglob("*")) == before


def test_a_population_that_can_not_be_weighed_is_told():
    made(*MADE["csv"][0])
    path = Path("t.csv")
    path.write_text(path.read_text().replace("karakas-2010", "karakas-2011"))
    result = weigh(path)
    assert (
        result.exit_code == 1 and "can't be made again" in result.stdout and "karakas-2010" in result.stdout
    )


def test_a_file_by_another_name_says_what_its_name_was():
    made(*MADE["leverage"][0])
    Path("out/leverage.csv").rename("ours.csv")
    result = weigh("ours.csv")
    assert result.exit_code == 2 and "leverage.csv" in result.stderr


def test_options_are_refused_beside_an_earlier_result():
    made(*MADE["csv"][0])
    result = weigh("t.csv", "--net")
    assert result.exit_code == 2 and "leave out all options" in result.stderr


def test_the_command_is_told_in_the_file_and_forgotten_after():
    made(*MADE["deluxetable"][0])
    record = read_record("t.tex")
    assert (
        record.command == "typeset population.toml --format deluxetable --elements C,O --spread spread.toml"
    )
    assert record.spread.startswith("[[spread]]") and 'form = "kroupa-2001"' in record.population
    assert command() == ""
    with made_by("weigh population.toml"):
        assert command() == "weigh population.toml"


@pytest.mark.parametrize(
    ("text", "same"),
    [
        ("a 1.0\nb 2.0", True),
        ("a 1.0\nb 2.0000000000000004", True),
        ("a 1.0\nb 2.000001", False),
        ("a 1.0", False),
        ("a 1.0\nb", False),
        ("a 1.0\nand more\nb 2.0", True),
        ("a 1.0\nc 2.0", True),
        ("a 1.0\nb \u22122.0", False),
    ],
)
def test_comparing(text, same):
    assert compared(text, "a 1.0\nb 2.0")[0] is same
