"""What a shell is told where a user asks it to complete a command line."""

import os
import subprocess
import sys

import pytest

from steelyard.scripts.main import COMMANDS


@pytest.mark.parametrize(
    ("line", "offers"),
    [
        ("steelyard ", set(COMMANDS)),
        ("steelyard report --spr", {"--spread"}),
        ("steelyard w", {"weigh"}),
        ("steelyard weigh --me", {"--metallicity"}),
        ("steelyard typeset --bib", {"--bibtex"}),
        ("steelyard show kob", {"kobayashi-2006"}),
        ("steelyard audit iwamoto-1999-WDD", {f"iwamoto-1999-WDD{n}" for n in "123"}),
        ("steelyard nothing-known --v", {"--version"}),
    ],
)
def test_the_shell_is_told(line, offers):
    words = line.split(" ")
    asked = {
        "_STEELYARD_COMPLETE": "complete_bash",
        "COMP_WORDS": line,
        "COMP_CWORD": str(len(words) - 1),
    }
    code = "from steelyard.scripts.main import main; main()"
    done = subprocess.run(
        [sys.executable, "-c", code], env=os.environ | asked, capture_output=True, text=True, timeout=60
    )
    assert not done.stderr
    found = set(done.stdout.split())
    assert found == offers
