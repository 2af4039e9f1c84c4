"""Every format read by a library that isn't ours, with the same digits, and weighed again from itself."""

import json
import re

import numpy as np
import pandas as pd
import pytest
from astropy.io import fits
from astropy.io.votable import parse
from astropy.table import Table

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource
from steelyard.integrate.files import FORMATS, agrees, format_of, read_stored, stored, write_as
from steelyard.integrate.files.layout import DATASETS, SCALES
from steelyard.integrate.handoff import handoff, write_handoff
from steelyard.integrate.popfile import population_to_toml
from steelyard.integrate.spread import assumed
from steelyard.yields.errors import InputError

SPECIES = ["H", "O", "Al26", "Fe"]
BY_ROW = ("metallicity", "time")


@pytest.fixture(scope="module")
def made():
    population = Population(
        0.01,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"], implode=[(25, 30)]),
            DelayedSource('dust of "novae" \\ é', ["nomoto-1997-w7"], 1e-3, "maoz-graur-2017"),
        ],
        joins=[Join(("agb", "core-collapse"))],
        edges=Edges(above="reach-up"),
        species=SPECIES,
    )
    return handoff(population, [0.0, 0.004, 0.02], ["10 Myr", "1 Gyr"], chosen=False)


@pytest.fixture(params=FORMATS)
def form(request):
    return request.param


def flat(found, name, dims):
    """A dataset as a long table has it."""
    full = ("metallicity", "time", "source", "species")
    shape = found["total"].shape
    values = found[name].reshape([shape[i] if d in dims else 1 for i, d in enumerate(full)])
    return np.broadcast_to(values, shape).ravel()


def test_comes_back_whole(made, form, tmp_path):
    path = tmp_path / "no ending"
    write_handoff(made, path, form)
    assert format_of(path) == form
    found, held = read_stored(path), stored(made.results)
    assert list(found.arrays) == list(held.arrays)
    for name, values in held.arrays.items():
        assert np.array_equal(found.arrays[name], values) and found.arrays[name].dtype == values.dtype, name
    for name, values in held.scales.items():
        assert np.array_equal(found.scales[name], values), name
    for name, value in held.attributes.items():
        assert name == "population" or found.attributes[name] == value, name
    assert found.population == found.attributes["population"] == population_to_toml(made.population)
    assert found.attributes["summary"].startswith("Z = 0 to 0.02; kroupa-2001")
    assert found.attributes["error_checked"] == made.checked
    assert "linear in metallicity" not in found.attributes["interpolation"]


def test_is_weighed_again_with_equal_digits(made, form, tmp_path):
    write_handoff(made, tmp_path / "y", form)
    same, message = agrees(tmp_path / "y")
    assert same and message.endswith("to the last bit"), message


def test_another_figure_is_found(made, form, tmp_path):
    held = stored(made.results)
    held.arrays["net"][1, 1, 1, 1] *= 1 + 1e-9
    write_as(held, tmp_path / "y", form)
    same, message = agrees(tmp_path / "y")
    assert not same and "net (0.004, 1e+09 yr, core-collapse, O): 1.0e-09 of it" in message


def test_one_result_without_events_or_remnants_is_a_file_too(form, tmp_path):
    edges = Edges(below="return-only")
    alone = Population(0.02, [StellarSource("agb", ["karakas-2010"])], species=["C"], ages=[1e5], edges=edges)
    write_as(stored(alone.weigh()), tmp_path / "y", form)
    assert read_stored(tmp_path / "y").arrays["events"].shape == (1, 1, 0)
    assert agrees(tmp_path / "y")[0]


def test_netcdf_by_its_own_library(made, tmp_path):
    netcdf = pytest.importorskip("netCDF4")
    write_handoff(made, tmp_path / "y.nc", "netcdf")
    held = stored(made.results)
    with netcdf.Dataset(tmp_path / "y.nc") as file:
        assert file.data_model == "NETCDF3_64BIT_OFFSET"
        for name, entry in DATASETS.items():
            found = file[name]
            assert found.dimensions == entry.dims and found.units == entry.units
            assert np.array_equal(found[:], held.arrays[name])
        assert file["time"][:].tolist() == [1e7, 1e9] and file["time"].units == "yr"
        names = netcdf.chartostring(np.ma.filled(file["source"][:], b""), encoding="utf-8")
        assert [str(one).rstrip("\0") for one in names] == list(held.sources)
        assert "kroupa-2001" in file.population and file.set_checksums.count("\n") == 3


def test_fits_by_astropy(made, tmp_path):
    write_handoff(made, tmp_path / "y.fits", "fits")
    held = stored(made.results)
    with fits.open(tmp_path / "y.fits") as file:
        file.verify("exception")
        data = file["YIELDS"].data
        assert len(data) == 6 and data["time"].tolist() == [1e7, 1e9] * 3
        for name, entry in DATASETS.items():
            values = data[name].reshape(3, 2, *data[name].shape[1:])
            expected = held.arrays[name] if entry.dims[0] == "metallicity" else held.arrays[name][None, None]
            assert np.array_equal(values, np.broadcast_to(expected, values.shape))
        axes = file["AXES"].data
        assert axes["name"][axes["axis"] == "species"].tolist() == SPECIES
        assert any("kroupa-2001" in line for line in file["ORIGIN"].data["line"])


def test_votable_by_astropy(made, tmp_path):
    write_handoff(made, tmp_path / "y.vot", "votable")
    table = parse(tmp_path / "y.vot", verify="exception").get_first_table()
    assert {f.name: f.description for f in table.fields}["net"] == DATASETS["net"].description
    values = table.to_table()["net"]
    assert values.shape == (6, 3, 4)
    assert np.array_equal(np.asarray(values).reshape(3, 2, 3, 4), stored(made.results).arrays["net"])
    # VOTable 1.4 (IVOA 2019), section 2.2, from memory: the first index of arraysize runs fastest: species
    assert {f.name: f.arraysize for f in table.fields}["net"] == "4x3"
    assert str(table.to_table()["total_rate"].unit) == "1 / yr"


@pytest.mark.parametrize("form", ["ecsv", "csv"])
def test_long_tables_by_astropy_and_pandas(made, form, tmp_path):
    write_handoff(made, tmp_path / "y", form)
    held = stored(made.results).arrays
    if form == "csv":
        table = pd.read_csv(tmp_path / "y", comment="#", dtype=str)
    else:
        table = Table.read(tmp_path / "y", format="ascii.ecsv")
        assert str(table["event_rates_core_collapse"].unit) == "1 / (solMass yr)"
    for name, entry in DATASETS.items():
        if entry.dims[-1] in ("remnant_kind", "event"):
            continue
        assert np.array_equal(np.asarray(table[name], dtype=float), flat(held, name, entry.dims)), name
    assert np.array_equal(
        np.asarray(table["remnants_black_hole"], dtype=float),
        flat(held | {"x": held["remnants"][..., 2]}, "x", BY_ROW),
    )
    assert list(table["species"][:4]) == SPECIES


def test_names_of_scales_are_those_of_every_format():
    assert list(SCALES)[:4] == ["metallicity", "time", "source", "species"]


@pytest.mark.parametrize(
    ("form", "spoil"),
    [
        ("csv", lambda data: data[: len(data) // 2]),
        ("csv", lambda data: data.replace(b"# {", b"# {{", 1)),
        ("csv", lambda data: re.sub(rb'# +"sets".*\n', b"", data)),
        ("ecsv", lambda data: data.replace(b"living", b"alive")),
        ("ecsv", lambda data: data.replace(b"format_version: 1", b"format_version: 9")),
        ("votable", lambda data: data[:-200]),
        ("votable", lambda data: data.replace(b"<VOTABLE", b"<HTML", 1)),
        ("fits", lambda data: data[: len(data) // 3]),
        ("netcdf", lambda data: data[:300]),
        ("netcdf", lambda data: data.replace(b"rest_net", b"rest_nat")),
        ("hdf5", lambda data: data[:2000]),
    ],
)
def test_spoilt_files_are_refused_in_one_line(made, form, spoil, tmp_path):
    path = tmp_path / "y"
    write_handoff(made, path, form)
    data = spoil(path.read_bytes())
    assert data != path.read_bytes()
    path.write_bytes(data)
    with pytest.raises(InputError) as caught:
        read_stored(path)
    assert "\n" not in str(caught.value) and str(caught.value).startswith(str(path))


def test_a_format_that_is_not_known_is_refused(made, tmp_path):
    with pytest.raises(InputError, match="did you mean netcdf"):
        write_handoff(made, tmp_path / "y", "netcdf4")
    assert not list(tmp_path.iterdir())


def test_results_of_other_ages_or_orders_do_not_belong_together(made):
    with pytest.raises(InputError, match="increasing"):
        stored(made.results[::-1])
    one, two = (r.population.weigh([age]) for r, age in zip(made.results, (1e7, 1e8), strict=False))
    with pytest.raises(InputError, match="same ages"):
        stored([one, two])


def test_lines_that_hold_at_some_metallicities_say_where(made):
    told = stored(made.results).attributes
    held = [line for line in told["notes"] if "is held beyond" in line]
    assert held and all(line.endswith("(at Z = 0)") for line in held)
    assert json.dumps(told)  # plain values
    assert "lifetimes: portinari-1998" in told["policies"]


def test_errors_go_with_their_yields_or_are_refused(form, tmp_path):
    stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"], ages=[1e9])
    held = stored(stars.weigh(), assumed(stars).propagate(stars.weigh()))
    if form in ("hdf5", "netcdf"):
        write_as(held, tmp_path / "y", form)
        assert np.array_equal(read_stored(tmp_path / "y").arrays["covariance"], held.arrays["covariance"])
        assert agrees(tmp_path / "y")[0]
    else:
        with pytest.raises(InputError, match="covariances"):
            write_as(held, tmp_path / "y", form)
        assert not list(tmp_path.iterdir())
