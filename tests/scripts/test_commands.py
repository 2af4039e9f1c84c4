import io
import json
import os
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app
from steelyard.yields import load, shipped

ROOT = Path(__file__).parents[2]
runner = CliRunner()

COLLAPSE = """
metallicity = 0.02
species = "nuclides"
ages = ["1 Myr", "1000 Gyr"]
[imf]
form = "kroupa-2001"
limits = ["0.08 Msun", "120 Msun"]
[[source]]
kind = "core-collapse"
sets = ["kobayashi-2006"]
winds = "rest"
"""


def outside(*args, **more):
    """Run the command in a process of its own."""
    code = "from steelyard.scripts.main import main; main()"
    command = [sys.executable, "-c", code, *args]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, **more)


def population(text):
    Path("population.toml").write_text(text)
    return "population.toml"


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


def test_weigh_gives_the_known_integral(run):
    """Kroupa 2001 on 0.08-120 Msun over the Z = 0.02 models of Kobayashi+ 2006, linear in mass."""
    result = json.loads(run("weigh", population(COLLAPSE), "--json"))
    assert result["total"]["core-collapse"]["O16"][-1] == pytest.approx(7.193084341578e-3, rel=1e-10)
    iron = sum(result["sum"]["total"][f"Fe{a}"][-1] for a in (54, 56, 57, 58))
    assert iron == pytest.approx(4.29519877813e-4, rel=1e-10)
    assert not [p for p in Path().iterdir() if p.name != "population.toml"]
    table = run("weigh", "population.toml", "--no-figures")
    row = next(line.split() for line in table.splitlines() if line.startswith("O16 "))
    assert row[1:3] == ["7.193e-03", "7.193e-03"]


def test_weigh_json_has_the_promised_shape(run):
    result = json.loads(run("weigh", "--json", "--ages", "10 Myr, 13.8 Gyr", "--species", "H,O,Fe"))
    assert result["ages_yr"] == [1e7, 13.8e9]
    assert result["species"] == ["H", "O", "Fe"]
    sources = ["agb", "core-collapse", "thermonuclear"]
    assert result["sources"] == sources
    for part in ("total", "net"):
        assert list(result[part]) == sources
        for species in result["species"]:
            rows = [result[part][s][species] for s in sources]
            np.testing.assert_allclose(np.sum(rows, axis=0), result["sum"][part][species], rtol=1e-14)
    assert result["missing"] == {"agb": [], "core-collapse": [], "thermonuclear": ["H"]}
    assert set(result["events"]) == {"core-collapse", "thermonuclear"}
    budget = np.array(result["living"]) + result["remnants"] + result["returned"]
    np.testing.assert_allclose(budget, 1, rtol=1e-12)


def test_weigh_table_marks_what_is_missing(run):
    table = run("weigh", "--no-figures", "--species", "H,Be,O,Cl,Fe")
    rows = {line.split()[0]: line.split()[1:] for line in table.splitlines() if line[:2].strip() in RATIOS}
    assert rows["H"][2] == "-" and rows["H"][3].endswith("†")
    assert rows["Cl"][0] == "-" and rows["Cl"][3].endswith("†")
    # karakas-2010 follows Be7, doherty-2014 no Be
    assert rows["Be"][0].endswith("†")
    assert not any(cell.endswith("†") or cell == "-" for cell in rows["O"])
    assert rows["Fe"][4] == "+0.00"
    assert "† sum without agb, which doesn't follow Cl" in table
    assert "† sum without thermonuclear, which doesn't follow H, Be" in table
    assert "† agb follows Be at some masses only" in table
    assert "written: yields.h5, yields.csv" in table


RATIOS = ("H", "Be", "O", "Cl", "Fe")


def test_weigh_prints_each_age_asked_for_and_both_conventions(run):
    table = run("weigh", "--no-figures", "--ages", "10 Myr,1 Gyr", "--species", "O,Fe", "--net", "--rate")
    assert "Net yields at 10 Myr, Msun per yr and Msun formed" in table
    assert "Net yields at 1 Gyr, Msun per yr and Msun formed" in table
    assert "[X/Fe]" not in table


def test_weigh_writes_all_files_and_weighs_them_again(run):
    printed = run("weigh", "--species", "C,O,Fe", "-o", "out/deep")
    names = ["production-pattern.pdf", "production-pattern.png", "yields-over-time.pdf"]
    names += ["yields-over-time.png", "yields.csv", "yields.h5"]
    assert sorted(p.name for p in Path("out/deep").iterdir()) == names
    assert all(str(Path("out/deep") / name) in printed for name in names)
    assert "the digits agree" in run("weigh", "out/deep/yields.h5")
    assert json.loads(run("weigh", "out/deep/yields.h5", "--json"))["agrees"] is True


def test_a_population_that_has_ejected_nothing_has_a_table_but_no_figures(run):
    printed = run("weigh", "--ages", "1 Myr", "--species", "O,Fe")
    assert "written: yields.h5, yields.csv" in printed
    assert printed.count("not drawn: ") == 2
    assert sorted(p.name for p in Path().iterdir()) == ["yields.csv", "yields.h5"]


def test_weighing_again_finds_a_changed_digit(run):
    import h5py

    run("weigh", population(COLLAPSE), "--no-figures")
    with h5py.File("yields.h5", "r+") as file:
        values = file["total"][()]
        values[..., list(file["species"]).index(b"O16")] *= 1 + 1e-6
        file["total"][...] = values
    result = runner.invoke(app, ["weigh", "yields.h5"])
    assert result.exit_code == 1
    assert "differ" in result.stdout and result.stderr == ""


def test_template_is_written_once_and_runs(run, refused):
    assert "population.toml" in run("weigh", "--template")
    text = Path("population.toml").read_text()
    assert run("weigh", "--template", "-") == text
    assert "exists already" in refused("weigh", "--template")
    assert Path("population.toml").read_text() == text
    run("weigh", "--template", "-o", "new/folder", "mine.toml")
    assert Path("new/folder/mine.toml").read_text() == text
    ours = json.loads(run("weigh", "population.toml", "--json"))
    assert ours == json.loads(run("weigh", "--json"))


@pytest.mark.parametrize("command", [[], ["sets"], ["show"], ["weigh"]])
def test_help_has_examples_that_run(run, command):
    import shlex

    text = run(*command, "--help")
    assert run(*command, "-h") == text
    assert max(map(len, text.splitlines())) <= 80
    examples = [line.strip() for line in text.splitlines() if line.startswith("    steelyard ")]
    assert examples
    for example in examples:
        words = shlex.split(example)[1:]
        run(*words, *(["--no-figures"] if words[0] == "weigh" and "--help" not in words else []))


@pytest.mark.parametrize(
    ("args", "told"),
    [
        (["wiegh"], "there is no command 'wiegh'; did you mean weigh?"),
        (["--versoin"], "no such option"),
        (["sets", "--knd", "agb"], "no such option"),
        (["sets", "extra"], "extra"),
        (["sets", "--kind", "agbb"], "--kind: there are no sets of kind 'agbb'; did you mean agb?"),
        (["show"], "missing argument"),
        (["show", "kobayashi-206"], "yield set 'kobayashi-206' isn't known; did you mean kobayashi-2006"),
        (["show", "kobayashi-2006", "-Z", "0.014"], "no slice at Z = 0.014; it has 0, 0.001, 0.004, 0.02"),
        (["show", "kobayashi-2006", "-Z", "solar"], "--metallicity is not a quantity: 'solar'"),
        (["show", "kobayashi-2006", "--species", "O,U238"], "U238 isn't followed"),
        (["show", "kobayashi-2006", "--species", "Oo"], "species 'Oo' isn't known"),
        (["show", "kobayashi-2006", "--species", ","], "--species names nothing"),
        (["show", "kobayashi-2006", "--convention", "gross"], "choose total or net"),
        (["show", "kobayashi-2006", "--json", "--csv"], "exclude each other"),
        (["show", "nomoto-1997-w7", "-Z", "0.02"], "single events, which have no metallicity"),
        (["weigh", "none.toml"], "none.toml: there is no such file"),
        (["weigh", "none.h5"], "none.h5: there is no such file"),
        (["weigh", "."], "this is a folder"),
        (["weigh", "--ages", "10 Msun"], "--ages: ages has the wrong dimension"),
        (["weigh", "--ages", "-1 Gyr"], "age is negative"),
        (["weigh", "--ages", "nan"], "isn't finite"),
        (["weigh", "--ages", "soon"], "ages is not a quantity: 'soon'"),
        (["weigh", "--species", "O,Mgg"], "--species: species 'Mgg' isn't known; did you mean Mg"),
        (["weigh", "--species", "U238"], "no set of the population follows U238"),
        (["weigh", "--metallicity", "2"], "metallicity 2 isn't a mass fraction"),
        (["weigh", "--metallicity", "-0.01"], "metallicity -0.01 isn't a mass fraction"),
        (["weigh", "--json", "--rate"], "holds amounts, no rates"),
    ],
)
def test_bad_command_lines_are_told_in_one_line(refused, args, told):
    assert told in refused(*args)


def test_values_from_a_file_are_told_with_its_name(refused):
    good = COLLAPSE
    cases = {
        good.replace("metallicity", "metalicity"): "key 'metalicity' isn't known; did you mean metallicity?",
        good.replace("0.02", "0.1") + '[edges]\nmetallicity = "refuse"': "lies outside the set's 0 to 0.02",
        good.replace('"0.08 Msun"', '"130 Msun"'): "write the lower mass first",
        good.replace('"0.08 Msun"', '"-1 Msun"'): "-1 Msun",
        good.replace('"0.08 Msun"', '"1 kpc"'): "wrong dimension",
        good + '[[source]]\nkind = "agb"\nsets = ["kobayashi-2006"]': "overlap",
        good + '[[source]]\nkind = "agb"\nsets = ["karakas-2010"]': "there is a gap without a join",
        good.replace('"nuclides"', '["O", "Feee"]'): "species 'Feee' isn't known; did you mean Fe",
        good.replace("kobayashi-2006", "kobayashi-06"): "did you mean kobayashi-2006",
        good.replace("= 0.02", "= "): "line 2 column 15: this isn't TOML",
    }
    for text, told in cases.items():
        line = refused("weigh", population(text))
        assert line.startswith("steelyard: population.toml: ") and told in line, line


def test_hostile_files_are_told_in_one_line(refused):
    for content in (b"", b"\x00" * 100, b"\x7fELF\xff\xfe", b"a = " + b"[" * 9999, b"x" * 5_000_000):
        Path("hostile.toml").write_bytes(content)
        refused("weigh", "hostile.toml")
    for content in (b"", b"\x89HDF\r\n\x1a\n", b"\x89HDF\r\n\x1a\n" + b"\x00" * 5000, b"text"):
        Path("hostile.h5").write_bytes(content)
        refused("weigh", "hostile.h5")


def test_escape_codes_from_a_file_do_not_reach_the_terminal(refused):
    line = refused("weigh", population('metallicity = 0.02\n"\\u001b[31mred\\u0007" = 1\nsource = []\n'))
    assert "\x1b" not in line and "\x07" not in line


def test_a_place_that_cannot_be_written(refused):
    Path("file").write_text("kept")
    assert "file: this isn't a folder" in refused("weigh", "--no-figures", "-o", "file")
    assert "file/in: this isn't a folder" in refused("weigh", "--no-figures", "-o", "file/in")
    assert Path("file").read_text() == "kept"
    refused("weigh", "--template", "nowhere/population.toml")
    refused("weigh", "--no-figures", "-o", "/proc/nothing")


def test_a_population_that_fails_makes_no_folder(refused):
    refused("weigh", population(COLLAPSE.replace("0.02", "0.7")), "-o", "results")


def test_status_and_streams_of_the_process():
    known = outside("sets", "--kind", "agb")
    assert known.returncode == 0 and known.stderr == ""
    # in a pipe: no colour, no line cut
    assert "\x1b" not in known.stdout and "…" not in known.stdout
    assert "MNRAS 437, 195; MNRAS 441, 582" in known.stdout
    bad = outside("show", "kobayashi")
    assert bad.returncode == 2 and bad.stdout == ""
    assert (
        bad.stderr.startswith("steelyard: yield set 'kobayashi' isn't known") and bad.stderr.count("\n") == 1
    )
    assert outside("--version").stdout.startswith("steelyard ")
    assert outside().stdout == outside("--help").stdout


def test_plain_ascii_output_and_a_closed_pipe():
    env = {**os.environ, "PYTHONIOENCODING": "ascii"}
    plain = outside("weigh", "--no-figures", "--species", "H,O,Fe", env=env)
    assert plain.returncode == 0 and plain.stdout.isascii() and "* sum without thermonuclear" in plain.stdout
    code = "from steelyard.scripts.main import main; main()"
    reader, writer = os.pipe()
    os.close(reader)
    command = [sys.executable, "-c", code, "show", "limongi-chieffi-2018-R-v000"]
    try:
        closed = subprocess.run(command, stdout=writer, stderr=subprocess.PIPE, timeout=120)
    finally:
        os.close(writer)
    assert closed.stderr == b"" and closed.returncode == 141


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_tables_fit_a_terminal_of_80_columns_and_obey_no_color():
    import fcntl
    import pty
    import struct
    import termios

    def on_terminal(args, **more):
        parent, child = pty.openpty()
        fcntl.ioctl(child, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
        env = {k: v for k, v in os.environ.items() if k not in ("COLUMNS", "LINES", "NO_COLOR")}
        env |= {"TERM": "xterm-256color", **more}
        code = "from steelyard.scripts.main import main; main()"
        process = subprocess.Popen([sys.executable, "-c", code, *args], stdout=child, stderr=child, env=env)
        os.close(child)
        text = b""
        while True:
            try:
                part = os.read(parent, 65536)
            except OSError:
                break
            if not part:
                break
            text += part
        os.close(parent)
        assert process.wait(120) == 0
        return text.decode()

    for args in (["sets"], ["show", "kobayashi-2006"], ["weigh", "--no-figures"]):
        plain = on_terminal(args, NO_COLOR="1")
        assert "\x1b" not in plain
        assert max(len(line.rstrip("\r")) for line in plain.split("\n")) <= 80
        assert "…" not in plain.replace("Co56, …)", "")
    assert "\x1b[1m" in on_terminal(["sets"])


def test_an_interruption_is_quiet(monkeypatch):
    def interrupt(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr("steelyard.scripts.sets.load", interrupt)
    result = runner.invoke(app, ["sets"])
    assert (result.exit_code, result.output) == (130, "")


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_only_slow_work_says_what_it_does(monkeypatch):
    from steelyard.scripts import terminal

    monkeypatch.setattr(sys, "stderr", Terminal())
    monkeypatch.setattr(terminal, "PATIENCE", 3600)
    with terminal.slow("weighing"):
        pass
    assert sys.stderr.getvalue() == ""
    monkeypatch.setattr(terminal, "PATIENCE", 0)
    with terminal.slow("weighing"):
        for _ in range(1000):
            if "weighing" in sys.stderr.getvalue():
                break
            time.sleep(0.01)
        else:
            pytest.fail("nothing was said in ten seconds")


def test_a_figure_that_is_no_number_is_refused():
    from steelyard.yields.build import Printed, build
    from steelyard.yields.errors import InputError

    info = {"kind": "core-collapse", "yields": "total", "ejected": "mass - remnant", "covers": "life"}
    models = [{"metallicity": "0.02", "mass": str(m), "remnant": "1.5"} for m in (13, 15)]
    for bad in ("nan", "inf", "", "1,5"):
        rows = [{"metallicity": "0.02", "mass": m["mass"], "O16": "0.5"} for m in models]
        build("mine", info, Printed(models, {"total": rows}), "asplund-2009")
        rows[1]["O16"] = bad
        with pytest.raises(InputError, match=r"mine total\.csv") as caught:
            build("mine", info, Printed(models, {"total": rows}), "asplund-2009")
        assert "O16" in str(caught.value) and "\n" not in str(caught.value)


def test_help_loads_nothing_heavy():
    code = (
        "import sys\nsys.argv = ['steelyard', '--help']\n"
        "from steelyard.scripts.main import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'matplotlib', 'astropy', 'h5py', 'pint', 'rich'}\n"
        "print(sorted(heavy & set(sys.modules)), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=120)
    assert done.stderr.strip() == "[]"
    assert "weigh" in done.stdout


@pytest.mark.parametrize(
    ("change", "shows"),
    [
        ("core-collapse=limongi-chieffi-2018-R-v150", "limongi-chieffi-2018-R-v150"),
        ("imf=salpeter-1955", "salpeter-1955"),
        ("agb=marigo-2001+doherty-2014", "marigo-2001"),
    ],
)
def test_one_command_swaps_a_yield_set(run, change, shows):
    text = run("weigh", "--species", "C,O", "--with", change, "--no-figures")
    assert shows in text and text != run("weigh", "--species", "C,O", "--no-figures")
    assert json.loads(run("weigh", "--species", "C,O", "--with", change, "--json")) != json.loads(
        run("weigh", "--species", "C,O", "--json")
    )


def test_swaps_that_can_not_be_made_are_refused(refused):
    assert "did you mean" in refused("weigh", "--with", "core-colapse=kobayashi-2006")
    assert "gives 2 choices" in refused("weigh", "--with", "imf=salpeter-1955,chabrier-2003")
    assert "isn't a swap" in refused("weigh", "--with", "imf")


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
