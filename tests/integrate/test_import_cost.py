"""What importing the integrator loads: every command and every worker of a cluster pays for it."""

import json
import subprocess
import sys

HEAVY = [
    "matplotlib", "astropy", "pandas", "h5py", "pint", "periodictable", "radioactivedecay",
    "rich", "typer", "dask", "distributed", "emcee",
]  # fmt: skip


def loaded(statement):
    script = f"{statement}\nimport json, sys\nprint(json.dumps(sorted(sys.modules)))"
    out = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    return json.loads(out.stdout)


def test_the_integrator_loads_no_heavy_library():
    for statement in (
        "import steelyard.integrate",
        "import steelyard.integrate.stars, steelyard.integrate.ensemble",
    ):
        modules = loaded(statement)
        assert not {m.partition(".")[0] for m in modules} & set(HEAVY)
        public = {m.split(".")[1] for m in modules if m.startswith("scipy.")}
        assert {p for p in public if not p.startswith("_")} <= {"special", "version"}


def test_the_check_would_notice():
    assert "h5py" in loaded("import steelyard.integrate, h5py")
