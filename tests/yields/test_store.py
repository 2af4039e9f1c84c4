"""The library: what goes in comes out, whatever else happens to it."""

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
import tomllib
import warnings
from pathlib import Path

import h5py
import numpy as np
import pytest

from steelyard.yields import InputError, load, store
from steelyard.yields.exchange import export, recognise
from steelyard.yields.layouting import parse_layout, read_sets
from steelyard.yields.library import catalogue, printed, shipped

SOLAR = "asplund-2009"
ARRAYS = ("mass", "ejected", "wind", "total", "net", "initial")

# invented figures; every kind of printed number, a lump, and a composition at birth
TABLE = """\
mass,Z,Mf,net_C12,net_O16,net_lump,initial_C12,initial_O16,initial_lump
1.00,0.02,0.550,1.5000E-03,-4.000D-04,1.0-9,3.0E-03,9.6000E-03,1E-8
2.00,0.02,0.650,9.0100E-03,\u22121.0E-02,2.0-9,3.0E-03,9.6000E-03,1E-8
2.00,0.004,0.660,9.1E-03,0.0,2.5-9,6.0E-04,1.9E-03,2E-9
"""
LAYOUT = """\
id = "invented-2026"
kind = "agb"
summary = "Invented figures."
[paper]
authors = "Nobody N."
year = 2026
reference = "none"
[model]
mass = "mass"
metallicity = "Z"
remnant = "Mf"
[yields]
net = "net_{species}"
initial = "initial_{species}"
[rest]
species = ["lump"]
why = "a lump"
"""


@pytest.fixture(autouse=True)
def home(tmp_path, monkeypatch):
    folder = tmp_path / "library"
    monkeypatch.setenv(store.VARIABLE, str(folder))
    return folder


@pytest.fixture
def reading(tmp_path):
    return make(tmp_path)


def make(folder, table=TABLE, toml=LAYOUT, id=""):
    path = folder / "invented.csv"
    path.write_text(table, encoding="utf-8")
    return read_sets([path], parse_layout(toml, "invented.toml"), id=id)[0]


def same(a, b):
    assert a.species == b.species and a.metallicities == b.metallicities and a.kind == b.kind
    for x, y in zip(a.slices, b.slices, strict=True):
        for name in ARRAYS:
            assert np.array_equal(getattr(x, name), getattr(y, name)), name


def test_kept_and_loaded(home, reading):
    path = store.keep(reading)
    assert path == home / "invented-2026.h5" and sorted(home.iterdir()) == [path]
    grid = load("invented-2026")
    same(grid, reading.grid(SOLAR))
    assert grid.value("C12", 2.0, 0.02, "net") == 9.01e-3 and grid.value("O16", 2.0, 0.02, "net") == -1e-2
    assert grid.checksum == reading.checksum
    assert store.ids() == ("invented-2026",) and "invented-2026" in catalogue()
    assert "invented-2026" not in shipped()
    entry = store.entry("invented-2026")
    assert entry.layout == LAYOUT and entry.kind == "agb"
    assert entry.sources == reading.sources and len(entry.sources[0][1]) == 64
    assert entry.created.endswith("+00:00") and entry.version[0].isdigit()


def test_printed_texts_are_kept(reading):
    store.keep(reading)
    again = store.reading("invented-2026")
    assert again.tables["net"].text[1] == ("9.0100E-03", "\u22121.0E-02", "2.0-9")
    assert again.tables["net"].figures[1].tolist() == [9.01e-3, -1e-2, 2e-9]
    info, figures = printed("invented-2026")
    assert info["ignore"]["columns"] == ["lump"]
    assert figures.yields["net"][0]["O16"] == "-4.000E-04" and figures.models[0]["mass"] == "1.00"


def test_the_mixture_for_what_is_not_printed(tmp_path):
    bare = LAYOUT.replace('initial = "initial_{species}"\n', "") + (
        '[ignore]\ncolumns = ["initial_C12", "initial_O16", "initial_lump"]\nwhy = "for the test"\n'
    )
    store.keep(make(tmp_path, toml=bare))
    a, b = (load("invented-2026", solar).at(0.02).initial[0] for solar in (SOLAR, "anders-grevesse-1989"))
    assert a > 0 and b > 0 and a != b


def test_set_with_ids_that_cannot_be(tmp_path, reading):
    for id in ("../up", "a/b", ".hidden", "a..b", "x" * 81, "con\n", "-flag", "a b"):
        with pytest.raises(InputError, match="can't be the id"):
            store.keep(reading.renamed(id))
    for id in ("karakas-2010", "karakas-2010-reimers"):
        with pytest.raises(InputError, match="ships with steelyard and isn't overwritten"):
            store.keep(reading.renamed(id), replace=True)
        with pytest.raises(InputError, match="can't be removed"):
            store.remove(id)


def test_replacing_needs_a_word_and_is_seen_at_once(tmp_path, reading):
    store.keep(reading)
    old = load("invented-2026")
    with pytest.raises(InputError, match=r"in the library already.*--replace"):
        store.keep(reading)
    changed = make(tmp_path, TABLE.replace("1.5000E-03", "1.6000E-03"))
    store.keep(changed, replace=True)
    new = load("invented-2026")
    assert (old.value("C12", 1.0, 0.02, "net"), new.value("C12", 1.0, 0.02, "net")) == (1.5e-3, 1.6e-3)
    store.remove("invented-2026")
    assert store.ids() == ()
    with pytest.raises(InputError, match="isn't known"):
        load("invented-2026")
    with pytest.raises(InputError, match="isn't in the library"):
        store.remove("invented-2026")


def test_a_library_that_is_not_there_yet(home):
    assert store.entries() == () and not home.exists()
    assert tuple(catalogue()) == shipped()


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_that_cannot_be_written(home, reading):
    home.mkdir()
    home.chmod(0o500)
    with pytest.raises(InputError, match="can't be written"):
        store.keep(reading)


def test_a_file_where_the_folder_should_be(home, reading):
    home.write_text("")
    with pytest.raises(InputError, match="can't be written"):
        store.keep(reading)


# --- files that can't be used


def _truncated(path):
    path.write_bytes(path.read_bytes()[:2000])


def _flipped(path):
    with h5py.File(path, "r+") as file:
        file["net/figures"][0, 0] = 7.0


def _other(path):
    with h5py.File(path, "w") as file:
        file["mass"] = [1.0]


def _linked(path):
    with h5py.File(path, "r+") as file:
        del file["net"]
        file["net"] = h5py.ExternalLink("elsewhere.h5", "/net")


def _renamed(path):
    shutil.copy(path, path.with_name("another.h5"))
    path.unlink()


BROKEN = {
    "empty": lambda p: p.write_bytes(b""),
    "words": lambda p: p.write_text("not HDF5"),
    "truncated": _truncated,
    "flipped": _flipped,
    "other": _other,
    "linked": _linked,
    "renamed": _renamed,
}


@pytest.mark.parametrize("how", BROKEN)
def test_a_broken_file_is_named_and_breaks_nothing_else(home, reading, how):
    store.keep(reading)
    store.keep(reading.renamed("good-2026"))
    load("invented-2026")
    BROKEN[how](home / "invented-2026.h5")
    name = "another" if how == "renamed" else "invented-2026"
    with pytest.warns(store.LibraryWarning, match=rf"{name}\.h5") as caught:
        known = catalogue()
    assert len(caught) == 1 and "\n" not in str(caught[0].message)
    assert "good-2026" in known and name not in known and set(shipped()) <= set(known)
    same(load("good-2026"), reading.grid(SOLAR))
    with pytest.raises(InputError) as error:
        load(name)
    assert "\n" not in str(error.value)
    store.remove(name)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert store.ids() == ("good-2026",)


def test_folders_and_other_files_are_left_alone(home, reading):
    store.keep(reading)
    (home / "notes.txt").write_text("mine")
    (home / "folder.h5").mkdir()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", store.LibraryWarning)
        assert store.ids() == ("invented-2026",)
    store.keep(reading.renamed("second-2026"))
    assert (home / "notes.txt").read_text() == "mine"


# --- several processes


KEEP = """
import json, pathlib, sys
from steelyard.yields import InputError, store
from steelyard.yields.layouting import parse_layout, read_sets
folder, ids, replace = pathlib.Path(sys.argv[1]), sys.argv[3].split(), sys.argv[2] == "replace"
reading, = read_sets([folder / "invented.csv"], parse_layout((folder / "l.toml").read_text(), "l"))
print("ready", flush=True)
sys.stdin.readline()
outcome = []
for id in ids:
    try:
        store.keep(reading.renamed(id.partition("@")[0]), replace=replace)
        outcome.append((id, "kept"))
    except InputError as error:
        outcome.append((id, str(error)))
print(json.dumps(outcome))
"""


def _together(folder, lists, replace):
    """Have one process a list keep its ids, all starting at once."""
    (folder / "l.toml").write_text(LAYOUT)
    (folder / "invented.csv").write_text(TABLE, encoding="utf-8")
    word = "replace" if replace else "new"
    workers = [
        subprocess.Popen(
            [sys.executable, "-c", KEEP, str(folder), word, " ".join(ids)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        for ids in lists
    ]
    for worker in workers:
        assert worker.stdout.readline() == "ready\n"
    for worker in workers:
        worker.stdin.write("go\n")
        worker.stdin.flush()
    found = []
    for worker in workers:
        out, _ = worker.communicate(timeout=60)
        assert worker.returncode == 0
        found += [tuple(one) for one in json.loads(out)]
    return found


def test_two_processes_lose_nothing(tmp_path):
    found = _together(tmp_path, [[f"a{i}" for i in range(8)], [f"b{i}" for i in range(8)]], False)
    assert all(what == "kept" for _, what in found)
    assert store.ids() == tuple(sorted(id for id, _ in found)) and len(found) == 16


def test_of_two_processes_one_gets_an_id(tmp_path):
    names = [f"s{i}" for i in range(8)]
    found = _together(tmp_path, [[f"{n}@1" for n in names], [f"{n}@2" for n in names]], False)
    for name in names:
        outcomes = sorted(what == "kept" for id, what in found if id.startswith(f"{name}@"))
        assert outcomes == [False, True]
    assert store.ids() == tuple(names)


def test_two_processes_replacing_leave_a_whole_set(tmp_path, reading):
    store.keep(reading)
    found = _together(tmp_path, [[f"invented-2026@{k}{i}" for i in range(6)] for k in "ab"], True)
    assert all(what == "kept" for _, what in found)
    same(load("invented-2026"), reading.grid(SOLAR))


KILLED = """
import os, pathlib, sys
from steelyard.yields import store
from steelyard.yields.layouting import parse_layout, read_sets
real = os.fsync
def stop(handle):
    print("half", flush=True)
    sys.stdin.read()
os.fsync = stop
folder = pathlib.Path(sys.argv[1])
reading, = read_sets([folder / "invented.csv"], parse_layout((folder / "l.toml").read_text(), "l"))
store.keep(reading)
"""


@pytest.mark.skipif(os.name != "posix", reason="kills a process with a signal")
def test_a_killed_process_leaves_nothing_half_there(tmp_path, home, reading):
    (tmp_path / "l.toml").write_text(LAYOUT)
    (tmp_path / "invented.csv").write_text(TABLE, encoding="utf-8")
    command = [sys.executable, "-c", KILLED, str(tmp_path)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout.readline() == "half\n"
        parts = list(home.iterdir())
        assert len(parts) == 1 and parts[0].suffix == ".part"
        # while it lives, nobody takes its file away
        store.keep(reading.renamed("other-2026"))
        assert parts[0].exists()
        process.send_signal(signal.SIGKILL)
        process.wait(30)
    assert store.ids() == ("other-2026",)
    store.keep(reading)
    assert store.ids() == ("invented-2026", "other-2026")
    assert not list(home.glob(".*"))


def test_old_and_foreign_leftovers(home, reading):
    home.mkdir()
    here = socket.gethostname().replace(".", "_")
    mine = home / f".x.{here}.{os.getpid()}.abcd.part"
    foreign = home / ".x.elsewhere.1.abcd.part"
    old = home / ".x.elsewhere.2.abcd.part"
    for path in (mine, foreign, old):
        path.write_bytes(b"half")
    then = time.time() - 2 * 3600
    os.utime(old, (then, then))
    store.keep(reading)
    assert mine.exists() and foreign.exists() and not old.exists()


# --- out and back


@pytest.mark.parametrize("name", ["set", "set.ecsv", "set.h5", "set.hdf5"])
@pytest.mark.parametrize("converted", [False, True])
def test_every_form_comes_back_with_the_same_figures(tmp_path, name, converted):
    toml = LAYOUT
    if converted:
        toml = toml.replace('"net_{species}"', '{ column = "net_{species}", unit = "g" }')
        toml = toml.replace('metallicity = "Z"', 'metallicity = { field = "Z", scale = "Z/Zsun" }')
    reading = make(tmp_path, toml=toml)
    store.keep(reading)
    path = export(store.reading("invented-2026"), tmp_path / name)
    again = recognise(path)
    same(again.grid(SOLAR), reading.grid(SOLAR))
    assert again.id == "invented-2026" and again.info["paper"] == reading.info["paper"]
    assert again.info["ignore"] == reading.info["ignore"]
    store.keep(again.renamed("again-2026"))
    same(load("again-2026"), reading.grid(SOLAR))


@pytest.mark.parametrize("name", ["set", "set.h5"])
def test_printed_digits_survive(tmp_path, reading, name):
    again = recognise(export(reading, tmp_path / name))
    rows = again.rows("net")
    assert [r["C12"] for r in rows] == ["1.5000E-03", "9.0100E-03", "9.1E-03"]
    assert again.rows("models")[0] == {"metallicity": "0.02", "mass": "1.00", "remnant": "0.550"}


@pytest.mark.parametrize("id", ["karakas-2010", "kobayashi-2006", "doherty-2014"])
def test_raw_texts_come_back_in_every_form(tmp_path, raw, id):
    file = next(raw.glob(f"{id[:6]}*"))
    (reading,) = read_sets([file], id, id=f"{id}-copy")
    grid = reading.grid(SOLAR)
    for name in ("set", "set.ecsv", "set.h5"):
        same(recognise(export(reading, tmp_path / name)).grid(SOLAR), grid)


def test_a_folder_is_laid_out_as_the_shipped_ones(tmp_path, reading):
    path = export(reading, tmp_path / "set")
    assert sorted(p.name for p in path.iterdir()) == ["initial.csv", "models.csv", "net.csv", "set.toml"]
    info = tomllib.loads((path / "set.toml").read_text(encoding="utf-8"))
    assert info["id"] == "invented-2026" and set(info["checksums"]) == {
        "initial.csv",
        "models.csv",
        "net.csv",
    }
    assert (path / "net.csv").read_text().splitlines()[1] == "0.02,1.00,1.5000E-03,-4.000E-04,1.0E-9"


@pytest.mark.parametrize("id", ["karakas-2010", "limongi-chieffi-2018-R-v000", "marigo-2001"])
def test_shipped_folders_are_read_as_exports(tmp_path, id):
    import steelyard.tables

    folder = Path(next(iter(steelyard.tables.__path__))) / id
    if id == "karakas-2010":
        with pytest.raises(InputError, match="several sets"):
            recognise(folder)
        return
    same(recognise(folder).grid(SOLAR), load(id))


def test_exports_overwrite_nothing(tmp_path, reading):
    for name in ("set", "set.ecsv", "set.h5"):
        export(reading, tmp_path / name)
        with pytest.raises(InputError, match="exists already"):
            export(reading, tmp_path / name)
    with pytest.raises(InputError, match="can't be written"):
        export(reading, tmp_path / "none" / "set")
    with pytest.raises(InputError, match="did you mean ecsv"):
        export(reading, tmp_path / "new", "ecvs")
    assert not [p for p in tmp_path.iterdir() if p.name.endswith(".part")]


def test_damaged_exports(tmp_path, reading):
    folder = export(reading, tmp_path / "set")
    (folder / "net.csv").write_text((folder / "net.csv").read_text().replace("1.5000E-03", "1.6000E-03"))
    with pytest.raises(InputError, match=r"net\.csv: the figures don't match"):
        recognise(folder)
    (folder / "set.toml").write_text('id = "x"')
    with pytest.raises(InputError, match="kind is missing"):
        recognise(folder)
    file = export(reading, tmp_path / "set.h5")
    file.write_bytes(file.read_bytes()[:-3000])
    with pytest.raises(InputError, match=r"set\.h5"):
        recognise(file)
