"""Every table and page of the command line, made again from itself by `steelyard weigh FILE`."""

import json
import re
import shutil
from contextlib import chdir
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.integrate.figures import yields_over_time
from steelyard.integrate.popfile import default_population
from steelyard.integrate.provenance import command, made_by
from steelyard.integrate.record import read_record
from steelyard.scripts.main import app
from steelyard.yields.figures import save

runner = CliRunner()

SPREAD = '[[spread]]\nsource = "core-collapse"\nelements = ["O", "Fe"]\nsigma = 0.1\n'

#: command lines, and what each leaves that is made again
MADE = {
    "weigh": (["weigh", "--species", "C,O,Fe", "--spread", "errors.toml", "-o", "out"], ["out/yields-errors.csv", "out/yields.csv"]),
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


@pytest.fixture(scope="module")
def outputs(tmp_path_factory):
    """Make the outputs of a command line once, and put copies of them where a test runs."""
    kept = {}

    def puts(name):
        if name not in kept:
            kept[name] = tmp_path_factory.mktemp(name)
            with chdir(kept[name]):
                Path("errors.toml").write_text(SPREAD)
                made(*MADE[name][0])
        shutil.copytree(kept[name], ".", dirs_exist_ok=True)
        return [Path(file) for file in MADE[name][1]]

    return puts


def weigh(path, *options):
    result = runner.invoke(app, ["weigh", str(path), *options])
    assert "Traceback" not in result.output and not isinstance(result.exception, AssertionError)
    return result


def made(*words):
    result = runner.invoke(app, list(words))
    assert result.exit_code == 0, result.output


@pytest.mark.parametrize("name", MADE)
def test_is_made_again_with_equal_digits(name, outputs):
    for file in outputs(name):
        before = file.read_bytes()
        result = weigh(file)
        assert result.exit_code == 0, result.output
        assert re.search(r"to the last (byte|bit)\n$", result.stdout), result.stdout
        assert file.read_bytes() == before and result.stdout.count("\n") == 1
    told = json.loads(weigh(file, "--json").stdout)
    assert told["agrees"] is True and Path(told["file"]).parent == file.parent


#: where the rows of each output's table begin, of which the last gets another digit
ROW = {
    "weigh": r"^1.*,sum,O,",
    "weigh2": r"^1.*,agb,O,",
    "deluxetable": r"^O & ",
    "booktabs": r"^O & ",
    "mrt": r"^1\.38e\+10 O ",
    "csv": r"^1.*,O,",
    "contrast": r"^1.*,salpeter-1955,O,",
    "leverage": r"^1.*,O,kobayashi-2006,",
    "scatter": r"^1.*,O,",
    "report": r'^<tr><th scope="row"><span>O</span></th>',
}


@pytest.mark.parametrize("name", [name for name in MADE if name != "cds"])
def test_one_other_digit_is_found(name, outputs):
    path = outputs(name)[0]
    text = path.read_text()
    rows = [m.start() for m in re.finditer(ROW[name], text, re.MULTILINE)]
    assert rows
    at = next(m.start() for m in re.finditer(r"(?<=[.\d])[1-9](?!\d*[-.])", text[rows[-1] :]))
    at += rows[-1]
    line = text.count("\n", 0, at) + 1
    path.write_text(text[:at] + str(int(text[at]) - 1) + text[at + 1 :])
    result = weigh(path)
    assert result.exit_code == 1 and f"the digits differ: line {line} has " in result.stdout, result.stdout


def test_a_digit_of_the_data_beside_a_description_is_found(outputs):
    readme, data = outputs("cds")
    data.write_text(data.read_text().replace("1.67e-03", "1.66e-03", 1))
    for path in (readme, data):
        result = weigh(path)
        assert result.exit_code == 1
        assert result.stdout == f"{data}: made again, the digits differ: line 2 has 1.66e-03, not 1.67e-03\n"


@pytest.mark.parametrize("name", ["booktabs", "mrt", "contrast", "leverage"])
def test_a_file_under_another_name_is_known_by_its_lines(name, outputs):
    paths = outputs(name)
    for path in paths:
        ours = path.rename(f"ours{path.suffix}")
        result = weigh(ours)
        assert result.exit_code == 0, result.stdout
        assert name in ("booktabs", "mrt") or f"{ours}: made again as {path.name}, it agrees" in result.stdout


def test_a_figure_under_another_name_is_known(outputs):
    made("weigh", "--species", "O", "-o", "out")
    Path("out/production-pattern.png").rename("ours.png")
    result = weigh("ours.png")
    assert result.exit_code == 0
    assert result.stdout == "ours.png: drawn again as production-pattern.png, it agrees to the last byte\n"


def test_lines_may_end_as_elsewhere(outputs):
    (path,) = outputs("csv")
    for begin in (b"", b"\xef\xbb\xbf"):
        path.write_bytes(begin + path.read_bytes().replace(b"\r", b"").replace(b"\n", b"\r\n"))
        result = weigh(path)
        assert result.exit_code == 0 and result.stdout.endswith("it agrees but for how its lines end\n")


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


def test_a_scatter_file_with_another_figure_is_found(outputs):
    import h5py

    _, path = outputs("scatter")
    with h5py.File(path, "r+") as file:
        file["yields"][3, 2, 1, 0] = 9.0
    result = weigh(path)
    assert result.exit_code == 1 and "most in yields" in result.stdout


@pytest.mark.parametrize("name", ["weigh2", "booktabs", "mrt", "csv", "leverage", "scatter"])
def test_another_population_gives_other_digits(name, outputs):
    path = outputs(name)[0]
    told = 'form = "salpeter-1955"' if name == "weigh2" else 'form = "kroupa-2001"'
    assert told in path.read_text()
    path.write_text(path.read_text().replace(told, 'form = "miller-scalo-1979"'))
    result = weigh(path)
    assert result.exit_code == 1 and "digits differ: line " in result.stdout


def test_text_may_be_edited(outputs):
    outputs("mrt")
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


def test_other_figures_of_a_set_are_told(outputs):
    outputs("csv")
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
        (lambda t: t.replace("--sources agb,sum", "--elements " + "C," * 60_000), "longer than"),
        (lambda t: "# x\n" * 2_500_000 + t, "larger than 1 MB"),
        (
            lambda t: t.replace("# population file:", "# x\n" * 2_500_000 + "# population file:"),
            "larger than 1 MB",
        ),
        (lambda t: t.replace("C,", "\ud800,").encode("utf-8", "surrogatepass"), "UTF-8"),
    ],
)
def test_a_hostile_file_is_refused(spoil, says, outputs):
    outputs("csv")
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


def test_a_population_that_can_not_be_weighed_is_told(outputs):
    outputs("csv")
    path = Path("t.csv")
    path.write_text(path.read_text().replace("karakas-2010", "karakas-2011"))
    result = weigh(path)
    assert (
        result.exit_code == 1 and "can't be made again" in result.stdout and "karakas-2010" in result.stdout
    )


def test_options_are_refused_beside_an_earlier_result(outputs):
    outputs("csv")
    result = weigh("t.csv", "--net")
    assert result.exit_code == 2 and "leave out all options" in result.stderr


def test_the_command_is_told_in_the_file_and_forgotten_after(outputs):
    outputs("deluxetable")
    record = read_record("t.tex")
    assert (
        record.command == "typeset population.toml --format deluxetable --elements C,O --spread spread.toml"
    )
    assert record.spread.startswith("[[spread]]") and 'form = "kroupa-2001"' in record.population
    assert command() == ""
    with made_by("weigh population.toml"):
        assert command() == "weigh population.toml"


def test_a_long_tail_of_comments_is_text(outputs):
    (path,) = outputs("csv")
    path.write_text(path.read_text() + "# x \\\n" * 1_000_000)
    result = weigh(path)
    assert result.exit_code == 0 and "text was edited, first in line " in result.stdout
