"""`steelyard report`: the page that it writes, what it prints and refuses."""

import re
import shlex
import tomllib
from functools import partial
from html import unescape
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app

runner = CliRunner()

SPREAD = '[[spread]]\nset = "kobayashi-2006"\nelements = ["O"]\nsigma = 0.2\n'


@pytest.fixture
def run(run):
    return partial(run, "report")


@pytest.fixture
def refused(refused):
    return partial(refused, "report")


def files():
    return {path: path.read_bytes() for path in Path().rglob("*") if path.is_file()}


def block(page, name):
    (found,) = re.findall(rf'<pre [^>]*aria-label="{name}"><code>(.*?)</code></pre>', page, re.S)
    return unescape(found)


def test_a_page_makes_itself_again(run):
    Path("errors.toml").write_text(SPREAD)
    swaps = ["--swap", "imf=salpeter-1955,chabrier-2003"]
    swaps += ["--swap", 'delay={form="exponential",timescale="1 Gyr",limits=["40 Myr","13.8 Gyr"]}']
    told = run("--elements", "O,Fe", "--spread", "errors.toml", *swaps, "-o", "first/place")
    assert told == "written: first/place/report.html\n"
    page = Path("first/place/report.html").read_text(encoding="utf-8")
    Path("population.toml").write_text(block(page, "Population file"))
    Path("spread.toml").write_text(block(page, "Stated errors"))
    assert tomllib.loads(block(page, "Stated errors"))["spread"][0]["sigma"] == 0.2
    weigh, again = block(page, "Commands").splitlines()
    assert weigh == "steelyard weigh population.toml"
    run(*shlex.split(again)[2:])
    assert Path("report.html").read_text(encoding="utf-8") == page
    # a page of steelyard's own is replaced
    run("--elements", "O")
    assert Path("report.html").read_text(encoding="utf-8") != page


def test_help_examples_run(run):
    result = runner.invoke(app, ["report", "--help"])
    assert result.exit_code == 0 and max(map(len, result.stdout.splitlines())) <= 80
    examples = [line.strip() for line in result.stdout.splitlines() if line.startswith("    steelyard ")]
    assert len(examples) == 2
    for line in examples:
        run(*shlex.split(line)[2:])
    assert Path("results/report.html").exists() and Path("report.html").exists()


def test_refuses_in_one_line_and_writes_nothing(refused):
    Path("empty.toml").write_text("")
    Path("a-file").write_text("")
    Path("young.toml").write_text(
        'metallicity = 0.02\nages = [0]\n[[source]]\nkind = "agb"\nsets = ["karakas-2010"]\n'
    )
    Path("theirs").mkdir()
    Path("theirs/report.html").write_text("<html>my thesis</html>")
    for args, told in (
        (["nowhere.toml"], "nowhere.toml: there is no such file"),
        (["empty.toml"], "empty.toml: the file is empty"),
        (["young.toml"], "young.toml: nothing is ejected at age 0"),
        (["--elements", "O,Xx"], "--elements: "),
        (["--elements", ","], "--elements names nothing"),
        (["--swap", "imf"], "--swap: 'imf' isn't a swap"),
        (["--swap", "imf=salpeter-1966"], "salpeter-1955"),
        (["--spread", "nowhere.toml"], "nowhere.toml: there is no such file"),
        (["-o", "a-file"], "a-file: this isn't a folder"),
        (["-o", "theirs"], "theirs/report.html: this is no file of steelyard's, and isn't replaced"),
        (["--colour"], "no such option"),
    ):
        assert told in refused(*args)
