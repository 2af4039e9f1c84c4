"""The notebook runs from top to bottom, and what its text says is so."""

import ast
import json
from pathlib import Path

import pytest

NOTEBOOK = Path(__file__).parents[2] / "scripts" / "examples" / "first_population.ipynb"


@pytest.fixture(scope="module")
def cells():
    return json.loads(NOTEBOOK.read_text(encoding="utf-8"))["cells"]


@pytest.fixture(scope="module")
def ran(cells):
    """Every code cell run in order as a notebook does: the names that it leaves, and last values."""
    names, shown = {}, []
    for cell in cells:
        if cell["cell_type"] != "code":
            continue
        tree = ast.parse("".join(cell["source"]))
        last = tree.body.pop() if isinstance(tree.body[-1], ast.Expr) else None
        exec(compile(tree, str(NOTEBOOK), "exec"), names)
        if last is not None:
            shown.append(eval(compile(ast.Expression(last.value), str(NOTEBOOK), "eval"), names))
    return names, shown


def test_it_ships_without_output(cells):
    notebook = json.loads(NOTEBOOK.read_text(encoding="utf-8"))
    assert (notebook["nbformat"], notebook["nbformat_minor"]) == (4, 5)
    # nbformat 4.5: ids are unique
    assert len({cell["id"] for cell in cells}) == len(cells)
    assert all(not cell["outputs"] for cell in cells if cell["cell_type"] == "code")


def test_what_it_says_is_so(ran, cells):
    names, shown = ran
    result = names["result"]
    assert names["budget"] == pytest.approx(1, abs=1e-12)
    oxygen = result.ratio("O", "Fe")
    assert oxygen[0] > 0.3 and oxygen[0] > oxygen[1] > oxygen[2]
    assert names["dimmer"].get("O")[0] < 0.8 * result.get("O")[-1]
    assert {one["source"] for one in result.ranges} == {"agb", "core-collapse"}
    tables = [one for one in shown if hasattr(one, "_repr_html_")]
    assert len(tables) == 2 and all("<table>" in one._repr_html_() for one in tables)
    assert names["found"].dex[1, 0, 0] < 0
