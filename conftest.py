"""Test set-up for the whole tree, doctests in the rooms included."""

import importlib
import os
import sys
import tempfile
from pathlib import Path

os.environ["MPLBACKEND"] = "Agg"
# sets that the user of this machine has admitted mustn't reach the tests
os.environ.setdefault("STEELYARD_LIBRARY", str(Path(tempfile.gettempdir()) / "steelyard-tests-library"))

from hypothesis import settings

settings.register_profile("steelyard", deadline=None, derandomize=bool(os.environ.get("CI")))
settings.load_profile("steelyard")

ROOT = Path(__file__).parent
ROOMS = ("yields", "integrate", "scripts")


def pytest_collect_file(file_path, parent):
    """Have pytest use ``steelyard.yields.x`` where its path rules would load a second copy, ``yields.x``."""
    inside = file_path.relative_to(ROOT).with_suffix("") if file_path.is_relative_to(ROOT) else Path()
    if file_path.suffix != ".py" or not inside.parts or inside.parts[0] not in ROOMS:
        return
    dotted = ".".join(part for part in inside.parts if part != "__init__")
    try:
        sys.modules[dotted] = importlib.import_module(f"steelyard.{dotted}")
    except Exception:
        # pytest meets the same failure when it imports the file, and reports it with its place
        sys.modules.pop(dotted, None)
