"""Unusable input of every command: status 2, one line that says what and how to mend it, nothing written."""

from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import COMMANDS, app

runner = CliRunner()

FILES = {
    "empty.toml": "",
    "broken.toml": "metallicity = \n",
    "key.toml": 'metalicity = 0.02\n[[source]]\nkind = "agb"\nsets = ["karakas-2010"]\n',
    "set.toml": 'metallicity = 0.02\n[[source]]\nkind = "agb"\nsets = ["karakas-2011"]\n',
    "unit.toml": 'metallicity = 0.02\nages = ["3 Msun"]\n[[source]]\nkind = "agb"\nsets = ["karakas-2010"]\n',
    "spread.toml": '[[spread]]\nset = "kobayashi-2006"\nsigma = "much"\n',
    "text.txt": "no table at all\n",
    "result.h5": "not HDF5",
}

#: what commands that read a population file have in common
POPULATIONS = [
    (["nowhere.toml"], "nowhere.toml: there is no such file"),
    (["."], "this is a folder"),
    (["empty.toml"], "empty.toml: the file is empty"),
    (["broken.toml"], "broken.toml: line 1 column 15: this isn't TOML"),
    (["key.toml"], "did you mean metallicity?"),
    (["set.toml"], "did you mean karakas-2010"),
    (["unit.toml"], "unit.toml: "),
    (["text.txt"], "text.txt: line 1"),
]

#: what else each needs on its line to come so far
NEEDS = {
    "weigh": [],
    "contrast": ["--swap", "imf=salpeter-1955"],
    "leverage": [],
    "typeset": [],
    "handoff": ["-o", "out.h5"],
    "report": [],
    "scatter": [],
}

OWN = {
    "sets": [(["--kind", "agbb"], "did you mean agb?"), (["more"], "more")],
    "show": [
        ([], "missing argument"),
        (["karakas-2011"], "did you mean karakas-2010"),
        (["kobayashi-2006", "--metallicity", "lots"], "lots"),
        (["kobayashi-2006", "--json", "--csv"], "exclude each other"),
    ],
    "audit": [
        ([], "missing argument"),
        (["karakas-2011"], "karakas-2011"),
        (["karakas-2010", "--severity", "eror"], "did you mean error?"),
        (["text.txt"], "--layout"),
    ],
    "admit": [
        ([], "missing argument"),
        (["nowhere.csv", "--layout", "nowhere.toml"], "nowhere"),
        (["text.txt"], "give --layout"),
        (["text.txt", "--layout", "broken.toml"], "broken.toml"),
    ],
    "library": [
        (["--remove", "nothing-2026"], "nothing-2026"),
        (["--layout", "nothing-2026", "--remove", "x"], "exclude each other"),
    ],
    "weigh": [
        (["result.h5"], "result.h5"),
        (["--ages", "10 Msun"], "--ages: "),
        (["--metallicity", "high"], "--metallicity"),
        (["--species", "O,Xx"], "--species: "),
        (["--spread", "spread.toml"], "spread.toml: "),
    ],
    "contrast": [
        ([], "nothing is swapped"),
        (["--swap", "imff=salpeter-1955"], "did you mean imf"),
        (["--swap", "imf=salpeter-1956"], "salpeter-1955"),
    ],
    "leverage": [(["--top", "0"], "--top"), (["--elements", "Xx"], "--elements")],
    "typeset": [(["--format", "boktabs"], "did you mean booktabs?"), (["--format", "cds"], "-o")],
    "handoff": [
        ([], "missing option"),
        (["-o", "out.h5", "--format", "hdf"], "did you mean hdf5?"),
        (["-o", "no/where/out.h5", "--metallicities", "0.01,0.02", "--ages", "1 Gyr,2 Gyr"], "no/where"),
    ],
    "report": [(["--swap", "imf"], "isn't a swap"), (["-o", "text.txt"], "text.txt: this isn't a folder")],
    "scatter": [
        (["--mode", "poison"], "did you mean poisson?"),
        (["--mass", "1 Gyr"], "--mass has the wrong dimension"),
        (["--ratio", "Mg"], "such as Mg/Fe"),
    ],
}

CASES = [(name, args, told) for name, cases in OWN.items() for args, told in cases]
CASES += [
    (name, [*args, *more], told) for name, more in NEEDS.items() for args, told in POPULATIONS
]  # fmt: skip
CASES += [(name, ["--no-such-option"], "no such option") for name in COMMANDS]


def test_every_command_has_its_cases():
    assert set(OWN) == set(COMMANDS)


@pytest.mark.parametrize(("name", "args", "told"), CASES, ids=[" ".join([n, *a]) for n, a, _ in CASES])
def test_one_line_and_status_2(name, args, told, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("STEELYARD_LIBRARY", str(tmp_path / "library"))
    for file, text in FILES.items():
        Path(file).write_text(text)
    result = runner.invoke(app, [name, *args])
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    assert result.stderr.startswith("steelyard: ") and result.stderr.count("\n") == 1
    assert told in result.stderr and "Traceback" not in result.stderr
    assert {str(path) for path in Path().iterdir()} - {"library"} == set(FILES)
