"""An output laid against another: what is a digit, what is text."""

from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.comparing import compared, kind_of
from steelyard.scripts.main import app


@pytest.mark.parametrize(
    ("text", "same"),
    [
        ("a 1.0\nb 2.0", True),
        ("a 1.0\nb 2.0000000000000004", True),
        ("a 1.0\nb 2.000001", False),
        ("a 1.0\nb 1e999", False),
        ("a 1.0\nb nan", False),
        ("a 1.0", False),
        ("a 1.0\nb", False),
        ("a 1.0\nand more\nb 2.0", True),
        ("a 1.0\nc 2.0", True),
        ("a 1.0\nb \u22122.0", False),
    ],
)
def test_text(text, same):
    assert compared(text, "a 1.0\nb 2.0")[0] is same


CSV = "# note 1\nage_yr,species,total,net\n1e9,O,0.25,1e-20\n1e9,Fe,nan,-2.0\n"


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("# note", "# ours\n# note", ""),
        ("note 1", "note 1, ours", ""),
        ("0.25", "0.250", ""),
        ("0.25", "0.2500000000000001", ""),
        ("1e-20", "-3e-20", ""),  # rounding, beside 2.0
        ("0.25", "0.2500001", "line 3 has 0.2500001, not 0.25"),
        ("0.25", "inf", "line 3 has inf, not 0.25"),
        ("0.25", "", "line 3 has , not 0.25"),
        ("nan", "0.1", "line 4 has 0.1, not nan"),
        ("O,", "Fe,", "line 3 has Fe, not O"),
        ("total,net", "net,total", "line 2 has net, not total"),
        ("note 1", "note 2", "line 1 has 2, not 1"),
        ("1e9,Fe,nan,-2.0\n", "", "line 4 is missing: 1e9,Fe,nan,-2.0"),
        ("-2.0\n", "-2.0\n1e9,Mg,1,1\n", "line 5 is none of the table: 1e9,Mg,1,1"),
        ("-2.0\n", "-2.0,7\n", "line 4 has 5 cells, not 4"),
        ("O", "\x1b[31mO\0", "line 3 has ?[31mO?, not O"),
        ("O", "O" * 200_000, "line 3 has 0 cells, not 4"),
    ],
)
def test_csv(old, new, says):
    spoilt = CSV.replace(old, new, 1)
    assert spoilt != CSV
    same, message = compared(spoilt, CSV, "csv")
    assert same is (not says)
    if says:
        assert message == f"the digits differ: {says}"


TEX = r"""% note
\caption{Yields}
Species & AGB & Sum \\
C & $1.07\times10^{-3}$ & $0.2\pm0.1$ \\
Ca & \ldots & $6.03\times10^{-5}$\tablenotemark{a} \\
"""


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("Yields", "Yields of our galaxy", ""),
        ("AGB", "Low masses", ""),
        ("Ca", "Calcium", ""),
        ("{a} \\\\", "{a} \\\\[2pt] % seen on 3 May", ""),
        ("1.07", "1.08", "line 4 has 1.08, not 1.07"),
        ("10^{-3}", "10^{-2}", "line 4 has -2, not -3"),
        ("0.1", "0.2", "line 4 has 0.2, not 0.1"),
        ("C &", "Ca &", "line 4 has Ca, not C"),
        ("AGB & Sum", "Sum & AGB", "line 3 has Sum, not AGB"),
        ("\\ldots", "0.5", "line 5 has 0.5 in place of no figure"),
        ("$1.07\\times10^{-3}$", "\\ldots", "line 4 has no figure in place of 1.07, 10, -3"),
        ("{a}", "{a} & 0.5", "line 5 has 4 cells, not 3"),
        ("\nCa", "\nNe & 1 & 2 \\\\\nCa", "line 5 has 1 in place of no figure"),
    ],
)
def test_latex(old, new, says):
    spoilt = TEX.replace(old, new, 1)
    assert spoilt != TEX
    same, message = compared(spoilt, TEX, "latex")
    assert same is (not says)
    assert message == f"the digits differ: {says}" if says else "text was edited" in message


def test_a_set_and_a_version_tell_their_story():
    sha = "0123456789abcdef" * 4
    fresh = f"# steelyard 0.2.0\n# set one sha256 {sha}\n1,2\n"
    then = fresh.replace("0.2.0", "0.1.0").replace("0123", "3210")
    told = "the figures of one aren't those it was made with"
    assert compared(then, fresh, "csv") == (True, f"the digits agree; written by steelyard 0.1.0; {told}")
    same, message = compared(then.replace("1,2", "1,3"), fresh, "csv")
    assert not same and message.endswith(f"line 3 has 3, not 2 (written by steelyard 0.1.0; {told})")
    row = f'<!DOCTYPE html>\n<tr><th scope="row">one</th><td>{sha}</td></tr>'
    assert compared(row.replace("0123", "3210"), row, "page") == (True, f"the digits agree; {told}")


def test_many_lines_are_laid_side_by_side():
    fresh = "".join(f"# note {i}\n" for i in range(30_000)) + "1,2\n"
    assert compared("# ours\n" + fresh, fresh, "csv") == (
        True,
        "the digits agree; text was edited, first in line 1",
    )


@pytest.mark.parametrize(
    ("words", "name", "kind"),
    [
        (["-f", "deluxetable", "--spread", "assumed"], "t.tex", "latex"),
        (["-f", "booktabs", "--log", "--spread", "assumed"], "t.tex", "latex"),
        (["-f", "mrt", "--spread", "assumed"], "t.txt", "described columns"),
        (["-f", "cds"], "t/yields.dat", "columns"),
        (["-f", "csv", "--spread", "assumed"], "t.csv", "csv"),
    ],
)
def test_no_digit_of_a_rounded_table_is_overlooked(words, name, kind):
    target = name.partition("/")[0]
    assert CliRunner().invoke(app, ["typeset", "-e", "C,O,Ca,H", *words, "-o", target]).exit_code == 0
    text = Path(name).read_text()
    assert kind_of(text, Path(name).name) == kind
    lines = text.split("\n")
    first, last = min(i for i, line in enumerate(lines) if _is_row(line)), len(lines)
    seen = 0
    for i in range(first, last):
        for j, sign in enumerate(lines[i]):
            if _is_row(lines[i]) and sign.isdigit():
                spoilt = lines[i][:j] + str((int(sign) + 1) % 10) + lines[i][j + 1 :]
                same, message = compared("\n".join([*lines[:i], spoilt, *lines[i + 1 :]]), text, kind)
                assert not same and f"line {i + 1} has " in message, spoilt
                seen += 1
    assert seen > 60


def _is_row(line):
    cells = line.replace(",", " ").replace("&", " ").split()
    return bool({"C", "O", "Ca", "H"} & set(cells[:2])) and any("." in cell for cell in cells)
