"""What the figures of sets draw, read back from their artists."""

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb

from steelyard.yields import load, shipped
from steelyard.yields.against import against
from steelyard.yields.errors import InputError
from steelyard.yields.figures import coverage_map, save, set_against_set
from steelyard.yields.figures.style import distinct, looks


def drawn(figure):
    """A figure laid out, with its renderer."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    return canvas.get_renderer()


def test_coverage_has_every_model_of_every_set():
    grids = [load(one) for one in shipped()]
    figure = coverage_map(grids)
    axes = figure.axes[0]
    names = [text.get_text() for text in axes.get_yticklabels()]
    stars = {g.id: g for g in grids if not g.event}
    assert sorted(names) == sorted(stars)
    lines = [line for line in axes.lines if len(line.get_xdata())]
    found = {}
    for line in lines:
        row = names[round(line.get_ydata()[0])]
        found.setdefault(row, []).append((line.get_ydata()[0], tuple(line.get_xdata())))
    for name, grid in stars.items():
        upwards = [masses for _, masses in sorted(found[name], reverse=True)]
        assert upwards == [tuple(one.mass) for one in grid.slices]
    assert "nomoto-1997-w7" in figure.get_supxlabel()


def test_coverage_shades_what_no_set_reaches():
    axes = coverage_map([load("karakas-2010"), load("kobayashi-2006")]).axes[0]
    (shade,) = axes.patches
    assert (shade.get_x(), shade.get_x() + shade.get_width()) == (6.5, 13)
    # between 9 and 13 Msun no paper shipped has models; common practice names it the super-AGB gap
    axes = coverage_map([load(one) for one in shipped()]).axes[0]
    assert [(p.get_x(), round(p.get_x() + p.get_width(), 9)) for p in axes.patches] == [(9, 13)]


def test_coverage_labels_do_not_overlap():
    figure = coverage_map([load(one) for one in shipped()])
    renderer = drawn(figure)
    axes = figure.axes[0]
    for labels in (axes.get_xticklabels(), axes.get_yticklabels()):
        boxes = [t.get_window_extent(renderer) for t in labels if t.get_text()]
        assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[i + 1 :])
    width = figure.bbox.width
    assert all(0 <= t.get_window_extent(renderer).x0 < width for t in axes.get_yticklabels())


def test_no_models_of_stars_is_refused():
    with pytest.raises(InputError, match="none of the sets"):
        coverage_map([load("nomoto-1997-w7")])


def test_set_against_set_draws_models_where_they_are():
    found = against([load("kobayashi-2006"), load("limongi-chieffi-2018-R-v000")], ["O", "Ba"], 0.01)
    figure = set_against_set(found)
    oxygen, barium = figure.axes
    marks = [line for line in oxygen.lines if line.get_linestyle() == "None" and len(line.get_xdata())]
    for k, line in enumerate(marks):
        own = found.model[k]
        assert np.array_equal(line.get_xdata(), found.mass[own])
        assert np.array_equal(line.get_ydata(), found.values[k, own, 0])
    assert len(marks) == 2 and oxygen.get_yscale() == "log"
    assert "not followed by kobayashi-2006" in barium.get_title(loc="right")
    assert (
        figure.get_supylabel().startswith("Total yield [")
        and "initial mass" in figure.get_supxlabel().lower()
    )


def test_net_yields_below_0_have_a_straight_axis():
    found = against([load("karakas-2010"), load("marigo-2001")], ["O"], 0.008, "net")
    assert np.nanmin(found.values) < 0
    assert set_against_set(found).axes[0].get_yscale() == "linear"


def test_too_many_species_are_refused():
    other = load("limongi-chieffi-2018-R-v000")
    found = against([load("kobayashi-2006"), other], [s.symbol for s in other.parsed[:13]], 0.01)
    with pytest.raises(InputError, match="13 species"):
        set_against_set(found)


def test_looks_are_told_apart_without_colour():
    many = distinct(12)
    assert (
        len({(one.line if isinstance(one.line, str) else tuple(one.line[1]), one.marker) for one in many})
        == 12
    )
    known = looks(["agb", "core-collapse", "thermonuclear"])
    grey = sorted(np.dot(to_rgb(one.colour), (0.2126, 0.7152, 0.0722)) for one in known.values())
    assert len({one.marker for one in known.values()}) == 3 and grey[0] > 0


@pytest.mark.parametrize("ending", ["png", "pdf", "svg"])
def test_saved_with_its_sets_and_alike_each_time(tmp_path, ending):
    for name in ("a", "b"):
        save(coverage_map([load("kobayashi-2006")]), tmp_path / f"{name}.{ending}")
    data = (tmp_path / f"a.{ending}").read_bytes()
    assert data == (tmp_path / f"b.{ending}").read_bytes()
    assert load("kobayashi-2006").checksum.encode() in data
