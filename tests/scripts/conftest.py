"""Commands run in this process, in an empty folder."""

from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app


@pytest.fixture(autouse=True)
def _elsewhere(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("FORCE_COLOR", raising=False)


def files():
    """Every file under the current folder, with what it holds."""
    return {path: path.read_bytes() for path in Path().rglob("*") if path.is_file()}


@pytest.fixture
def run():
    """Run a command that succeeds, and give what it printed."""

    def runs(*args):
        result = CliRunner().invoke(app, list(args))
        assert result.exit_code == 0, result.output
        assert result.stderr == "" and "\x1b" not in result.stdout
        return result.stdout

    return runs


@pytest.fixture
def refused():
    """Run a command that can't succeed: status 2, one line on standard error, nothing else, no file."""

    def fails(*args):
        before = files()
        result = CliRunner().invoke(app, list(args))
        assert result.exit_code == 2, result.output
        line = result.stderr
        assert result.stdout == "" and line.startswith("steelyard: ")
        assert line.count("\n") == 1 and line.endswith("\n") and len(line) < 700
        assert "Traceback" not in line and files() == before
        return line

    return fails
