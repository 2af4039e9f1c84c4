"""Layouts: what they may say, what is read by them, and what a guess makes of a table."""

import math
import tomllib

import numpy as np
import pytest

from steelyard.yields import InputError, load, mixture
from steelyard.yields.layouting import layout, parse_layout, read_sets, shipped_layouts
from steelyard.yields.layouting.guess import guess
from steelyard.yields.layouting.template import Template
from steelyard.yields.readers import is_figure

SOLAR = "asplund-2009"

RAW = {
    "kobayashi-2006": ("kobayashi-2006-table.txt", (0.0, 0.001, 0.004, 0.02), 28),
    "karakas-2010": ("karakas-2010-table-a2.txt", (0.02,), 16),
    "doherty-2014": ("doherty-2014a-table1.txt", (0.004, 0.008, 0.02), 14),
}
ARRAYS = ("mass", "ejected", "wind", "total", "net", "initial")

# Kobayashi et al. 2006, ApJ 653, 1145, machine-readable table: some rows of two metallicities, three models
KOBAYASHI = """\
# Title: Galactic chemical evolution: Carbon through Zinc
# Table: The nucleosynthesis yields for the Type II Supernovae in the ejecta
# ================================================================================
# Byte-by-byte Description of file: datafile1.txt
# --------------------------------------------------------------------------------
#    Bytes Format Units   Label   Explanations
# --------------------------------------------------------------------------------
#    1-  5 F5.3   ---     Z       Metallicity
#    7- 14 A8     ---     Element Element model output (1)
#   16- 24 E9.2   solMass P13     The 13 solar mass progenitor model (2)
#   26- 34 E9.2   solMass P15     The 15 solar mass progenitor model (2)
#   36- 44 E9.2   solMass P18     The 18 solar mass progenitor model (2)
# --------------------------------------------------------------------------------
0.    M_final_ 13.00E+00 15.00E+00 18.00E+00
0.    M_cut_    1.57E+00  1.48E+00  1.65E+00
0.    p         6.60E+00  7.58E+00  8.43E+00
0.    d         1.49E-16  1.69E-16  1.28E-16
0.    ^12^C     7.41E-02  1.72E-01  2.19E-01
0.    ^16^O     4.50E-01  7.73E-01  1.38E+00
"""

# Karakas 2010, MNRAS 403, 1413, table A2: some rows of two models
KARAKAS = """\
# Minitial =  1.00 msun, Z = 0.0200, Mfinal = 0.564 msun\r
  species    A      yield       mass(i)_lost    mass(i)_0        <X(i)>          X0(i)   log10(<X(i)>/X0(i)) \r
      g      1   8.1815390E-09  3.2919932E-08  2.4738393E-08  7.5504431E-08  5.6745975E-08  1.2403737E-01\r
      p      1  -8.1048310E-03  2.9179156E-01  2.9989639E-01  6.6924673E-01  6.8791503E-01 -1.1948545E-02\r
    he4      4   7.9379827E-03  1.3571687E-01  1.2777889E-01  3.1127724E-01  2.9310462E-01  2.6124727E-02\r
    c12     12  -1.7504650E-04  1.1481456E-03  1.3231921E-03  2.6333616E-03  3.0351942E-03 -6.1675999E-02\r
   al-6     26   3.5967269E-12  3.5967269E-12  0.0000000E+00  8.2493734E-12  0.0000000E+00  0.0000000E+00\r
   al*6     26   0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00\r
# Minitial =  1.25 msun, Z = 0.0200, Mfinal = 0.574 msun\r
  species    A      yield       mass(i)_lost    mass(i)_0        <X(i)>          X0(i)   log10(<X(i)>/X0(i)) \r
      g      1   2.7327989E-08  6.5684702E-08  3.8356713E-08  9.7166719E-08  5.6745975E-08  2.3358248E-01\r
      p      1  -1.2294143E-02  4.5269319E-01  4.6498734E-01  6.6966450E-01  6.8791503E-01 -1.1677519E-02\r
    he4      4   1.1981189E-02  2.1010150E-01  1.9812031E-01  3.1080103E-01  2.9310462E-01  2.5459763E-02\r
    c12     12  -4.6293531E-04  1.5886654E-03  2.0516007E-03  2.3500968E-03  3.0351942E-03 -1.1110076E-01\r
   al-6     26   2.8757303E-13  2.8757303E-13  0.0000000E+00  4.2540388E-13  0.0000000E+00  0.0000000E+00\r
   al*6     26   0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00  0.0000000E+00\r
"""

# Doherty et al. 2014, MNRAS 437, 195, online table: some rows of two models
DOHERTY = """\
                            7.0M Z=0.02 VW93
Species    Yield      MassExp     ProdFact    E-Yield    E-MassExp  E-ProdFact  
      p   -4.832E-01  3.770E+00  -5.240E-02  -4.927E-01  3.760E+00  -5.350E-02
    he4    4.687E-01  2.128E+00   1.080E-01   4.736E-01  2.133E+00   1.090E-01
    c12   -1.386E-02  6.763E-03  -4.843E-01  -9.659E-03  1.096E-02  -2.744E-01
      g    7.244E-07  1.076E-06   4.861E-01   1.111E-06  1.462E-06   6.193E-01
\t\t\t    7.5M Z=0.02 VW93 
Species    Yield      MassExp     ProdFact    E-Yield    E-MassExp  E-ProdFact 
      p   -5.584E-01  4.017E+00  -5.655E-02  -5.682E-01  4.007E+00  -5.761E-02
    he4    5.446E-01  2.329E+00   1.156E-01   5.492E-01  2.334E+00   1.165E-01
    c12   -1.481E-02  7.379E-03  -4.781E-01  -9.928E-03  1.226E-02  -2.577E-01
      g    9.699E-07  1.348E-06   5.523E-01   1.355E-06  1.733E-06   6.615E-01
"""  # fmt: skip


def lay(folder, text, name="t.txt"):
    path = folder / name
    path.write_bytes(text.encode())
    return path


def one(path, by, **more):
    (found,) = read_sets([path] if not isinstance(path, list) else path, by, **more)
    return found


def made(folder, table, toml, name="t.csv"):
    """The grid of an invented table."""
    return one(lay(folder, table, name), parse_layout(f'id = "invented"\n{toml}', "mine.toml")).grid(SOLAR)


def refused(folder, table, toml, match, name="t.csv"):
    with pytest.raises(InputError, match=match) as caught:
        made(folder, table, toml, name)
    assert "\n" not in str(caught.value)


def same_as_shipped(grid, shipped, species=None, arrays=ARRAYS):
    """Every figure of a grid equals the shipped one, bit for bit."""
    columns = [grid.species.index(s) for s in shipped.species if s in grid.species]
    theirs = [i for i, s in enumerate(shipped.species) if s in grid.species]
    assert columns
    for ours in grid.slices:
        other = shipped.at(ours.metallicity)
        rows = np.isin(other.mass, ours.mass)
        assert rows.sum() == len(ours.mass)
        for name in arrays:
            a, b = getattr(ours, name), getattr(other, name)
            if name == "initial":
                a, b = a[columns], b[theirs]
            elif a.ndim == 2:
                a, b = a[:, columns], b[rows][:, theirs]
            else:
                b = b[rows]
            assert np.array_equal(a, b), name


@pytest.mark.parametrize("id", RAW)
def test_raw_texts_equal_the_shipped_sets(raw, id):
    file, metallicities, models = RAW[id]
    grid = one(raw / file, id).grid(SOLAR)
    assert grid.species == load(id).species
    assert grid.metallicities == metallicities and sum(len(s.mass) for s in grid.slices) == models
    same_as_shipped(grid, load(id))


@pytest.mark.parametrize("id", RAW)
def test_a_guess_reads_the_raw_texts_as_they_are(raw, id):
    file, metallicities, models = RAW[id]
    proposed = parse_layout(guess(raw / file), "guess")
    grid = one(raw / file, proposed).grid(SOLAR)
    assert grid.kind == load(id).kind
    assert set(load(id).species) <= set(grid.species)
    assert grid.metallicities == metallicities and sum(len(s.mass) for s in grid.slices) == models
    # without a word on the composition at birth, winds of the first set are another mixture's
    arrays = ("mass", "ejected", "wind") if id == "kobayashi-2006" else ARRAYS
    same_as_shipped(grid, load(id), arrays=arrays)
    if id == "kobayashi-2006":
        # total less the wind at birth composition loses the last bits
        for ours in grid.slices:
            assert ours.listed == pytest.approx(load(id).at(ours.metallicity).listed, rel=1e-9, abs=1e-13)


@pytest.mark.parametrize(
    ("id", "text"), [("kobayashi-2006", KOBAYASHI), ("karakas-2010", KARAKAS), ("doherty-2014", DOHERTY)]
)
def test_excerpts_equal_the_shipped_sets(tmp_path, id, text):
    grid = one(lay(tmp_path, text), id).grid(SOLAR)
    # a sum of the expelled masses needs all rows
    arrays = ("mass", "net") if id == "doherty-2014" else ARRAYS
    same_as_shipped(grid, load(id), arrays=arrays)
    again = one(lay(tmp_path, text), parse_layout(guess(tmp_path / "t.txt"), "guess")).grid(SOLAR)
    for a, b in zip(grid.slices, again.slices, strict=True):
        assert np.array_equal(a.ejected, b.ejected)


def cds_line(m0, z0, m1, species, a, numbers):
    line = f"{m0:<4} {z0:<6} {m1:<5}".ljust(21) + species.rjust(4)
    line = line.ljust(30) + a.rjust(2)
    line = line.ljust(34)
    return line + " ".join(n.rjust(14) for n in numbers)


def cds_file(text, z="0.0200"):
    """The rows of block text in the bytes of CDS J/MNRAS/403/1413."""
    lines, head = [], None
    for line in text.splitlines():
        cells = line.split()
        if cells[0] == "#":
            head = (f"{float(cells[3]):.2f}", z, cells[-2])
        elif len(cells) == 8 and cells[1].isdigit():
            lines.append(cds_line(*head, cells[0], cells[1], cells[2:]))
    return "\n".join(lines) + "\n"


def test_cds_tables_of_karakas_2010(tmp_path):
    line = cds_file(KARAKAS).splitlines()[1]
    places = layout("cds-j-mnras-403-1413").options.bytes
    assert {k: line[a - 1 : b].strip() for k, (a, b) in places.items()} == {
        "M0": "1.00", "Z0": "0.0200", "M1": "0.564", "Species": "p", "A": "1", "Yield": "-8.1048310E-03",
        "Mlost": "2.9179156E-01", "M0i": "2.9989639E-01", "X": "6.6924673E-01", "X0": "6.8791503E-01",
        "logf": "-1.1948545E-02",
    }  # fmt: skip
    first = lay(tmp_path, cds_file(KARAKAS), "tablea2.dat")
    grid = one(first, "cds-j-mnras-403-1413").grid(SOLAR)
    assert grid.id == "karakas-2010-cds"
    same_as_shipped(grid, load("karakas-2010"))
    # the models of A6 become a set of their own, those of A5 another slice
    low = lay(tmp_path, cds_file(KARAKAS, "0.0001"), "tablea5.dat")
    other = lay(tmp_path, cds_file(KARAKAS), "tablea6.dat")
    sets = read_sets([first, low, other], "cds-j-mnras-403-1413")
    assert [s.id for s in sets] == ["karakas-2010-cds", "karakas-2010-cds-a6"]
    assert [len(s.grid(SOLAR).slices) for s in sets] == [2, 1]


def test_shipped_layouts_are_complete():
    assert {"wide", "long", "transposed", "block", "cds-j-mnras-403-1413", *RAW} <= set(shipped_layouts())
    for name in shipped_layouts():
        assert layout(name).kind in ("agb", "core-collapse")


# one invented pair of models in every shape: 1 and 2 Msun at Z = 0.02
WIDE = "mass,Z,remnant,C12,O16\n1.0,0.02,0.55,1.5E-03,4.0E-03\n2.0,0.02,0.65,9.0E-03,1.0E-02\n"
SHAPES = {
    "wide": ("t.csv", WIDE),
    "long": (
        "t.txt",
        "mass Z remnant species yield\n1.0 0.02 0.55 c12 1.5E-03\n1.0 0.02 0.55 o16 4.0E-03\n"
        "2.0 0.02 0.65 c12 9.0E-03\n2.0 0.02 0.65 o16 1.0E-02\n",
    ),
    "transposed": (
        "t.txt",
        "Z species M1.0 M2.0\n0.02 remnant 0.55 0.65\n0.02 ^12^C 1.5E-03 9.0E-03\n0.02 ^16^O 4.0E-03 1.0E-02\n",
    ),
    "block": (
        "t.txt",
        "M = 1.0 Z = 0.02 Mrem = 0.55\nspecies yield\nC12 1.5E-03\nO16 4.0E-03\n"
        "M = 2.0 Z = 0.02 Mrem = 0.65\nC12 9.0E-03\nO16 1.0E-02\n",
    ),
}


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("guessed", [False, True])
def test_every_shape_gives_the_same_set(tmp_path, shape, guessed):
    name, text = SHAPES[shape]
    path = lay(tmp_path, text, name)
    by = parse_layout(guess(path), "guess") if guessed else shape
    grid = one(path, by, id="invented").grid(SOLAR)
    (part,) = grid.slices
    assert grid.species == ("C12", "O16") and part.metallicity == 0.02
    assert part.mass.tolist() == [1.0, 2.0] and part.remnant == pytest.approx([0.55, 0.65])
    assert part.total.tolist() == [[1.5e-3, 4.0e-3], [9.0e-3, 1.0e-2]]


MODEL = 'kind = "agb"\n[model]\nmass = "mass"\nmetallicity = "Z"\nremnant = "remnant"\n'


def test_mass_fractions_of_the_ejecta(tmp_path):
    grid = made(tmp_path, WIDE, MODEL + '[yields]\nmass_fraction = "{species}"\n')
    assert grid.value("C12", 2.0, 0.02) == pytest.approx(9.0e-3 * (2.0 - 0.65))
    assert "total" not in grid.derived


def test_fractions_of_the_initial_mass(tmp_path):
    toml = MODEL + '[yields]\nnet = { column = "{species}", per_initial_mass = true }\n'
    assert made(tmp_path, WIDE, toml).value("C12", 2.0, 0.02, "net") == pytest.approx(2 * 9.0e-3)


def test_logarithms(tmp_path):
    table = "mass,Z,remnant,C12\n1.0,0.02,0.55,-2.5\n"
    toml = MODEL + '[yields]\ntotal = { column = "{species}", log10 = true }\n'
    assert made(tmp_path, table, toml).value("C12", 1.0, 0.02) == pytest.approx(10**-2.5)


def test_production_factors(tmp_path):
    # Karakas 2010, 1 Msun, Z = 0.02: log10(<X>/X0), X0 and the mass lost in the wind, which must come out;
    # the remnant is printed to three digits
    table = "M Z Mf species logf X0\n1.00 0.02 0.564 c12 -6.1675999E-02 3.0351942E-03\n1.00 0.02 0.564 he4 2.6124727E-02 2.9310462E-01\n"
    toml = (
        'kind = "agb"\n[model]\nmass = "M"\nmetallicity = "Z"\nremnant = "Mf"\n'
        '[yields]\nspecies = "species"\ninitial = "X0"\nproduction_factor = { column = "logf", log10 = true }\n'
    )
    grid = made(tmp_path, table, toml, "t.txt")
    assert grid.value("C12", 1.0, 0.02) == pytest.approx(1.1481456e-03, rel=2e-3)
    assert grid.value("He4", 1.0, 0.02) == pytest.approx(1.3571687e-01, rel=2e-3)


@pytest.mark.parametrize(
    ("unit", "msun"),
    [("g", 1 / 1.98841e33), ("kg", 1 / 1.98841e30), ("solMass", 1.0), ("M_earth", 3.0035e-6), ("Msun", 1.0)],
)
def test_units_of_mass(tmp_path, unit, msun):
    # solar mass and Earth mass: IAU 2015 nominal values over CODATA 2018 G; from memory
    toml = MODEL + f'[yields]\ntotal = {{ column = "{{species}}", unit = "{unit}" }}\n'
    if unit == "M_earth":
        refused(tmp_path, WIDE, toml, "unit")
        return
    assert made(tmp_path, WIDE, toml).value("O16", 2.0, 0.02) == pytest.approx(1.0e-2 * msun, rel=1e-4)


def test_units_that_the_file_declares(tmp_path):
    table = KOBAYASHI.replace("solMass P1", "g       P1")
    grid = one(lay(tmp_path, table), "kobayashi-2006").grid(SOLAR)
    printed = grid.slices[0].total[0, grid.species.index("O16")]
    assert printed == pytest.approx(0.45 / 1.98841e33, rel=1e-4)


def test_a_unit_of_the_wrong_dimension_is_refused(tmp_path):
    toml = MODEL + '[yields]\ntotal = { column = "{species}", unit = "yr" }\n'
    refused(tmp_path, WIDE, toml, "wrong dimension")


@pytest.mark.parametrize(
    ("scale", "printed", "z"), [("Z/Zsun", "0.5", 0.0067), ("[Fe/H]", "-1.0", 0.00134), ("Z", "0.02", 0.02)]
)
def test_scales_of_metallicity(tmp_path, scale, printed, z):
    # Asplund et al. 2009: Z of the Sun is 0.0134
    assert mixture(SOLAR).Z == 0.0134
    table = WIDE.replace("0.02", printed)
    toml = MODEL.replace('"Z"', f'{{ field = "Z", scale = "{scale}" }}') + '[yields]\ntotal = "{species}"\n'
    assert made(tmp_path, table, toml).metallicities == (pytest.approx(z, rel=1e-12),)
    if scale != "Z":
        toml = toml.replace(f'"{scale}"', f'"{scale}", solar = 0.02')
        assert made(tmp_path, table, toml).metallicities == (pytest.approx(z * 0.02 / 0.0134),)


def test_a_metallicity_that_is_none(tmp_path):
    refused(
        tmp_path, WIDE.replace("0.02", "1.0"), MODEL + '[yields]\ntotal = "{species}"\n', "no mass fraction"
    )
    refused(tmp_path, WIDE.replace("0.02", "-1.0"), MODEL + '[yields]\ntotal = "{species}"\n', r"Fe/H")


def test_winds_lifetimes_and_sums_of_columns(tmp_path):
    table = "M Z Mrem Mwind t C12_sn C12_wind\n20 0.02 1.6 5.0 8.1 0.2 0.01\n25 0.02 1.9 9.0 6.7 0.3 0.03\n"
    toml = (
        'kind = "core-collapse"\n[model]\nmass = "M"\nmetallicity = "Z"\nremnant = "Mrem"\nwind = "Mwind"\n'
        'lifetime = { field = "t", unit = "Myr" }\n[yields]\ntotal = "{species}_sn"\n'
        '[ignore]\ncolumns = ["C12_wind"]\nwhy = "for the test"\n'
    )
    part = made(tmp_path, table, toml, "t.txt").slices[0]
    assert part.wind == pytest.approx([5.0, 9.0]) and part.lifetime == pytest.approx([8.1e6, 6.7e6])
    assert part.listed[:, 0] == pytest.approx([0.2, 0.3])
    toml = toml.replace('"{species}_sn"', '{ column = ["{species}_sn", "{species}_wind"] }').partition(
        "[ignore]"
    )[0]
    toml = toml.replace('wind = "Mwind"\n', "")
    part = made(tmp_path, table, toml, "t.txt").slices[0]
    assert part.total[:, 0] == pytest.approx([0.21, 0.33]) and not part.wind.any()


def test_models_of_one_event(tmp_path):
    # Iwamoto et al. 1999, ApJS 125, 439, table 3: 12C and 56Fe of two models, Msun
    table = "species W7 WDD1\n12C 4.83E-02 5.42E-03\n56Fe 6.26E-01 5.87E-01\n"
    toml = (
        'kind = "thermonuclear"\n[model]\nvariant = "label"\n[yields]\nspecies = "species"\ntotal = "W{label}"\n'
        '[variants]\ndefault = "7"\n[variants.ids]\ninvented-WDD1 = "DD1"\n'
    )
    sets = read_sets([lay(tmp_path, table)], parse_layout(f'id = "invented"\n{toml}', "m"))
    grids = [s.grid(SOLAR) for s in sets]
    assert [g.id for g in grids] == ["invented", "invented-WDD1"] and all(g.event for g in grids)
    assert [g.slices[0].total[0, 1] for g in grids] == [0.626, 0.587]
    assert grids[1].slices[0].ejected[0] == pytest.approx(0.587 + 0.00542)


def test_remnants_from_another_file(tmp_path):
    yields = lay(tmp_path, "mass,Z,C12\n1.0,0.02,1.5E-03\n2.0,0.02,9.0E-03\n", "y.csv")
    models = lay(tmp_path, "mass Z remnant\n1 0.0200 0.55\n2 0.0200 0.65\n3 0.0200 0.7\n", "m.txt")
    by = parse_layout('id = "i"\n' + MODEL + '[yields]\ntotal = "{species}"\n', "mine.toml")
    assert one([yields, models], by).grid(SOLAR).slices[0].remnant == pytest.approx([0.55, 0.65])
    with pytest.raises(InputError, match="no remnant for the model of 1"):
        read_sets([yields], by)


def test_two_blocks_of_one_model_are_refused_unless_told_apart(tmp_path):
    twice = DOHERTY + DOHERTY[: DOHERTY.index("\t")].replace("7.0M", "7.5M")
    with pytest.raises(InputError, match=r"given twice for the model of 7.5 Msun.*variant"):
        read_sets([lay(tmp_path, twice)], "doherty-2014")
    one(lay(tmp_path, twice[: len(DOHERTY)] + twice[len(DOHERTY) :].replace("VW93", "B95")), "doherty-2014")


def test_dropped_models(tmp_path):
    toml = (
        MODEL + '[yields]\ntotal = "{species}"\n[[drop]]\nwhere = { mass = 2, Z = 0.020 }\nwhy = "invented"\n'
    )
    reading = one(lay(tmp_path, WIDE, "t.csv"), parse_layout(f'id = "i"\n{toml}', "m"))
    assert reading.grid(SOLAR).masses == (1.0,) and not reading.warnings
    assert reading.info["figures"]["dropped"] == ["mass = 2, Z = 0.02: invented"]
    reading = one(tmp_path / "t.csv", parse_layout(f'id = "i"\n{toml.replace("mass = 2", "mass = 9")}', "m"))
    assert reading.warnings == ("nothing to drop for mass = 9, Z = 0.02",)
    refused(tmp_path, WIDE, toml.replace("{ mass", "{ mas"), "no field 'mas'.*did you mean mass")


def test_renamed_rested_and_ignored_species(tmp_path):
    table = WIDE.replace("C12", "carbon").replace("O16", "lump").replace("remnant", "remnant,sum")
    table = table.replace(",0.55", ",0.55,9").replace(",0.65", ",0.65,9")
    toml = MODEL + '[yields]\ntotal = "{species}"\n'
    refused(tmp_path, table, toml, r"column (sum|carbon).*isn't known.*\[rest\], \[ignore\] or \[rename\]")
    toml += '[rename]\ncarbon = "C"\n[rest]\nspecies = ["lump"]\nwhy = "w"\n[ignore]\ncolumns = ["sum"]\nwhy = "w"\n'
    grid = made(tmp_path, table, toml)
    assert grid.species == ("C",) and grid.follows_elements
    assert grid.info["ignore"] == {"columns": ["lump"], "why": "w"}


def test_blanks_are_not_zero_unless_said(tmp_path):
    table = WIDE.replace("9.0E-03", "...")
    toml = MODEL + '[yields]\ntotal = "{species}"\n'
    refused(tmp_path, table, toml, r"no total yield of C12 for the model of 2\.0 Msun")
    reading = one(lay(tmp_path, table, "t.csv"), parse_layout('id = "i"\nblank = "zero"\n' + toml, "m"))
    assert reading.grid(SOLAR).value("C12", 2.0, 0.02) == 0.0
    assert reading.warnings == ("1 blank cells of total are taken as zero, as the layout says",)


def test_an_odd_composition_at_birth_is_named(tmp_path):
    odd = KARAKAS.replace(
        "4.6498734E-01  6.6966450E-01  6.8791503E-01", "4.6498734E-01  6.6966450E-01  6.9E-01"
    )
    odd += KARAKAS.replace("1.00", "1.50").partition("# Minitial =  1.25")[0]
    reading = one(lay(tmp_path, odd), "karakas-2010")
    assert reading.warnings == (
        "the model of 1.25 Msun, Z = 0.0200 starts from H1 6.9E-01, its siblings from 6.8791503E-01, which is used",
    )


@pytest.mark.parametrize(
    ("table", "match"),
    [
        (WIDE.replace("9.0E-03", "9.0X-03"), r"t\.csv line 3 column C12: '9\.0X-03' isn't a number"),
        (WIDE.replace("0.65", "heavy"), r"t\.csv line 3: remnant 'heavy' isn't a number"),
        (WIDE.replace("2.0,", ","), r"t\.csv line 3: no mass in column 'mass'"),
        (WIDE.replace("remnant", "remnnt"), r"remnnt"),
        (WIDE.replace("mass", "masss"), r"column masss.*isn't known"),
        (WIDE.replace("2.0,", "1.0,"), r"t\.csv line 3: remnant of one model is 0\.65, and 0\.55 before"),
        (WIDE.replace("2.0,", "-2.0,"), "mass isn't positive"),
        (WIDE.replace("2.0,0.02", "2.0,0.7"), "metallicity 0.7 is no mass fraction"),
    ],
)
def test_errors_name_file_line_column_and_mend(tmp_path, table, match):
    refused(tmp_path, table, MODEL + '[yields]\ntotal = "{species}"\n', match)


GOOD = MODEL + '[yields]\ntotal = "{species}"\n'


@pytest.mark.parametrize(
    ("toml", "match"),
    [
        (GOOD + "[reed]\n", r"key 'reed' isn't known; did you mean (read|rest)"),
        (
            GOOD.replace("remnant =", "remnent ="),
            r"\[model\]: key 'remnent' isn't known; did you mean remnant\?",
        ),
        (GOOD.replace("total", "totl"), "did you mean total"),
        (GOOD.replace('"remnant"', '{ feld = "x" }'), "did you mean field"),
        (GOOD.replace('"remnant"', '{ field = "x", row = "y" }'), "one of field, row and constant"),
        (
            GOOD.replace('remnant = "remnant"\n', "").replace("total", "net"),
            "ejected mass of a model can't be had",
        ),
        (GOOD.replace('metallicity = "Z"\n', ""), "metallicity is missing"),
        (GOOD.replace('kind = "agb"\n', ""), "kind is missing"),
        (GOOD.replace("{species}", "C12"), "where species stand isn't said"),
        (GOOD.partition("[yields]")[0], "no column of yields"),
        (GOOD + 'mass_fraction = "X_{species}"\n', "given twice"),
        (GOOD.replace("total =", "production_factor ="), "need the composition at birth"),
        ('covers = "explosion"\n' + GOOD, "needs the mass before it"),
        ('ejected = "guessed"\n' + GOOD, "'guessed' isn't known"),
        ('blank = "one"\n' + GOOD, "known: refuse, zero"),
        (GOOD + '[read]\nformat = "xls"\n', "isn't known"),
        (GOOD + "[read]\nbytes = { a = [5, 4] }\n", r"aren't \[first, last\]"),
        (GOOD + "[read]\nskip = -1\n", "no number of lines"),
        (GOOD + '[read]\nreadme = "../../etc/passwd"\n', "isn't beside the data"),
        (GOOD + '[rest]\nspecies = ["g"]\n', "doesn't say why"),
        (GOOD + "[rest]\nspecies = [1]\nwhy = 'w'\n", "isn't text"),
        (GOOD + "[[drop]]\nwhere = { mass = 1 }\n", "and why"),
        (GOOD + '[birth]\nmixture = "asplund-2008"\n', "did you mean asplund-2009"),
        (GOOD + '[paper]\nauthors = "A"\nyear = 2026\n', "reference is missing"),
        (GOOD.replace("{species}", "{a}{b}"), "two gaps touch"),
        (GOOD.replace("{species}", "{a b}"), "can't be read"),
        (GOOD.replace("{species}", "{a} {b} {c} {d} {e} {f} {g} {h} {i}"), "more than 8 gaps"),
        (GOOD.replace('"{species}"', "[]"), "isn't a table"),
        (GOOD.replace('"{species}"', "3"), "isn't a table"),
        ("x = " + "[" * 100_000, "can't be read as TOML"),
        ("x = {", "can't be read as TOML"),
    ],
)
def test_layouts_that_cannot_be_used(toml, match):
    with pytest.raises(InputError, match=match) as caught:
        parse_layout(toml, "mine.toml")
    assert "\n" not in str(caught.value) and len(str(caught.value)) < 400


def test_layouts_by_name_and_by_file(tmp_path):
    with pytest.raises(InputError, match="did you mean kobayashi-2006"):
        layout("kobayashi-2005")
    path = lay(tmp_path, GOOD, "mine.toml")
    assert layout(path).name == "mine.toml"
    with pytest.raises(InputError, match="No such file"):
        layout(tmp_path / "none.toml")


@pytest.mark.parametrize(
    ("pattern", "text", "found"),
    [
        ("P{mass}", "P13", {"mass": "13"}),
        ("P{mass}", "Ptotal", None),
        ("M={mass}, Z={metallicity}{}", "m = 1.5 ,Z= 1E-4 and more", None),
        (
            "M = {mass}, Z = {metallicity}{}",
            "m = 1.5, Z = 1E-4 and more",
            {"mass": "1.5", "metallicity": "1E-4"},
        ),
        ("{}tablea{table}.dat", "J_MNRAS_tablea2.dat", {"table": "2"}),
        ("y({species})", "y(C12)", {"species": "C12"}),
        ("M {mass}", "M \u22121.5", {"mass": "\u22121.5"}),
    ],
)
def test_patterns(pattern, text, found):
    assert Template(pattern).match(text) == found


def test_patterns_end_on_long_lines():
    assert Template("{}a{}a{b}a{c}a{d}a{e}a{f}a{g}!").match("a" * 100_000) is None


def test_guesses_are_toml_with_every_line_explained_or_plain(tmp_path):
    text = guess(lay(tmp_path, KARAKAS))
    parsed = tomllib.loads(text)
    assert (
        parsed["yields"]
        == {"species": "species", "net": "yield"}
        | ({"initial": "X0(i)"} if "initial" in parsed["yields"] else {})
        or parsed["yields"]["net"] == "yield"
    )
    assert parsed["rest"]["species"] == ["g"]


@pytest.mark.parametrize(
    ("table", "convention"),
    [
        ("mass,Z,remnant,C12,O16\n1.0,0.02,0.55,-1.5E-03,4.0E-03\n", "net"),
        ("mass,Z,remnant,C12,O16\n1.0,0.02,0.55,1.5E-03,4.0E-03\n", "total"),
        ("mass,Z,remnant,H1,O16\n1.0,0.02,0.55,0.7,0.3\n3.0,0.02,0.55,0.6,0.4\n", "mass_fraction"),
    ],
)
def test_conventions_are_guessed_from_signs_and_sums(tmp_path, table, convention):
    assert tomllib.loads(guess(lay(tmp_path, table, "t.csv")))["yields"] == {convention: "{species}"}


def test_nothing_to_guess(tmp_path):
    with pytest.raises(InputError, match="neither a column of species"):
        guess(lay(tmp_path, "left,right\n1,2\n", "t.csv"))
    with pytest.raises(InputError, match="can't tell mass and metallicity in the heading"):
        guess(lay(tmp_path, "chapter 7 of 9\nspecies yield\nC12 1.0\nO16 2.0\n"))


def test_a_large_table(tmp_path):
    # 400 models of 60 elements, invented
    rng = np.random.default_rng(1)
    names = ["H", "He", "C", "N", "O", "Mg", "Si", "S", "Ca", "Fe"]
    lines = ["mass,Z,remnant," + ",".join(names)]
    for z in (0.001, 0.004, 0.008, 0.02):
        for m in np.linspace(1, 7, 100):
            lines.append(f"{m:.4f},{z},0.6," + ",".join(f"{v:.7E}" for v in rng.random(10)))
    grid = one(lay(tmp_path, "\n".join(lines), "t.csv"), "wide", id="invented").grid(SOLAR)
    assert [len(s.mass) for s in grid.slices] == [100] * 4
    printed = [float(c) for c in lines[1].split(",")[3:]]
    assert grid.slices[0].total[0].tolist() == printed and all(map(math.isfinite, printed))
    assert is_figure(lines[1].split(",")[0])
