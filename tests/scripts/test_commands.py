"""The command line as a process: help, bad input, streams, terminals, cost of imports."""

import io
import os
import subprocess
import sys
import time
from pathlib import Path

import pytest
from typer.testing import CliRunner

from steelyard.scripts.main import app

ROOT = Path(__file__).parents[2]


runner = CliRunner()


def population(text):
    Path("population.toml").write_text(text)
    return "population.toml"


def outside(*args, **more):
    """Run the command in a process of its own."""
    code = "from steelyard.scripts.main import main; main()"
    command = [sys.executable, "-c", code, *args]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, **more)


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
