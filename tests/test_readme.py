"""The Python of the README runs as it stands there, in order."""

import re
from pathlib import Path

import numpy as np

README = Path(__file__).parents[1] / "README.md"


def test_python_examples_run_and_say_what_their_comments_say(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    blocks = re.findall(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), re.DOTALL)
    names = {}
    for block in blocks:
        if "executor" not in block:
            exec(compile(block, "README.md", "exec"), names)
    result = names["result"]
    assert len(blocks) >= 4
    assert (tmp_path / "handoff.nc").stat().st_size > 1e5 and (tmp_path / "report.html").exists()
    np.testing.assert_allclose(result.returned + result.living + result.remnants, 1, rtol=1e-12)
    assert result.lacking("Zn") == ("agb",)
    assert names["jacobian"].shape == (2, *names["value"].shape)
