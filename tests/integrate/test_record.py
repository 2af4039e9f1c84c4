"""How an output was made, read back: from files as they are written, and from whatever else there is."""

import struct
import zlib

import pytest

from steelyard.integrate.record import LARGEST, Record, is_output, read_record, read_text
from steelyard.integrate.reporting.markup import code
from steelyard.yields.errors import InputError

COMMAND = "typeset population.toml --elements O"
POPULATION = 'metallicity = 0.02\n\n[imf]\nform = "salpeter-1955"'
RECORD = Record(COMMAND, POPULATION, "[[spread]]\nsigma = 0.1")


def told(sign):
    lines = [
        f"made by: steelyard {COMMAND}",
        "population file:",
        *(f"    {x}" for x in POPULATION.splitlines()),
    ]
    lines += ["errors:", "    [[spread]]", "    sigma = 0.1"]
    return "".join(f"{sign} {line}".rstrip() + "\n" for line in lines)


def page(*blocks):
    return "<!DOCTYPE html>\n<p>steelyard</p>" + "".join(blocks)


BLOCKS = (
    code(f"steelyard weigh population.toml\nsteelyard {COMMAND}", "Commands"),
    code(POPULATION, "Population file"),
    code(RECORD.spread, "Stated errors"),
)


@pytest.mark.parametrize("text", [told("#"), told("%"), "Note:\n" + told("   "), page(*BLOCKS)])
def test_a_record_is_read_back(tmp_path, text):
    path = tmp_path / "output"
    for data in (text, text.replace("\n", "\r\n"), f"more\n{text}more" if "<" not in text else text):
        path.write_bytes(data.encode())
        assert is_output(path) and read_record(path) == RECORD


def test_folded_lines_are_joined(tmp_path):
    path = tmp_path / "output"
    folded = COMMAND.replace(" --elements O", " \\\n            --elements \\\n            O")
    path.write_text(told("   ").replace(COMMAND, folded))
    assert "\\" in path.read_text() and read_record(path) == RECORD


def test_the_first_command_counts(tmp_path):
    path = tmp_path / "output"
    path.write_text(told("#") + "# made by: steelyard weigh population.toml\n")
    assert read_record(path) == RECORD


def png(width):
    def chunk(kind, data):
        return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))

    head = struct.pack(">IIBBBBB", width, width, 8, 2, 0, 0, 0)
    text = b"Description\0steelyard\n" + told("#").encode()
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + chunk(b"tEXt", text) + chunk(b"IEND", b"")


def test_a_picture_tells_its_record(tmp_path):
    (tmp_path / "a.png").write_bytes(png(10))
    assert is_output(tmp_path / "a.png") and read_record(tmp_path / "a.png") == RECORD


@pytest.mark.parametrize(
    ("name", "data", "says"),
    [
        ("a.csv", b"# population file:\n# \xff\n", "isn't text in UTF-8"),
        ("a.csv", told("#").replace("made by", "thought of by").encode(), "which command made it"),
        ("a.csv", told("#").replace("    ", "").encode(), "which population made it"),
        ("a.csv", b"# population file:\n" + b"# x \\\n" * 400_000, "which population made it"),
        ("a.html", page(*BLOCKS[:1]).encode(), "which population made it"),
        ("a.html", page("<![x<h1>", "<!" * 100_000, BLOCKS[0][:-6]).encode(), "which population made it"),
        ("a.png", b"steelyard", "picture can't be read"),
        ("a.png", png(200_000), "picture can't be read"),
        ("a.png", png(10_000), "picture can't be read"),
        ("a.svg", b"steelyard" + b"<dc:description>" * 100_000, "which population made it"),
        ("a.pdf", b"steelyard /Subject (\xfe\xff\xd8\x00)", "which population made it"),
        ("a.pdf", b"steelyard " + b"/Subject (aaaa\\" * 100_000, "which population made it"),
        ("a.pdf", b"steelyard /Subject (" + b"\\" * 1_000_000, "which population made it"),
    ],
)
def test_anything_else_is_refused_in_one_line(tmp_path, name, data, says):
    path = tmp_path / name
    path.write_bytes(data)
    with pytest.raises(InputError, match=says) as error:
        read_record(path)
    assert "\n" not in str(error.value) and len(str(error.value)) < 500


def test_a_file_that_is_too_large_or_not_there_is_refused(tmp_path):
    path = tmp_path / "a.csv"
    with path.open("wb") as file:
        file.truncate(LARGEST + 1)
    with pytest.raises(InputError, match="too large"):
        read_text(path)
    with pytest.raises(InputError, match="can't be read"):
        read_text(tmp_path / "none")
    assert not is_output(tmp_path / "none")
