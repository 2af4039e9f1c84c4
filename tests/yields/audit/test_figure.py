import pytest

from steelyard.yields import InputError, load
from steelyard.yields.audit.figure import draw, save


@pytest.mark.parametrize("id", ["karakas-2010", "limongi-chieffi-2018-R-v150", "nomoto-1997-w7"])
def test_every_finding_of_a_model_is_marked_with_its_number(id):
    grid = load(id)
    findings = grid.audit()
    figure = draw(grid, findings)
    numbers = {n for text in figure.axes[0].texts for n in text.get_text().split(",")}
    for n, finding in enumerate(findings, start=1):
        assert finding.mass is None or str(n) in numbers


def test_every_model_has_its_dot():
    grid = load("kobayashi-2006")
    dots = [line for line in draw(grid, ()).axes[0].lines if line.get_marker() == "."]
    assert sum(len(line.get_xdata()) for line in dots) == 28


def test_every_nuclide_has_its_square():
    # 83 nuclides of Kobayashi+ 2006; none of the stable ones from H1 to Ge74 is missing
    assert len(draw(load("kobayashi-2006"), ()).axes[1].patches) == 83


@pytest.mark.parametrize("ending", ["png", "pdf", "svg"])
def test_saving(tmp_path, ending):
    assert save(load("marigo-2001"), (), tmp_path / f"a.{ending}").stat().st_size > 5000


def test_refusals(tmp_path):
    with pytest.raises(InputError, match="known: pdf, png, svg"):
        save(load("marigo-2001"), (), tmp_path / "a.doc")
    with pytest.raises(InputError, match="there is no folder"):
        save(load("marigo-2001"), (), tmp_path / "none" / "a.png")
