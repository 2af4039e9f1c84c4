"""`steelyard audit` as a process would meet it."""

import json
import subprocess
import sys

import pytest

from steelyard.yields import load
from steelyard.yields.audit import at_least


def steelyard(*words, **more):
    code = "import sys; from steelyard.scripts.main import main; sys.argv[0] = 'steelyard'; main()"
    return subprocess.run([sys.executable, "-c", code, *words], capture_output=True, text=True, **more)


@pytest.fixture
def table(tmp_path):
    """An invented table, in the layout `wide`, whose 3 Msun model ejects more carbon than mass."""
    file = tmp_path / "invented.csv"
    lines = ["mass,Z,remnant,C12,O16"]
    lines += [f"{m},0.02,{0.5 + 0.08 * m:.3f},{0.002 * m:.3E},{0.004 * m:.3E}" for m in (1, 2, 3, 4, 5)]
    lines[3] = "3,0.02,0.740,6.000E+00,1.200E-02"
    file.write_text("\n".join(lines) + "\n")
    return file


def test_findings_give_status_1_and_are_listed():
    done = steelyard("audit", "doherty-2014")
    assert done.returncode == 1 and done.stderr == ""
    assert "7.5 Msun, Z = 0.0001" in done.stdout and "net yields sum to +0.001 Msun" in done.stdout


def test_nothing_found_gives_status_0():
    done = steelyard("audit", "nomoto-1997-w7", "--severity", "note")
    assert done.returncode == 0 and done.stdout.strip() == "nomoto-1997-w7: nothing found"


def test_severity_decides_what_is_shown_and_answered():
    done = steelyard("audit", "karakas-2010", "--severity", "error")
    assert done.returncode == 0 and "lighter not shown" in done.stdout


@pytest.mark.parametrize("severity", ["note", "warning"])
def test_json_is_what_the_set_says_of_itself(severity):
    done = steelyard("audit", "kobayashi-2006", "--json", "--severity", severity)
    expected = [f.to_dict() for f in at_least(load("kobayashi-2006").audit(), severity)]
    assert json.loads(done.stdout) == json.loads(json.dumps(expected))


def test_a_figure_is_written(tmp_path):
    done = steelyard("audit", "marigo-2001", "--figure", str(tmp_path / "a.png"))
    assert done.returncode == 0
    assert (tmp_path / "a.png").read_bytes()[:4] == b"\x89PNG"


def test_a_file_is_audited_by_its_layout(table):
    done = steelyard("audit", str(table), "--layout", "wide", "--severity", "error", "--json")
    assert done.returncode == 1, done.stderr
    found = json.loads(done.stdout)
    assert {(f["mass"], f["metallicity"]) for f in found} == {(3.0, 0.02)}
    assert any("C12" in f["species"] for f in found)


@pytest.mark.parametrize(
    ("words", "why"),
    [
        (["karakas-201"], "did you mean karakas-2010"),
        (["karakas-2010", "--severity", "warnings"], "did you mean warning"),
        (["karakas-2010", "--figure", "a.doc"], "known: pdf, png, svg"),
        (["karakas-2010", "doherty-2014", "--figure", "a.png"], "audit one at a time"),
        ([__file__], "name it with --layout"),
    ],
)
def test_unusable_input_is_one_line_and_status_2(words, why):
    done = steelyard("audit", *words)
    assert done.returncode == 2 and done.stdout == ""
    assert why in done.stderr and len(done.stderr.splitlines()) == 1
