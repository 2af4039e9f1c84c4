"""Every text format with everything journals do to numbers, names, line ends and encodings."""

import bz2
import gzip
import io
import lzma
import zipfile

import pytest

from steelyard.yields.nuclides import parse
from steelyard.yields.readers import Options, detect, figure, open_source, read

# Karakas 2010, MNRAS 403, 1413, table A2, 1 Msun, Z = 0.02: net yield and X0
ROWS = [
    ("p", "-8.1048310E-03", "6.8791503E-01"),
    ("he4", "7.9379827E-03", "2.9310462E-01"),
    ("c12", "-1.7504650E-04", "3.0351942E-03"),
    ("c13", "2.4790019E-05", "3.6528963E-05"),
]

CELLS = {
    "1.5E-04": 1.5e-4,
    "1.5e-4": 1.5e-4,
    "1.5D-04": 1.5e-4,
    "1.5d-4": 1.5e-4,
    "1.5-4": 1.5e-4,
    "-1.5-104": -1.5e-104,
    "1.5+2": 150.0,
    "+1.5": 1.5,
    ".5": 0.5,
    "13.": 13.0,
    "0.": 0.0,
    "\u22121.5E\u221204": -1.5e-4,
    "1.5(-4)": 1.5e-4,
    "1.5x10^-4": 1.5e-4,
    "1.5×10⁻⁴": 1.5e-4,
    "...": None,
    "--": None,
    "---": None,
    "—": None,
    "…": None,
    "NaN": None,
    "\\nodata": None,
    "$1.5\\times10^{-4}$": 1.5e-4,
    "$-$1.5": -1.5,
}

NAMES = {
    "^12^C": "C12",
    "$^{12}$C": "C12",
    "12C": "C12",
    "c12": "C12",
    "C-12": "C12",
    "C12": "C12",
    "al-6": "Al26",
    "al*6": "Al26m",
    "p": "H1",
    "d": "H2",
    "n": "n1",
    "P": "P",
    "N": "N",
}


def mrt(rows):
    head = (
        "Title: invented\nTable: invented\n"
        + "=" * 80
        + "\nByte-by-byte Description of file: t.txt\n"
        + "-" * 80
        + "\n   Bytes Format Units   Label   Explanations\n"
        + "-" * 80
        + "\n   1- 12 A12    ---     species Name\n  14- 35 E14.7  solMass yield   Net yield,\n"
        + "                                 continued\n  37- 58 E14.7  ---     X0      ?=- At birth\n"
        + "-" * 80
        + "\n"
    )
    return head + fixed(rows)


def fixed(rows):
    return "".join(f"{a:<12} {b:>22} {c:>22}\n" for a, b, c in rows)


def ecsv(rows):
    head = "# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:\n# - {name: species, datatype: string}\n"
    head += "# - {name: yield, unit: solMass, datatype: string}\n# - {name: X0, datatype: string}\n"
    return head + csv(rows)


def csv(rows):
    return "species,yield,X0\n" + "".join(f"{','.join(row)}\n" for row in rows)


def tsv(rows):
    return csv(rows).replace(",", "\t")


def text(rows):
    return "species yield X0\n" + "".join(f"{'  '.join(row)}\n" for row in rows)


def latex(rows):
    body = "".join(" & ".join(row) + r" \\" + "\n" for row in rows)
    return (
        "\\begin{table}\n\\begin{tabular}{lcc}\n\\hline\nspecies & yield & X0 \\\\ \\hline\n"
        + body
        + "\\hline\n\\end{tabular}\n\\end{table}\n"
    )


def deluxetable(rows):
    body = " \\\\\n".join(" & ".join(row) for row in rows)
    return (
        "\\begin{deluxetable}{lcc}\n\\tablehead{\\colhead{species} & \\colhead{yield\\tablenotemark{a}} &\n"
        "\\colhead{X0} \\\\ \\colhead{} & \\colhead{(Msun)} & \\colhead{}}\n\\startdata\n"
        + body
        + "\n\\enddata\n\\end{deluxetable}\n"
    )


def block(rows):
    return "# M = 1.00 Z = 0.02 Mfinal = 0.564\n species yield X0\n" + "".join(
        f"  {'   '.join(r)}\n" for r in rows
    )


BYTES = Options(bytes={"species": (1, 12), "yield": (14, 35), "X0": (37, 58)})
FORMATS = {
    "mrt": mrt,
    "cds": fixed,
    "ecsv": ecsv,
    "csv": csv,
    "tsv": tsv,
    "text": text,
    "latex": latex,
    "deluxetable": deluxetable,
    "block": block,
}
READER = {"deluxetable": "latex", "tsv": "csv"}

# what can be done to a whole file
WHOLE = {
    "as it is": lambda s: s.encode(),
    "byte order mark": lambda s: b"\xef\xbb\xbf" + s.encode(),
    "UTF-16": lambda s: s.encode("utf-16"),
    "CRLF": lambda s: s.replace("\n", "\r\n").encode(),
    "CR": lambda s: s.replace("\n", "\r").encode(),
    "no last line end": lambda s: s.rstrip("\n").encode(),
    "blank lines at the end": lambda s: (s + "\n \n").encode(),
    "Latin-1": lambda s: s.replace("invented", "d\u00e9j\u00e0").encode("latin-1"),
    "white space behind": lambda s: s.replace("\n", "   \n").encode(),
}


def lay(folder, content, name="table.txt"):
    path = folder / name
    path.write_bytes(content)
    return path


def sheet(path, kind):
    (found,) = read(path, READER.get(kind, kind), BYTES if kind == "cds" else None)
    return found


@pytest.mark.parametrize("how", WHOLE)
@pytest.mark.parametrize("kind", FORMATS)
def test_whole_files(tmp_path, kind, how):
    found = sheet(lay(tmp_path, WHOLE[how](FORMATS[kind](ROWS))), kind)
    assert found.columns == ("species", "yield", "X0")
    assert found.rows == tuple(ROWS)


@pytest.mark.parametrize("kind", ["mrt", "cds", "csv", "tsv", "text", "block"])
def test_hash_before_every_line(tmp_path, kind):
    commented = "".join(f"# {line}\n" for line in FORMATS[kind](ROWS).splitlines())
    if kind == "cds":
        commented = commented.replace("# ", "#")
    assert sheet(lay(tmp_path, commented.encode()), kind).rows == tuple(ROWS)


@pytest.mark.parametrize("kind", ["text", "csv"])
def test_names_in_the_last_comment(tmp_path, kind):
    content = "# invented, for this test\n# " + FORMATS[kind](ROWS)
    assert sheet(lay(tmp_path, content.encode()), kind).columns == ("species", "yield", "X0")


@pytest.mark.parametrize("cell", CELLS)
@pytest.mark.parametrize("kind", FORMATS)
def test_cells_stay_as_printed_and_are_understood(tmp_path, kind, cell):
    rows = [*ROWS, ("o16", cell, "1.0"), ("o17", "2.0", "3.0")]
    found = sheet(lay(tmp_path, FORMATS[kind](rows).encode()), kind)
    printed = found.rows[4][1]
    assert printed == cell or kind == "mrt"
    read_again = figure(printed)
    assert (None if read_again is None else float(read_again)) == CELLS[cell]
    assert found.rows[5][1:] == ("2.0", "3.0")


@pytest.mark.parametrize("kind", ["mrt", "cds", "ecsv", "csv", "tsv", "latex", "deluxetable"])
def test_an_empty_cell_is_no_value(tmp_path, kind):
    found = sheet(lay(tmp_path, FORMATS[kind]([*ROWS, ("o16", "", "1.0")]).encode()), kind)
    assert found.rows[4] == ("o16", "", "1.0")
    assert figure("") is None


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("kind", FORMATS)
def test_names_of_species(tmp_path, kind, name):
    found = sheet(lay(tmp_path, FORMATS[kind]([*ROWS, (name, "2.0", "3.0")]).encode()), kind)
    assert parse(found.rows[4][0]).name == NAMES[name]


@pytest.mark.parametrize("wrapping", ["gz", "xz", "bz2", "zip"])
@pytest.mark.parametrize("kind", FORMATS)
def test_compressed(tmp_path, kind, wrapping):
    data = FORMATS[kind](ROWS).encode()
    if wrapping == "zip":
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w") as archive:
            archive.writestr("folder/table.txt", data)
        packed = buffer.getvalue()
    else:
        packed = {"gz": gzip.compress, "xz": lzma.compress, "bz2": bz2.compress}[wrapping](data)
    path = lay(tmp_path, packed, f"table.txt.{wrapping}")
    assert open_source(path).name == "table.txt"
    assert sheet(path, kind).rows == tuple(ROWS)


@pytest.mark.parametrize("kind", [k for k in FORMATS if k != "cds"])
def test_formats_are_told_from_content(tmp_path, kind):
    path = lay(tmp_path, FORMATS[kind](ROWS).encode())
    assert detect(open_source(path)) == READER.get(kind, kind)


@pytest.mark.parametrize(
    "bad", ["1.2.3", "12-13", "1,5", "<1e-5", "1e9999", "inf", "C12", "1.5E-04a", "0x10"]
)
def test_what_is_no_figure_is_refused(bad):
    with pytest.raises(ValueError):
        figure(bad)


@pytest.mark.parametrize("kind", ["csv", "tsv", "text", "block"])
def test_a_row_with_a_cell_too_few_is_named(tmp_path, kind):
    short = FORMATS[kind](ROWS).replace("  2.4790019E-05", "").replace(",2.4790019E-05", "")
    short = short.replace("\t2.4790019E-05", "").replace("   2.4790019E-05", "")
    with pytest.raises(ValueError, match=r"table\.txt line \d+: 2 cells for 3 columns") as caught:
        sheet(lay(tmp_path, short.encode()), kind)
    assert "\n" not in str(caught.value)


def test_units_and_explanations_of_a_byte_by_byte_description(tmp_path):
    found = sheet(lay(tmp_path, mrt(ROWS).encode()), "mrt")
    assert found.units["yield"] == "solMass"
    assert found.notes["yield"] == "Net yield, continued"
    assert found.at(0) == "table.txt line 13"


def test_readme_beside_a_data_file(tmp_path):
    description = mrt(ROWS).split("Byte-by-byte")[1].rsplit("-" * 80, 1)[0].replace("t.txt", "tablea[23].dat")
    readme = (
        "J/INV/1/1  invented\n"
        + "=" * 80
        + "\n\nByte-by-byte"
        + description
        + "-" * 80
        + "\n\nAuthor\n"
        + "=" * 80
    )
    lay(tmp_path, readme.encode(), "ReadMe")
    path = lay(tmp_path, fixed(ROWS).encode(), "tablea2.dat")
    assert detect(open_source(path)) == "cds"
    assert read(path)[0].rows == tuple(ROWS)
    other = lay(tmp_path, fixed(ROWS).encode(), "tableb.dat")
    with pytest.raises(ValueError, match=r"no byte-by-byte description of tableb\.dat"):
        read(other, "cds")


def test_columns_named_by_a_layout(tmp_path):
    bare = text(ROWS).split("\n", 1)[1]
    with pytest.raises(ValueError, match="no line of column names"):
        read(lay(tmp_path, bare.encode()), "text")
    found = read(tmp_path / "table.txt", "text", Options(columns=("a", "b", "c")))[0]
    assert found.columns == ("a", "b", "c") and found.rows == tuple(ROWS)


def test_blocks_keep_their_headings(tmp_path):
    second = block(ROWS).replace("1.00", "1.25").replace(" species yield X0\n", "")
    found = read(lay(tmp_path, (block(ROWS) + "\n" + second).encode()))
    assert [s.heading for s in found] == [
        "M = 1.00 Z = 0.02 Mfinal = 0.564",
        "M = 1.25 Z = 0.02 Mfinal = 0.564",
    ]
    assert [s.rows for s in found] == [tuple(ROWS)] * 2
