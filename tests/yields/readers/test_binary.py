"""VOTable, FITS and HDF5: the same figures come back, whatever wrote them."""

import h5py
import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from steelyard.yields.readers import detect, open_source, read

# Karakas 2010, MNRAS 403, 1413, table A2, 1 Msun, Z = 0.02: net yield
NAMES = ["H1", "He4", "C12", "C13"]
YIELDS = np.array([-8.1048310e-03, 7.9379827e-03, -1.7504650e-04, 2.4790019e-05])


@pytest.fixture
def table():
    made = Table({"species": NAMES, "yield": YIELDS})
    made["yield"].unit = "solMass"
    made["yield"].description = "net yield"
    return made


def values(sheet):
    return dict(zip((r[0] for r in sheet.rows), (float(r[1]) for r in sheet.rows), strict=True))


WANTED = dict(zip(NAMES, YIELDS.tolist(), strict=True))


@pytest.mark.parametrize("form", ["tabledata", "binary", "binary2"])
def test_votable(tmp_path, table, form):
    path = tmp_path / "t.vot"
    table.write(path, format="votable", tabledata_format=form)
    assert detect(open_source(path)) == "votable"
    (found,) = read(path)
    assert found.columns == ("species", "yield") and values(found) == WANTED
    assert found.units == {"yield": "solMass"} and found.notes == {"yield": "net yield"}


@pytest.mark.parametrize("kind", [fits.BinTableHDU, fits.TableHDU])
def test_fits(tmp_path, table, kind):
    path = tmp_path / "t.fits.gz"
    columns = [
        fits.Column("species", "A4" if kind is fits.TableHDU else "4A", array=np.array(NAMES)),
        fits.Column("yield", "D23.15" if kind is fits.TableHDU else "D", array=YIELDS, unit="solMass"),
    ]
    fits.HDUList([fits.PrimaryHDU(), kind.from_columns(columns, name="NET")]).writeto(path)
    assert detect(open_source(path)) == "fits"
    (found,) = read(path)
    assert found.heading == "NET" and values(found) == pytest.approx(WANTED, rel=1e-14)


def test_32_bits_stay_short(tmp_path):
    path = tmp_path / "t.fits"
    Table({"x": np.array([0.1, 1.5e-7], dtype="f4")}).write(path)
    assert [r[0] for r in read(path)[0].rows] == ["0.1", "1.5e-07"]


def test_no_value(tmp_path, table):
    path = tmp_path / "t.fits"
    table["yield"][1] = np.nan
    table.write(path)
    assert read(path)[0].rows[1] == ("He4", "")


def test_hdf5_compound_dataset(tmp_path):
    path = tmp_path / "t.h5"
    data = np.array(
        list(zip([n.encode() for n in NAMES], YIELDS, strict=True)),
        dtype=[("species", "S4"), ("yield", "f8")],
    )
    with h5py.File(path, "w") as file:
        file["z0.02/net"] = data
    assert detect(open_source(path)) == "hdf5"
    (found,) = read(path)
    assert found.heading == "z0.02/net" and values(found) == WANTED


def test_hdf5_columns_side_by_side(tmp_path):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("g/species", data=NAMES, dtype=h5py.string_dtype())
        file["g/yield"] = YIELDS
        file["g/yield"].attrs["units"] = "Msun"
    (found,) = read(path)
    assert values(found) == WANTED and found.units == {"yield": "Msun"}


def test_hdf5_block_of_models_and_species(tmp_path):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        file["mass"], file["Z"] = [1.0, 2.0], [0.02, 0.02]
        file["species"] = np.array(NAMES, dtype="S4")
        file["net"] = np.vstack([YIELDS, 2 * YIELDS])
    (found,) = read(path)
    second = dict(zip(found.columns, map(float, found.rows[1]), strict=True))
    assert second == {"mass": 2.0, "Z": 0.02} | {f"net_{n}": 2 * y for n, y in WANTED.items()}


def test_hdf5_cube_on_named_axes(tmp_path):
    path = tmp_path / "t.h5"
    cube = np.arange(24, dtype=float).reshape(2, 3, 4)
    with h5py.File(path, "w") as file:
        file["Z"], file["mass"] = [0.004, 0.02], [1.0, 2.0, 3.0]
        file["species"] = np.array(NAMES, dtype="S4")
        file["net"] = cube
    (found,) = read(path)
    assert found.columns == ("Z", "mass", *(f"net_{n}" for n in NAMES))
    assert [float(c) for c in found.rows[4]] == [0.02, 2.0, *cube[1, 1]]
