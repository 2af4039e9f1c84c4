"""A new user's tasks, one command each, as the README names them, in a folder with nothing but a template."""

import re
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app

README = Path(__file__).parents[1] / "README.md"

#: what keeps a command short enough for a test, and what it leaves
SHORTER = {
    "weigh": (["--species", "C,O,Fe"], "yields.h5"),
    "contrast": (["--elements", "O,Fe"], None),
    "typeset": ([], "yields.tex"),
    "handoff": (["--species", "O,Fe", "--error", "0.05"], "handoff.h5"),
    "report": (["--elements", "O,Fe"], "results/report.html"),
}


def tasks():
    rows = re.findall(
        r"^\| [^|]+ \| `steelyard ([^`]+)` \|$", README.read_text(encoding="utf-8"), re.MULTILINE
    )
    return [row.split() for row in rows]


def test_every_task_is_one_command_of_the_readme():
    assert [one[0] for one in tasks()] == list(SHORTER)


@pytest.mark.parametrize("words", tasks(), ids=lambda words: words[0])
def test_it_does_it(words, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    runner = CliRunner()
    assert runner.invoke(app, ["weigh", "--template", "mine.toml"]).exit_code == 0
    template = Path("mine.toml").read_bytes()
    more, left = SHORTER[words[0]]
    result = runner.invoke(app, [*words, *more])
    assert result.exit_code == 0, result.output
    assert Path("mine.toml").read_bytes() == template  # no edit was needed
    assert left is None or Path(left).stat().st_size > 1000
    if words[0] == "typeset":
        assert Path("yields.bib").read_text().count("@article") >= 5
        assert "\\begin{deluxetable" in Path("yields.tex").read_text()
    if words[0] in ("weigh", "contrast"):
        assert "limongi-chieffi-2018-R-v150" in result.stdout
