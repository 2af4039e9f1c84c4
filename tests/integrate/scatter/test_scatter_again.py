"""Files of populations drawn star by star, drawn again from themselves."""

import h5py
import numpy as np
import pytest

from steelyard.integrate.scatter import scatter, write_scatter
from steelyard.integrate.scatter.again import agrees, is_scatter
from steelyard.yields.errors import InputError

from .populations import published


@pytest.fixture(scope="module")
def drawn(tmp_path_factory):
    path = tmp_path_factory.mktemp("scatter") / "scatter.h5"
    write_scatter(scatter(published(("O", "Fe")), "300 Msun", 30, seed=5), path)
    return path.read_bytes()


@pytest.fixture
def path(drawn, tmp_path):
    (tmp_path / "s.h5").write_bytes(drawn)
    return tmp_path / "s.h5"


def test_the_same_digits_are_drawn(path):
    assert is_scatter(path)
    assert agrees(path) == (True, f"{path}: drawn again, the digits agree to the last bit")


def put(name, values):
    def puts(file):
        del file[name]
        file[name] = values

    return puts


def other(name, at=0):
    def adds(file):
        file[name][at] = file[name][at] + 1

    return adds


def attribute(name, value):
    return lambda file: file.attrs.__setitem__(name, value)


@pytest.mark.parametrize(
    ("spoil", "says"),
    [
        (other("yields", (3, 0, 1, 0)), "most in yields"),
        (other("mean", (0, 0)), "most in mean"),
        (other("quantile"), "most in quantile"),
        (other("followed", (0, 0)), "most in followed"),
        (lambda file: file.__delitem__("covariance"), "it has covariance, which the file lacks"),
        (lambda file: put("species", file["species"][()][::-1])(file), "another list of species"),
        (lambda file: file.__delitem__("source"), "another list of source"),
        (lambda file: put("mean", file["mean"][:1])(file), "mean has another shape"),
        (attribute("seed", 6), "the digits differ"),
        (attribute("seed", -1), "seed isn't a whole number"),
        (attribute("count", 10**15), "lower mass or count"),
        (attribute("mass", float("nan")), "isn't finite"),
        (attribute("mode", "wishful"), "can't be drawn again"),
        (attribute("population", "metallicity = "), "can't be drawn again"),
        (put("time", np.array([np.nan])), "isn't finite"),
        (put("time", 1e7), "another shape"),
    ],
)
def test_what_differs_is_told(path, spoil, says):
    with h5py.File(path, "r+") as file:
        spoil(file)
    same, message = agrees(path)
    assert not same and says in message and "\n" not in message


def test_an_older_version_and_other_figures_are_told(path):
    with h5py.File(path, "r+") as file:
        file.attrs["steelyard_version"] = "0.0.1"
        sums = file.attrs["set_checksums"]
        sums[0] = b"0" * 64
        file.attrs["set_checksums"] = sums
    same, message = agrees(path)
    assert same and "written by steelyard 0.0.1" in message
    assert "the figures of karakas-2010 aren't those it was written with" in message


def too_large(file):
    del file["mean"]
    file.create_dataset("mean", (10**6, 10**6), "f8", chunks=(100, 100), compression="gzip")


@pytest.mark.parametrize(
    ("spoil", "says"),
    [
        (attribute("format_version", 99), "no populations drawn"),
        (attribute("sets", 5), "'sets' is missing, or of another kind"),
        (attribute("mass", "heavy"), "'mass' is missing, or of another kind"),
        (attribute("population", np.bytes_(b"\xff")), "can't be read"),
        (put("mean", np.array([[b"a", b"b"]])), "neither numbers nor names"),
        (put("time", np.array([b"a"])), "'time' is missing, or of another kind"),
        (put("time", h5py.Empty("f8")), "'time' is missing, or of another kind"),
        (put("mean", h5py.ExternalLink("/nowhere", "x")), "can't be read"),
        (too_large, "more than 8 GiB"),
    ],
)
def test_a_file_that_can_not_be_used_is_refused(path, spoil, says):
    with h5py.File(path, "r+") as file:
        spoil(file)
    with pytest.raises(InputError, match=says) as error:
        agrees(path)
    assert "\n" not in str(error.value)


def test_other_files_are_none_of_these(tmp_path):
    assert not is_scatter(tmp_path)
    (tmp_path / "a.h5").write_bytes(b"no HDF5")
    assert not is_scatter(tmp_path / "a.h5")
