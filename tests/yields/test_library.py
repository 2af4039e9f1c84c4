"""Shipped sets as they load: every model audits itself; damage is refused."""

import shutil
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from steelyard.yields import library, load, shipped
from steelyard.yields.errors import InputError

STARS = [s for s in shipped() if not load(s).event]
EVENTS = [s for s in shipped() if load(s).event]

#: models whose listed species miss the ejected mass by more than their own rounding, and why
SUM_EXCEPTIONS = {
    ("doherty-2014", "net", 0.0001, 7.5): "net yields sum to 1.0e-3 Msun, printed so",
    ("doherty-2014", "net", 0.008, 8.0): "net yields sum to 1.9e-4 Msun, printed so",
}


def test_what_is_shipped():
    assert len(STARS) == 11
    assert set(EVENTS) == {"nomoto-1997-w7"} | {
        f"iwamoto-1999-{m}" for m in ("W7", "W70", "WDD1", "WDD2", "WDD3", "CDD1", "CDD2")
    }
    assert {load(s).kind for s in shipped()} == {"agb", "core-collapse", "thermonuclear"}


@pytest.mark.parametrize("name", shipped())
def test_every_model_keeps_its_mass(name):
    """ejected + remnant = initial mass; neither is negative, nor is the wind, nor X0 beyond 1."""
    grid = load(name)
    assert load(name) is grid
    assert len(grid.checksum) == 64
    for one in grid.slices:
        np.testing.assert_allclose(one.ejected + one.remnant, one.mass, rtol=1e-15)
        assert np.all(one.ejected > 0)
        assert np.all(one.remnant >= 0)
        assert np.all((one.wind >= 0) & (one.wind <= one.ejected))
        assert np.all(one.initial >= 0)
        assert one.initial.sum() <= 1 + 2e-3
        if not grid.event:
            assert np.all(one.remnant > 0)


@pytest.mark.parametrize("name", STARS)
def test_net_is_total_less_what_was_there(name):
    grid = load(name)
    for one in grid.slices:
        miss = np.abs(one.total - one.net - np.outer(one.ejected, one.initial))
        if grid.derived:
            assert miss.max() <= 1e-14 * one.ejected.max()
        np.testing.assert_allclose(one.total.sum(axis=1) + one.rest(), one.ejected, rtol=1e-14)
        np.testing.assert_allclose(one.net.sum(axis=1) + one.rest("net"), 0, atol=1e-14)


def test_karakas_remnants_are_those_printed():
    """Ejected mass from the hydrogen at birth against the printed final mass, within its rounding."""
    text = files("steelyard.tables").joinpath("karakas-2010", "models.csv").read_text(encoding="utf-8")
    head, *lines = (line.split(",") for line in text.splitlines())
    grid = load("karakas-2010")
    allowed = grid.info["rounding"]["mass"]
    for line in lines:
        row = dict(zip(head, line, strict=False))
        if row["variant"] == "Reimers":
            continue
        one = grid.at(float(row["metallicity"]))
        (i,) = np.flatnonzero(np.isclose(one.mass, float(row["mass"])))
        assert one.remnant[i] == pytest.approx(float(row["remnant"]), abs=allowed)


@pytest.mark.parametrize("name", ["karakas-2010", "karakas-2010-reimers", "doherty-2014"])
def test_complete_networks_leave_no_rest_but_the_lump(name):
    """Species and the ignored lump past Ni62 are all there is: rest is small, in both conventions."""
    grid = load(name)
    for one in grid.slices:
        for convention in ("total", "net"):
            rest = one.rest(convention)
            for m, value in zip(one.mass, rest, strict=True):
                if (name, convention, one.metallicity, float(m)) not in SUM_EXCEPTIONS:
                    lump = 2e-6 if convention == "net" else 1e-5
                    rounding = 5e-4 if name == "doherty-2014" else 2e-5 + 1e-4 * m * (convention == "total")
                    assert abs(value) <= lump + rounding, (convention, one.metallicity, m, value)


def test_every_exception_is_one():
    for (name, convention, z, mass), _ in SUM_EXCEPTIONS.items():
        one = load(name).at(z)
        (i,) = np.flatnonzero(one.mass == mass)
        assert abs(one.rest(convention)[i]) > 1.8e-4


def test_kobayashi_species_are_what_the_explosion_ejects():
    """83 nuclides hold all of it: at most 0.06 Msun lie between their sum and final mass less remnant."""
    for one in load("kobayashi-2006").slices:
        miss = one.listed.sum(axis=1) - (one.ejected - one.wind)
        assert np.abs(miss).max() < 0.0605
        assert one.wind[0] < 0.3
    # without metals there is no wind driven by them
    assert not load("kobayashi-2006").at(0.0).wind.any()


@pytest.mark.parametrize("rotation", ["v000", "v150", "v300"])
def test_set_m_continues_set_r(rotation):
    r, m = (load(f"limongi-chieffi-2018-{s}-{rotation}") for s in "RM")
    for a, b in zip(r.slices, m.slices, strict=True):
        low = a.mass <= 25
        np.testing.assert_array_equal(b.mass[b.mass <= 25], a.mass[low])
        np.testing.assert_array_equal(b.net[: low.sum()], a.net[low])
        assert b.lifetime is not None
        # above, set M explodes and so ejects more than the wind of set R
        shared = [x for x in b.mass if x > 25 and x in a.mass]
        for x in shared:
            assert b.ejected[b.mass == x] > a.ejected[a.mass == x]
    assert any("up to 25 Msun are those of" in n for n in m.notes)
    assert m.checksum != r.checksum


def test_variants_differ_where_they_should():
    a, b = load("karakas-2010"), load("karakas-2010-reimers")
    differ = [
        (s.metallicity, float(m))
        for s, t in zip(a.slices, b.slices, strict=True)
        for m, x, y in zip(s.mass, s.total, t.total, strict=True)
        if not np.array_equal(x, y)
    ]
    assert differ == [(0.0001, 6.0)]
    assert a.checksum != b.checksum


def test_a_solar_mixture_of_choice():
    a, b = load("marigo-2001"), load("marigo-2001", "anders-grevesse-1989")
    assert a.at(0.008).initial[0] != b.at(0.008).initial[0]
    np.testing.assert_array_equal(a.at(0.008).net, b.at(0.008).net)


def test_unknown_sets():
    with pytest.raises(
        InputError, match="yield set 'kobayashi-2007' isn't known; did you mean kobayashi-2006"
    ):
        load("kobayashi-2007")
    with pytest.raises(InputError, match="solar mixture"):
        load("marigo-2001", "sun")


@pytest.fixture
def copy(tmp_path, monkeypatch):
    """The tables copied, so that one can be damaged."""
    folder = tmp_path / "tables"
    shutil.copytree(Path(str(files("steelyard.tables").joinpath("__init__.py"))).parent, folder)
    monkeypatch.setattr(library, "files", lambda package: folder)
    cached = [f for f in vars(library).values() if hasattr(f, "cache_clear")]
    for function in cached:
        function.cache_clear()
    yield folder
    for function in cached:
        function.cache_clear()


def test_one_altered_figure_is_refused(copy):
    path = copy / "kobayashi-2006" / "total.csv"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("E-01", "E-02", 1), encoding="utf-8")
    with pytest.raises(
        InputError, match=r"tables/kobayashi-2006/total.csv: the figures don't match their checksum"
    ):
        load("kobayashi-2006")
    assert load("marigo-2001").species == ("C", "N", "O")


def test_nan_in_a_table_is_refused_with_its_place(copy):
    import hashlib

    path = copy / "marigo-2001" / "models.csv"
    old = hashlib.sha256(path.read_bytes()).hexdigest()
    path.write_text(path.read_text(encoding="utf-8").replace("2.314E-01", "nan"), encoding="utf-8")
    about = copy / "marigo-2001" / "set.toml"
    new = hashlib.sha256(path.read_bytes()).hexdigest()
    about.write_text(about.read_text(encoding="utf-8").replace(old, new), encoding="utf-8")
    with pytest.raises(InputError, match=r"models.csv row 2 column ejected: 'nan' isn't a number"):
        load("marigo-2001")


def test_a_set_is_had_after_its_decays():
    """Be7 becomes Li7 (common practice: 53 days); what is ejected and left stays the same."""
    raw, after = load("karakas-2010"), load("karakas-2010@decayed")
    assert after.id == "karakas-2010@decayed" and after.checksum != raw.checksum
    assert not {"Be7", "Al26", "Fe60", "Ni59"} & set(after.species)
    a, b = raw.at(0.02), after.at(0.02)
    li7 = a.net[:, raw.species.index("Li7")] + a.net[:, raw.species.index("Be7")]
    np.testing.assert_allclose(b.net[:, after.species.index("Li7")], li7, rtol=1e-12)
    np.testing.assert_array_equal(a.ejected, b.ejected)


def test_decays_of_an_unknown_set_are_refused():
    with pytest.raises(InputError, match="isn't known"):
        load("karakas-2099@decayed")
