"""`steelyard sets` and `show`: what they print is what is published."""

import json
from pathlib import Path

import numpy as np
import pytest

from steelyard.yields import load, shipped


def test_sets_json_has_the_promised_shape(run):
    found = json.loads(run("sets", "--json"))
    assert [one["id"] for one in found] == list(shipped())
    for one in found:
        assert list(one) == ["id", "kind", "masses", "metallicities", "species", "convention", "source"]
        assert one["convention"] in ("net", "total", "net and total")
        assert "doi:10." in one["source"]
        assert all(isinstance(m, float) for m in [*one["masses"], *one["metallicities"]])
    by_id = {one["id"]: one for one in found}
    # Kobayashi+ 2006: seven masses at four metallicities, total yields of 83 nuclides
    kobayashi = by_id["kobayashi-2006"]
    assert kobayashi["masses"] == [13, 15, 18, 20, 25, 30, 40]
    assert kobayashi["metallicities"] == [0, 0.001, 0.004, 0.02]
    assert len(kobayashi["species"]) == 83 and kobayashi["convention"] == "total"
    assert by_id["karakas-2010"]["convention"] == "net"
    assert by_id["doherty-2014"]["convention"] == "net and total"
    assert by_id["nomoto-1997-w7"]["masses"] == by_id["nomoto-1997-w7"]["metallicities"] == []


def test_sets_by_kind(run):
    listed = run("sets", "--kind", "agb")
    assert "karakas-2010" in listed and "MNRAS 403, 1413" in listed and "kobayashi-2006" not in listed
    assert {one["kind"] for one in json.loads(run("sets", "--kind", "agb", "--json"))} == {"agb"}


def test_every_set_can_be_shown(run):
    for one in shipped():
        text = run("show", one)
        assert load(one).checksum in text and "doi:10." in text and "…" not in text.split("checksum")[1]


def test_show_prints_published_figures(run):
    text = run("show", "kobayashi-2006", "--metallicity", "0.02", "--species", "O16,Fe56,Mg")
    # Kobayashi+ 2006, the journal's machine-readable table: 20 Msun, Z = 0.02
    row = next(line.split() for line in text.splitlines() if line.split()[:1] == ["20"])
    grid = load("kobayashi-2006")
    i = list(grid.at(0.02).mass).index(20)
    assert float(row[2]) == 1.55
    assert row[1:] == [
        *(f"{v[i]:.4g}" for v in (grid.at(0.02).ejected, grid.at(0.02).remnant, grid.at(0.02).wind)),
        f"{grid.at(0.02).rest()[i]:.4g}",
        *(f"{grid.value(s, 20, 0.02):.3e}" for s in ("O16", "Fe56", "Mg")),
    ]


def test_show_as_csv_and_json_keep_every_digit(run):
    grid = load("karakas-2010")
    lines = run("show", "karakas-2010", "--csv", "-Z", "0.02").splitlines()
    assert lines[0].split(",")[:6] == ["metallicity", "mass", "ejected", "remnant", "wind", "rest"]
    assert lines[0].split(",")[6:] == list(grid.species)
    table = np.array([[float(v) for v in line.split(",")] for line in lines[1:]])
    np.testing.assert_array_equal(table[:, 6:], grid.at(0.02).net)
    shown = json.loads(run("show", "karakas-2010", "--json", "--convention", "total"))
    assert shown["shown"] == "total" and shown["derived"] is True
    model = next(m for m in shown["models"] if (m["metallicity"], m["mass"]) == (0.02, 3.0))
    assert model["yields"]["C12"] == grid.value("C12", 3.0, 0.02, "total")
    assert model["ejected"] + model["remnant"] == pytest.approx(3.0, rel=1e-14)


def test_sets_against_each_other(run):
    text = run(
        "show",
        "kobayashi-2006",
        "--against",
        "limongi-chieffi-2018-R-v000",
        "-Z",
        "0.01",
        "--species",
        "O,Ba",
    )
    assert "Z = 0.004 and 0.02, between" in text and "kobayashi-2006 doesn't follow Ba" in text
    row = next(line.split() for line in text.splitlines() if line.split()[:1] == ["18"])
    assert row[2].endswith("~") and float(row[3]) == pytest.approx(
        np.log10(float(row[2].rstrip("~")) / float(row[1])), abs=0.006
    )
    told = json.loads(
        run("show", "karakas-2010", "--against", "marigo-2001", "-Z", "0.008", "--species", "C", "--json")
    )
    lines = run("show", "karakas-2010", "--against", "marigo-2001", "-Z", "0.008", "--species", "C", "--csv")
    rows = [line.split(",") for line in lines.splitlines()[1:]]
    values = [v for v in told["yields"]["marigo-2001"]["C"] if v is not None]
    assert [float(r[4]) for r in rows if r[2] == "marigo-2001"] == values


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (("--against", "nobody-2006", "-Z", "0.01"), "isn't known"),
        (("--against", "kobayashi-2006", "-Z", "0.01"), "each once"),
        (("--against", "nomoto-1997-w7", "-Z", "0.01"), "single events"),
        (("--against", "marigo-2001"), "at one metallicity"),
        (("--against", "marigo-2001", "-Z", "0.01", "--figure", "x.doc"), "can't be written as 'doc'"),
        (("--figure", "x.pdf"), "--against"),
    ],
)
def test_comparisons_that_can_not_be_made_are_refused(refused, arguments, says):
    assert says in refused("show", "kobayashi-2006", *arguments)


def test_coverage_of_the_sets_is_drawn(run, refused):
    assert "written: map.svg" in run("sets", "--kind", "agb", "--figure", "map.svg")
    assert "karakas-2010" in Path("map.svg").read_text()
    assert "none of the sets" in refused("sets", "--kind", "thermonuclear", "--figure", "x.pdf")
