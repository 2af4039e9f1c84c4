"""Files that are damaged or meant to do harm end in one line, and reach nothing outside themselves."""

import gzip
import io
import os
import random
import zipfile

import h5py
import numpy as np
import pytest
from astropy.table import Table

from steelyard.yields import InputError
from steelyard.yields.readers import FORMATS, Options, open_source, read, source


def refused(path, match="", format="", options=None):
    with pytest.raises(InputError, match=match or None) as caught:
        read(path, format, options)
    assert "\n" not in str(caught.value) and len(str(caught.value)) < 600
    return str(caught.value)


def lay(folder, name, content):
    path = folder / name
    path.write_bytes(content)
    return path


@pytest.fixture
def small(monkeypatch):
    """The limit on size brought down, so that going over it costs nothing."""
    for module in ("source", "hdf5", "numbers", "fits"):
        monkeypatch.setattr(f"steelyard.yields.readers.{module}.LARGEST", 10_000)


def test_zip_and_gzip_bombs(tmp_path, small):
    assert source.LARGEST == 10_000
    refused(lay(tmp_path, "b.csv.gz", gzip.compress(b"0" * 1_000_000)), "more than")
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("t.csv", b"0" * 1_000_000)
    refused(lay(tmp_path, "b.zip", buffer.getvalue()), "more than")


def test_zip_of_several_files(tmp_path):
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w") as archive:
        archive.writestr("a.csv", b"1")
        archive.writestr("../../b.csv", b"1")
    refused(lay(tmp_path, "b.zip", buffer.getvalue()), "holds 2 files")


def test_names_in_a_zip_lead_nowhere(tmp_path):
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w") as archive:
        archive.writestr("../../../etc/t.csv", b"mass,C12\n1.0,2.0\n")
    path = lay(tmp_path, "b.zip", buffer.getvalue())
    assert open_source(path).name == "t.csv" and len(read(path)[0].rows) == 1


def test_sparse_file_of_10_gigabytes(tmp_path):
    path = tmp_path / "t.csv"
    with open(path, "wb") as file:
        file.truncate(10 * 2**30)
    refused(path, "more than 256 MB")


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes in the file system here")
def test_pipe_that_nobody_writes_to(tmp_path):
    os.mkfifo(tmp_path / "t.csv")
    refused(tmp_path / "t.csv", "no regular file")


def test_devices_folders_and_nothing(tmp_path):
    refused(tmp_path, "no regular file")
    refused(tmp_path / "none.csv", "No such file")
    refused(lay(tmp_path, "t.csv", b""), "empty")
    if os.path.exists("/dev/zero"):
        refused("/dev/zero", "no regular file")


VOTABLE = """<?xml version="1.0"?>{0}<VOTABLE version="1.4" xmlns="http://www.ivoa.net/xml/VOTable/v1.3"><RESOURCE>
<TABLE><FIELD name="C12" datatype="double"/><DATA>{1}</DATA></TABLE></RESOURCE></VOTABLE>"""
DATA = "<TABLEDATA><TR><TD>1.0</TD></TR></TABLEDATA>"


def test_votable_entities_and_streams(tmp_path):
    assert read(lay(tmp_path, "t.vot", VOTABLE.format("", DATA).encode()))[0].rows == (("1.0",),)
    laughs = '<!DOCTYPE x [<!ENTITY a "ha"><!ENTITY b "&a;&a;&a;&a;">]>'
    refused(lay(tmp_path, "t.vot", VOTABLE.format(laughs, DATA).encode()), "entities")
    refused(lay(tmp_path, "t.vot", VOTABLE.format("", DATA).encode("utf-16")), "encoding|no data")
    for stream in (
        '<BINARY><STREAM href="file:///etc/passwd"/></BINARY>',
        "<BINARY><STREAM\n encoding='gzip'>eA==</STREAM></BINARY>",
    ):
        refused(lay(tmp_path, "t.vot", VOTABLE.format("", stream).encode()), "stream")


def test_hdf5_that_leads_elsewhere(tmp_path):
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["mass"] = [1.0]
    for make in (
        lambda f: f.__setitem__("mass", h5py.ExternalLink("other.h5", "/mass")),
        lambda f: f.__setitem__("mass", h5py.SoftLink("/nowhere")),
        lambda f: f.create_dataset("mass", (1,), "f8", external=[(str(tmp_path / "other.h5"), 0, 8)]),
    ):
        path = tmp_path / "t.h5"
        with h5py.File(path, "w") as file:
            make(file)
        refused(path, "links elsewhere|another file")
    layout = h5py.VirtualLayout((1,), "f8")
    layout[:] = h5py.VirtualSource(str(tmp_path / "other.h5"), "mass", (1,))
    with h5py.File(path, "w") as file:
        file.create_virtual_dataset("mass", layout)
    refused(path, "another file")


def test_hdf5_references_loops_and_inflated_datasets(tmp_path, small):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        file.create_dataset("r", (1,), h5py.ref_dtype)
    refused(path, "references or objects")
    with h5py.File(path, "w") as file:
        file["g/mass"] = [1.0]
        file["g/loop"] = file["g"]
    assert len(read(path)) == 1
    with h5py.File(path, "w") as file:
        file.create_dataset("mass", (100_000,), "f8", chunks=(1000,), compression="gzip")
    refused(path, "more than")


def test_hdf5_objects_deep_inside_each_other_end(tmp_path):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        group = file
        for _ in range(60):
            group = group.create_group("g")
        group["mass"] = [1.0]
    refused(path, "no table")


def test_pickles_are_not_read(tmp_path):
    path = tmp_path / "t.npy"
    np.save(path, np.array([{"a": 1}], dtype=object), allow_pickle=True)
    assert "text" in refused(path)


def _samples(folder):
    """A good file of every format, as bytes; figures invented."""
    from steelyard.yields.readers import Options

    table = Table({"species": ["C12", "O16"], "yield": [1.5e-3, 2.5e-3]})
    found = {}
    for format, name in (
        ("ecsv", "t.ecsv"),
        ("votable", "t.vot"),
        ("fits", "t.fits"),
        ("latex", "t.tex"),
        ("csv", "t.csv"),
    ):
        table.write(folder / name, format=f"ascii.{format}" if format in ("ecsv", "latex", "csv") else format)
        found[format] = (name, (folder / name).read_bytes(), Options())
    with h5py.File(folder / "t.h5", "w") as file:
        file["species"], file["yield"] = np.array(["C12", "O16"], dtype="S4"), [1.5e-3, 2.5e-3]
    found["hdf5"] = ("t.h5", (folder / "t.h5").read_bytes(), Options())
    found["text"] = ("t.txt", b"species yield\nC12 1.5E-03\nO16 2.5E-03\n", Options())
    found["block"] = ("t.txt", b"M = 1 Z = 0.02\nspecies yield\nC12 1.5E-03\nO16 2.5E-03\n", Options())
    found["cds"] = (
        "t.dat",
        b"C12 1.5E-03\nO16 2.5E-03\n",
        Options(bytes={"species": (1, 3), "yield": (5, 11)}),
    )
    rule = b"-" * 40 + b"\n"
    found["mrt"] = (
        "t.txt",
        b"Byte-by-byte Description of file: t\n"
        + rule
        + b" Bytes Format Units Label Explanations\n"
        + rule
        + b" 1- 3 A3 --- species Name\n 5-11 E7.1 Msun yield Yield\n"
        + rule
        + b"C12 1.5E-03\nO16 2.5E-03\n",
        Options(),
    )
    return found


@pytest.mark.parametrize("format", FORMATS)
def test_mutated_files_never_break_a_reader(tmp_path, format):
    name, good, options = _samples(tmp_path)[format]
    assert len(read(lay(tmp_path, name, good), format, options)[0].rows) == 2
    random.seed(f"steelyard {format}")
    for _ in range(150):
        data = bytearray(good)
        for _ in range(random.randint(1, 6)):
            at = random.randrange(len(data) or 1)
            what = random.randrange(5)
            if what == 0 and data:
                data[at] = random.randrange(256)
            elif what == 1:
                data[at:at] = bytes(random.choices(b"\0\xff\"'<&,;#\\{}[]-9eE \n", k=random.randint(1, 8)))
            elif what == 2:
                del data[at : at + random.randint(1, 30)]
            elif what == 3:
                data = data[:at]
            else:
                data[at:at] = data[at : at + 40]
        path = lay(tmp_path, name, bytes(data))
        for given in (format, ""):
            try:
                sheets = read(path, given, options if given else None)
            except InputError as error:
                assert "\n" not in str(error)
            else:
                assert all(len(row) == len(s.columns) for s in sheets for row in s.rows)


def test_options_that_cannot_be(tmp_path):
    path = lay(tmp_path, "t.csv", b"mass,C12\n1.0,2.0\n")
    assert "did you mean csv" in refused(path, format="cvs")
    refused(path, "3 columns|2 columns", options=Options(columns=("a", "b", "c")), format="csv")
