import json
from functools import partial
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import COMMANDS, app

runner = CliRunner()

SWAP = ["--swap", "imf=salpeter-1955,kroupa-1993", "--swap", "thermonuclear=iwamoto-1999-*"]


@pytest.fixture
def run(run):
    return partial(run, "contrast")


def test_one_at_a_time_prints_dex_and_sentences_and_writes_nothing(run):
    text = run(*SWAP, "--elements", "O,Mn,Fe")
    row = next(line.split() for line in text.splitlines() if "salpeter-1955" in line)
    assert row[0] == "imf" and len(row) == 5 and all(cell[0] in "+-" for cell in row[2:])
    assert "[Mn/Fe] is " in text and "; moved by thermonuclear" in text
    assert "Shares" not in text and not list(Path().iterdir())


def test_full_prints_what_it_is_due_to_and_writes_all_files(run):
    text = run(*SWAP, "--full", "--elements", "Mn,Fe", "-o", "out")
    last = [line for line in text.splitlines() if line.startswith("[Mn/Fe]:")]
    assert len(last) == 1 and "dex in all" in last[0] and "% from thermonuclear" in last[0]
    names = {p.name for p in Path("out").iterdir()}
    assert names == {
        "contrast.csv", "contrast.tex", "shares-yields.csv", "shares-ratios.csv", "contrast.png", "contrast.pdf",
        "abundance-envelope.png", "abundance-envelope.pdf", "shares.png", "shares.pdf",
    }  # fmt: skip
    run(*SWAP, "-o", "plain", "--no-figures")
    assert {p.name for p in Path("plain").iterdir()} == {"contrast.csv", "contrast.tex"}


def test_json_has_its_shape_and_nothing_else(run):
    text = run(*SWAP, "--full", "--elements", "O,Mn,Fe", "--ages", "1 Gyr, 13.8 Gyr", "--json")
    assert text.count("\n") == 1
    told = json.loads(text)
    assert list(told) == [
        "convention", "ages_yr", "species", "full", "sampled", "factors", "base", "choices", "range", "deviation",
        "ratio_sources", "served", "notes", "shares", "sentences",
    ]  # fmt: skip
    assert told["ages_yr"] == [1e9, 13.8e9] and told["species"] == ["O", "Mn", "Fe"]
    assert len(told["choices"]) == 3 * 8 - 1 and told["full"] and not told["sampled"]
    assert list(told["choices"][0]) == ["swapped", "yield", "dex", "mark", "ratio"]
    assert all(len(v) == 2 for c in told["choices"] for v in c["dex"].values())
    parts = told["shares"]["ratios"]["shares"]
    assert sum(p["Mn"][1] for p in parts.values()) == pytest.approx(1, abs=1e-12)
    assert [s["age_yr"] for s in told["sentences"]] == [1e9, 13.8e9]
    single = json.loads(run(*SWAP, "--net", "--json"))
    assert single["convention"] == "net" and "shares" not in single


def test_markdown_is_a_table_only(run):
    text = run(*SWAP, "--markdown", "--elements", "C,Fe")
    lines = text.splitlines()
    assert lines[0] == "| swapped | choice | C | Fe |" and {line.count("|") for line in lines} == {5}


def test_population_file_and_what_is_lacking(run):
    Path("mine.toml").write_text(
        'metallicity = 0.008\nspecies = ["O", "Mg"]\nages = ["1 Gyr"]\n[[source]]\nkind = "agb"\n'
        'sets = ["karakas-2010"]\n'
    )
    text = run("mine.toml", "--swap", "agb=marigo-2001")
    row = next(line.split() for line in text.splitlines() if "marigo-2001" in line)
    assert row[-1] == "lacks" and row[-2][0] in "+-0" and "1 Gyr" in text
    assert "the choices serve different masses: 1-6 Msun (karakas-2010); 0.85-5 Msun (marigo-2001)" in text
    assert "[O/Fe] is +0.19; moved by nothing that is swapped; no value with marigo-2001" in text
    narrow = run("mine.toml", "--swap", "agb=marigo-2001", "--common-range")
    assert "restricted to the 1-5 Msun" in narrow


@pytest.mark.parametrize(
    ("args", "says"),
    [
        ([], "nothing is swapped"),
        (["--swap", "imff=salpeter-1955"], "did you mean imf"),
        (["--swap", "imf=salpeter"], "did you mean salpeter-1955"),
        (["--swap", "core-collapse=kobayshi-2006"], "did you mean kobayashi-2006"),
        (["--swap", "imf"], "isn't a swap"),
        (["--swap", "imf=kroupa-2001"], "no choice differs"),
        ([*SWAP, "--elements", "Xx"], "Xx"),
        ([*SWAP, "--elements", ","], "names nothing"),
        ([*SWAP, "--ages", "soon"], "soon"),
        ([*SWAP, "--ages", "0 yr"], "age 0"),
        ([*SWAP, "--json", "--markdown"], "exclude"),
        ([*SWAP, "--full", "--most", "5"], "too few"),
        ([*SWAP, "-o", "taken"], "isn't a folder"),
        (["nowhere.toml", *SWAP], "there is no such file"),
        ([*SWAP, "--ful"], "--full"),
    ],
)
def test_what_cannot_be_used_is_told_on_one_line(args, says):
    Path("taken").write_text("")
    result = runner.invoke(app, ["contrast", *args])
    assert result.exit_code == 2 and result.stdout == ""
    assert result.stderr.startswith("steelyard: ") and result.stderr.count("\n") == 1
    assert says in result.stderr and sorted(p.name for p in Path().iterdir()) == ["taken"]


def test_help_examples_run(run):
    result = runner.invoke(app, ["contrast", "--help"])
    assert "contrast" in COMMANDS and result.exit_code == 0
    import shlex

    examples = [line.strip() for line in result.stdout.splitlines() if line.strip().startswith("steelyard ")]
    assert len(examples) == 3
    for line in examples:
        run(*shlex.split(line)[2:], "--no-figures")
