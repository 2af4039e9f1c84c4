import io
import os
import tomllib

import h5py
import numpy as np
import pandas as pd
import pytest

from steelyard.integrate import DelayedSource, Join, Population, StellarSource
from steelyard.integrate.files import agrees, read_hdf5, write_csv, write_hdf5
from steelyard.integrate.popfile import population_from_dict
from steelyard.yields.errors import InputError
from steelyard.yields.whole import replace_file

AGES = ("5 Myr", "30 Myr", "1 Gyr", "13.8 Gyr")
SCALES = ("metallicity", "time", "source", "species", "remnant_kind", "event")
BY_SPECIES = ("metallicity", "time", "source", "species")


def population(**changes):
    given = {
        "metallicity": 0.008,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"], implode=[(25, 30)]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
        "species": ["C12", "N14", "O16", "Ti48", "Fe56"],
        "ages": AGES,
    }
    return Population(**given | changes)


def agb():
    return Population(0.02, [StellarSource("agb", ["karakas-2010"])], species=["C", "N"], ages=["1 Gyr"])


@pytest.fixture(scope="module")
def result():
    return population().weigh()


@pytest.fixture
def file(result, tmp_path):
    write_hdf5(result, tmp_path / "stars.h5")
    return tmp_path / "stars.h5"


def test_hdf5_comes_back_to_the_bit(result, file):
    stored = read_hdf5(file)
    assert stored.species == result.species
    assert stored.sources == result.sources
    assert stored.metallicity.tolist() == [0.008]
    np.testing.assert_array_equal(stored.ages, result.ages)
    for name in ("total", "net", "total_rate", "net_rate"):
        held = stored.arrays[name]
        assert held.shape == (1, 4, 3, 5)
        for i, source in enumerate(result.sources):
            for j, species in enumerate(result.species):
                fresh = result.get(species, source, name.removesuffix("_rate"), name.endswith("_rate"))
                np.testing.assert_array_equal(held[0, :, i, j], fresh)
    np.testing.assert_array_equal(stored.arrays["followed"], result.followed)
    assert not result.followed.all()
    np.testing.assert_array_equal(stored.arrays["living"][0], result.living)
    np.testing.assert_array_equal(stored.arrays["returned"][0], result.returned)
    np.testing.assert_array_equal(stored.arrays["ejected"][0], result.ejected.T)
    assert stored.events == ("core-collapse", "imploded", "thermonuclear")
    for k, kind in enumerate(stored.events):
        np.testing.assert_array_equal(stored.arrays["events"][0, :, k], result.events[kind])
        np.testing.assert_array_equal(stored.arrays["event_rates"][0, :, k], result.event_rates[kind])
    for k, kind in enumerate(stored.remnant_kinds):
        np.testing.assert_array_equal(stored.arrays["remnants"][0, :, k], result.remnants_by_kind[kind])
    assert stored.attributes["notes"] == result.notes
    assert stored.attributes["sets"] == tuple(s.id for s in result.population.prepared.sets)
    assert all(len(sha) == 64 for sha in stored.attributes["set_checksums"])


def test_hdf5_is_told_apart_by_h5py_alone(file):
    with h5py.File(file) as held:
        assert held.attrs["format"] == b"steelyard population yields"
        assert tomllib.loads(held.attrs["population"].decode())["metallicity"] == 0.008
        for name, dataset in held.items():
            assert dataset.attrs["units"], name
            assert dataset.attrs["description"], name
            assert dataset.is_scale == (name in SCALES)
            if name not in SCALES:
                labels = [d.label for d in dataset.dims]
                assert [d[0].name for d in dataset.dims] == [f"/{label}" for label in labels]
                assert dataset.shape == tuple(len(held[label]) for label in labels)
        assert [d.label for d in held["total"].dims] == list(BY_SPECIES)
        assert [d.label for d in held["followed"].dims] == ["source", "species"]
        assert held["time"].attrs["units"] == b"yr"
        assert held["total_rate"].attrs["units"] == b"Msun/Msun/yr"
        # the book-keeping of the mass that was formed, from nothing but the file
        whole = held["living"][0] + held["remnants"][0].sum(axis=-1) + held["ejected"][0].sum(axis=-1)
        np.testing.assert_allclose(whole, 1.0, rtol=0, atol=1e-12)


def test_elements_and_rest_are_all_that_is_ejected(tmp_path):
    write_hdf5(population(species="elements").weigh(), tmp_path / "x.h5")
    with h5py.File(tmp_path / "x.h5") as held:
        parts = held["total"][...].sum(axis=-1) + held["rest_total"][...]
        np.testing.assert_allclose(parts, held["ejected"][...], rtol=0, atol=1e-14)
        np.testing.assert_allclose(held["net"][...].sum(axis=-1), -held["rest_net"][...], rtol=0, atol=1e-14)


def test_text_is_of_fixed_length_padded_with_nulls(file):
    with h5py.File(file) as held:
        kinds = [held[name].id.get_type() for name in SCALES[2:]]
        kinds += [held.attrs.get_id(name).get_type() for name in ("population", "sets", "notes")]
        for kind in kinds:
            assert kind.get_class() == h5py.h5t.STRING
            assert not kind.is_variable_str()
            assert kind.get_strpad() == h5py.h5t.STR_NULLPAD
        assert held["species"].id.get_type().get_cset() == h5py.h5t.CSET_ASCII


def test_same_result_gives_same_bytes(result, file, tmp_path):
    write_hdf5(population().weigh(), tmp_path / "again.h5")
    assert (tmp_path / "again.h5").read_bytes() == file.read_bytes()


def test_population_longer_than_64_kb_fits(tmp_path):
    # an attribute in the oldest form of HDF5 ends at 64 kB
    many = agb().weigh(np.geomspace(1e8, 1e10, 3))
    long = Population(0.02, agb().sources, species=["C"], ages=np.geomspace(1e8, 1e10, 6000)).weigh([1e9])
    write_hdf5(long, tmp_path / "long.h5")
    assert len(read_hdf5(tmp_path / "long.h5").population) > 2**16
    assert agrees(tmp_path / "long.h5")[0]
    write_hdf5(many, tmp_path / "long.h5")
    assert read_hdf5(tmp_path / "long.h5").ages.size == 3


def test_population_without_events_is_written(tmp_path):
    write_hdf5(agb().weigh(), tmp_path / "agb.h5")
    stored = read_hdf5(tmp_path / "agb.h5")
    assert stored.events == ()
    assert stored.arrays["events"].shape == (1, 1, 0)
    assert agrees(tmp_path / "agb.h5")[0]


def test_names_outside_ascii_come_back(tmp_path):
    late = DelayedSource("novæ", ["nomoto-1997-w7"], 1e-3, "maoz-graur-2017")
    write_hdf5(population(sources=[agb().sources[0], late], joins=()).weigh(), tmp_path / "x.h5")
    assert read_hdf5(tmp_path / "x.h5").sources == ("agb", "novæ")


def test_weighed_again_it_agrees_to_the_bit(file):
    same, message = agrees(file)
    assert same
    assert "to the last bit" in message


def test_changed_digit_is_found_and_placed(file):
    with h5py.File(file, "r+") as held:
        held["total"][0, 2, 1, 2] *= 1 + 1e-9
    same, message = agrees(file)
    assert not same
    assert "total (1e+09 yr, core-collapse, O16)" in message
    assert "\n" not in message


def test_last_bit_may_differ_but_nan_may_not(file):
    with h5py.File(file, "r+") as held:
        held["total"][0, 2, 1, 2] *= 1 + 4e-16
    assert agrees(file) == (True, f"{file}: weighed again, the digits agree to 1e-12")
    with h5py.File(file, "r+") as held:
        held["living"][0, 0] = np.nan
    same, message = agrees(file)
    assert not same
    assert "living" in message


def test_other_figures_of_a_set_are_named(file):
    with h5py.File(file, "r+") as held:
        sums = held.attrs["set_checksums"]
        sums[0] = b"0" * 64
        held.attrs.modify("set_checksums", sums)
        held["net"][...] *= 2
    same, message = agrees(file)
    assert not same
    assert "the figures of karakas-2010 aren't those it was written with" in message


def test_population_that_no_file_holds_says_so(tmp_path):
    stars = Population(0.02, agb().sources, lifetimes=lambda m, z: 1e10 * m**-2.5, species=["C"])
    write_hdf5(stars.weigh(["1 Gyr"]), tmp_path / "x.h5")
    same, message = agrees(tmp_path / "x.h5")
    assert not same
    assert "can't be weighed again" in message


def lines(error):
    assert "\n" not in str(error.value)
    return str(error.value)


@pytest.mark.parametrize("content", [b"", b"metallicity = 0.014\n", b"\x89HDF\r\n\x1a\n" + b"\0" * 600])
def test_what_is_not_hdf5_is_refused(content, tmp_path):
    (tmp_path / "x.h5").write_bytes(content)
    with pytest.raises(InputError, match=r"x\.h5") as error:
        read_hdf5(tmp_path / "x.h5")
    lines(error)


def test_missing_files_and_folders_are_refused(tmp_path):
    with pytest.raises(InputError, match="no such file"):
        read_hdf5(tmp_path / "none.h5")
    with pytest.raises(InputError, match="not a file"):
        read_hdf5(tmp_path)


def test_truncated_file_is_refused(file):
    file.write_bytes(file.read_bytes()[:-2000])
    with pytest.raises(InputError) as error:
        read_hdf5(file)
    lines(error)


def test_other_hdf5_is_refused(tmp_path):
    with h5py.File(tmp_path / "x.h5", "w") as other:
        other["total"] = np.zeros(3)
    with pytest.raises(InputError, match="holds no population yields"):
        read_hdf5(tmp_path / "x.h5")


def _drop(held):
    del held["net"]


def _shape(held):
    del held["living"]
    held["living"] = np.zeros((1, 3))


def _group(held):
    del held["total"]
    held.create_group("total")


def _words(held):
    del held["returned"]
    held["returned"] = np.array([[b"a", b"b", b"c", b"d"]])


def _numbers(held):
    del held["species"]
    held["species"] = np.arange(5)


def _huge(held):
    del held["time"]
    held.create_dataset("time", shape=(10**12,), dtype="f8", chunks=(10**6,))


def _toml(held):
    held.attrs["population"] = 3


def _version(held):
    held.attrs["format_version"] = 99


def _sets(held):
    del held.attrs["sets"]


@pytest.mark.parametrize(
    ("harm", "said"),
    [
        (_drop, "'net' is missing"),
        (_shape, r"'living' has shape \(1, 3\), not \(1, 4\)"),
        (_group, "'total' is missing"),
        (_words, "'returned' holds no numbers"),
        (_numbers, "'species' holds no names"),
        (_huge, "'time' is too large"),
        (_toml, "'population' is missing"),
        (_version, "format_version is 99"),
        (_sets, "'sets' is missing"),
    ],
)
def test_harmed_files_are_refused_in_one_line(harm, said, file):
    with h5py.File(file, "r+") as held:
        harm(held)
    with pytest.raises(InputError, match=said) as error:
        read_hdf5(file)
    assert str(file) in lines(error)


@pytest.mark.parametrize(
    "text", ["metallicity = ", "metallicity = 0.02\nsource = 3", "[" * 5000, "x = 1" + "0" * 9999]
)
def test_harmed_population_is_no_traceback(text, file):
    with h5py.File(file, "r+") as held:
        held.attrs["population"] = text.encode()
    same, message = agrees(file)
    assert not same
    assert "\n" not in message


@pytest.mark.parametrize("write", [write_hdf5, write_csv])
@pytest.mark.parametrize("step", ["replace", "fsync"])
def test_failure_midway_leaves_what_was_there(write, step, result, tmp_path, monkeypatch):
    target = tmp_path / "stars"
    target.write_bytes(b"before")

    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, step, fail)
    with pytest.raises(InputError, match="No space left on device") as error:
        write(result, target)
    lines(error)
    assert [p.name for p in tmp_path.iterdir()] == ["stars"]
    assert target.read_bytes() == b"before"


def test_interrupt_midway_leaves_nothing(tmp_path, monkeypatch):
    def interrupt(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "replace", interrupt)
    with pytest.raises(KeyboardInterrupt):
        replace_file(tmp_path / "x", b"data")
    assert not list(tmp_path.iterdir())


def test_places_that_cannot_be_written_are_refused(tmp_path):
    with pytest.raises(InputError, match="there is no folder"):
        replace_file(tmp_path / "none" / "x.csv", b"")
    with pytest.raises(InputError, match="not an ordinary file"):
        replace_file(tmp_path, b"")
    with pytest.raises(InputError, match="can't be written"):
        replace_file("a\0b", b"")
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(InputError, match="not an ordinary file"):
        replace_file(tmp_path / "pipe", b"")


def test_links_and_permissions_stay(tmp_path):
    real = tmp_path / "real"
    real.write_bytes(b"before")
    real.chmod(0o640)
    (tmp_path / "link").symlink_to(real)
    replace_file(tmp_path / "link", b"after")
    assert (tmp_path / "link").is_symlink()
    assert real.read_bytes() == b"after"
    assert real.stat().st_mode & 0o777 == 0o640


def test_csv_is_read_by_pandas_with_every_digit(result, tmp_path):
    write_csv(result, tmp_path / "stars.csv")
    names = ["total", "net", "total_rate", "net_rate"]
    # by Python's own reading of numbers: pandas' quick one loses the last bit in some versions
    exact = dict.fromkeys(["age_yr", *names], float)
    table = pd.read_csv(tmp_path / "stars.csv", comment="#", converters=exact)
    assert list(table.columns) == ["age_yr", "source", "species", *names, "followed"]
    assert len(table) == 4 * 3 * 5
    for (source, species), rows in table.groupby(["source", "species"]):
        np.testing.assert_array_equal(rows["age_yr"], result.ages)
        np.testing.assert_array_equal(rows["total"], result.get(species, source))
        np.testing.assert_array_equal(rows["net_rate"], result.get(species, source, "net", rate=True))
        assert rows["followed"].unique().tolist() == [int(source not in result.lacking(species))]


def test_csv_carries_its_population(result, tmp_path):
    write_csv(result, tmp_path / "stars.csv")
    head = [r[2:] for r in (tmp_path / "stars.csv").read_text().splitlines() if r.startswith("#")]
    for one in result.population.prepared.sets:
        assert f"set {one.id} sha256 {one.checksum}" in head
    for note in result.notes:
        assert f"note {note}" in head
    text = "\n".join(head[head.index("population file:") + 1 :])
    again = population_from_dict(tomllib.load(io.BytesIO(text.encode()))).weigh()
    np.testing.assert_array_equal(again.total, result.total)
