"""`steelyard handoff` from the command line, and its files read by plain Python, C and Fortran."""

import shutil
import subprocess
import sys
from pathlib import Path

import h5py
import numpy as np
import pytest
from typer.testing import CliRunner

from steelyard.integrate.files import format_of
from steelyard.scripts.main import app

runner = CliRunner()
EXAMPLES = Path(__file__).parents[2] / "scripts" / "examples"


@pytest.fixture(scope="module")
def file(tmp_path_factory):
    path = tmp_path_factory.mktemp("handoff") / "yields.h5"
    result = runner.invoke(app, ["handoff", "--species", "O,Fe", "--error", "0.05", "-o", str(path)])
    assert result.exit_code == 0, result.output
    assert "error of interpolation" in result.stdout and f"written: {path}" in result.stdout
    return path


def test_plain_python_reads_it(file):
    done = subprocess.run(
        [sys.executable, EXAMPLES / "read_handoff.py", file], capture_output=True, text=True, check=True
    )
    found = np.array([line.split() for line in done.stdout.splitlines()], dtype=float)
    with h5py.File(file) as held:
        assert np.array_equal(found[:, 0], held["metallicity"][:])
        assert np.array_equal(found[:, 1:], held["total"][:, -1, :, 0])


@pytest.mark.parametrize(("compiler", "suffix"), [("h5cc", "c"), ("h5fc", "f90")])
def test_compiled_languages_read_it(file, tmp_path, compiler, suffix):
    if not shutil.which(compiler):
        pytest.skip(f"{compiler} isn't installed")
    source, program = EXAMPLES / f"read_handoff.{suffix}", tmp_path / "read_handoff"
    subprocess.run([compiler, source, "-o", program], check=True, cwd=tmp_path, capture_output=True)
    done = subprocess.run([program, file], capture_output=True, text=True, check=True)
    with h5py.File(file) as held:
        assert np.array_equal(np.array(done.stdout.split(), dtype=float), held["total"][:, -1, 0, 0])


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (("--format", "hdf6"), "did you mean hdf5?"),
        (("--error", "2"), "isn't between"),
        (("--ages", "-1 Gyr"), "age is negative"),
        (("--metallicities", "0.02"), "no grid"),
        (("--from", "-0.1"), "mass fractions"),
        (("nowhere.toml",), "there is no such file"),
        (("--with", "agb=marigo-2002"), "isn't known"),
        (("-o", "no/such/folder.h5"), "there is no folder no/such"),
    ],
)
def test_refusals(arguments, says, tmp_path):
    path = tmp_path / "y.h5"
    result = runner.invoke(app, ["handoff", "-o", str(path), "--species", "O", *arguments])
    assert result.exit_code == 2 and says in result.stderr and result.stderr.count("\n") == 1
    assert not path.exists()


@pytest.mark.parametrize("form", ["hdf5", "netcdf", "fits", "votable", "ecsv", "csv"])
def test_a_file_of_ours_is_replaced_and_another_one_is_not(form, tmp_path):
    path = tmp_path / "mine"
    short = ["handoff", "--species", "O", "--metallicities", "0.004,0.02", "--ages", "10 Myr, 1 Gyr"]
    words = [*short, "--format", form, "-o", str(path)]
    for _ in range(2):
        assert runner.invoke(app, words).exit_code == 0
    path.write_text("my paper")
    result = runner.invoke(app, words)
    assert result.exit_code == 2 and "isn't replaced" in result.stderr
    assert path.read_text() == "my paper"


@pytest.mark.parametrize(
    ("name", "form"),
    [
        ("y.h5", "hdf5"),
        ("y.nc", "netcdf"),
        ("y.fits", "fits"),
        ("y.vot", "votable"),
        ("y.csv", "csv"),
        ("y", "hdf5"),
    ],
)
def test_the_ending_says_the_form(name, form, tmp_path):
    short = ["--species", "O", "--metallicities", "0.004,0.02", "--ages", "10 Myr, 1 Gyr"]
    assert runner.invoke(app, ["handoff", *short, "-o", str(tmp_path / name)]).exit_code == 0
    assert format_of(tmp_path / name) == form
