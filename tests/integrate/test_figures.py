import subprocess
import sys
import tomllib
from concurrent.futures import ThreadPoolExecutor
from itertools import combinations
from xml.etree import ElementTree

import matplotlib
import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource
from steelyard.integrate.figures import production_pattern, save, yields_over_time
from steelyard.yields.composition import mixture
from steelyard.yields.errors import InputError
from steelyard.yields.figures.style import looks

# Okabe & Ito 2008, "Color universal design", from memory
OKABE_ITO = {
    "#000000", "#E69F00", "#56B4E9", "#009E73", "#F0E442", "#0072B2", "#D55E00", "#CC79A7",
}  # fmt: skip


def population(**changes):
    given = {
        "metallicity": 0.014,
        "sources": [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        "joins": [Join(("agb", "core-collapse"), "bridge")],
    }
    return Population(**given | changes)


@pytest.fixture(scope="module")
def result():
    return population().weigh()


@pytest.fixture(scope="module")
def elements():
    """Elements only, most of them not followed by the AGB set, up to bismuth."""
    sources = [
        StellarSource("agb", ["marigo-2001"]),
        StellarSource("core-collapse", ["limongi-chieffi-2018-R-v150"]),
    ]
    return population(metallicity=0.0134, sources=sources).weigh()


def net_of_three(result):
    return yields_over_time(result, [s for s in ("C", "N", "O", "Al26") if s in result.species], "net")


def panels(figure):
    return {axes.get_title(loc="left"): axes for axes in figure.axes}


def line(axes, name):
    (found,) = [one for one in axes.lines if one.get_label() == name]
    return found


def every_tick_label(axis):
    return [
        t for tick in (*axis.get_major_ticks(), *axis.get_minor_ticks()) for t in (tick.label1, tick.label2)
    ]


def tick_labels(axis):
    """The tick labels that are seen: matplotlib keeps others outside the limits."""
    low, high = sorted(axis.get_view_interval())
    found = [
        t.label1 for t in (*axis.get_major_ticks(), *axis.get_minor_ticks()) if low <= t.get_loc() <= high
    ]
    return [t for t in found if t.get_visible() and t.get_text()]


def figure_legend(figure):
    return [t.get_text() for t in figure.legends[0].get_texts()]


def test_each_panel_has_a_line_for_each_source_and_the_sum(result):
    figure = yields_over_time(result)
    assert list(panels(figure)) == ["C", "N", "O", "Mg", "Si", "Ca", "Mn", "Fe", "Ni"]
    for name in ("C", "O", "Fe"):
        drawn = [one.get_label() for one in panels(figure)[name].lines]
        assert drawn == ["AGB", "core collapse", "thermonuclear", "sum"]
    assert [t.get_text() for t in figure.legends[0].get_texts()] == drawn
    assert figure.get_supxlabel() == "Age of the population [yr]"
    assert "[M$_\\odot$ per M$_\\odot$ formed]" in figure.get_supylabel()
    assert "Net yield" in yields_over_time(result, convention="net").get_supylabel()


def test_few_ages_are_weighed_more_finely_and_many_are_kept(result):
    curve = line(panels(yields_over_time(result))["Fe"], "thermonuclear")
    x, y = curve.get_data()
    assert len(x) > 100
    assert x[-1] == max(result.ages)
    fresh = result.population.weigh(x)
    np.testing.assert_allclose(y, fresh.get("Fe", "thermonuclear"), rtol=1e-12)
    ages = np.geomspace(1e8, 1e10, 40)
    x, y = line(panels(yields_over_time(population().weigh(ages)))["Fe"], "sum").get_data()
    np.testing.assert_array_equal(x, ages)


def test_ages_in_any_order_and_zero_make_the_same_curve():
    ages = np.geomspace(1e8, 1e10, 40)
    mixed = population().weigh([*ages[::-1], 0.0])
    a, b = (line(panels(yields_over_time(r))["O"], "sum") for r in (population().weigh(ages), mixed))
    np.testing.assert_array_equal(a.get_xdata(), b.get_xdata())
    np.testing.assert_allclose(a.get_ydata(), b.get_ydata(), rtol=1e-13)


def test_negative_yields_are_in_view(result):
    axes = panels(yields_over_time(result, ["C", "O", "Ca"], convention="net"))
    for name in ("C", "O"):
        values = line(axes[name], "AGB").get_ydata()
        assert values.min() < 0
        low, high = axes[name].get_ylim()
        assert low < values.min() and values.max() < high
        assert 0 in axes[name].get_yticks()
    assert axes["Ca"].get_yscale() == "log"


def test_missing_is_told_and_part_is_pale(result, elements):
    axes = panels(yields_over_time(result))["Ca"]
    assert axes.get_title(loc="right") == "AGB missing"
    assert "AGB" not in [one.get_label() for one in axes.lines]
    axes = panels(yields_over_time(elements))["Fe"]
    assert axes.get_title(loc="right") == "AGB in part"
    assert line(axes, "AGB").get_alpha() < 1


def test_nuclides_and_their_elements_are_drawn():
    weighed = population(species=["C12", "C13", "Al26"]).weigh(["1 Gyr"])
    assert list(panels(yields_over_time(weighed))) == ["C12", "C13", "Al26"]
    whole = line(panels(yields_over_time(weighed, ["C"]))["C"], "AGB").get_ydata()[-1]
    assert whole == pytest.approx(weighed.get("C", "agb")[0], rel=1e-12)
    _, below = production_pattern(weighed).axes
    assert [t.get_text() for t in below.get_xticklabels()] == ["C", "Al"]


def test_species_that_nothing_ejects_yet_leaves_a_panel_at_zero():
    figure = yields_over_time(population(species=["O", "Al26"]).weigh(["10 Myr"]))
    assert panels(figure)["Al26"].get_yticks().tolist() == [0]


def test_what_cannot_be_drawn_is_refused(result):
    with pytest.raises(InputError, match="nothing is ejected"):
        yields_over_time(population().weigh(["1 Myr"]))
    with pytest.raises(InputError, match="no age above 0"):
        yields_over_time(population().weigh([0]))
    with pytest.raises(InputError, match="'U' isn't in the result"):
        yields_over_time(result, ["U"])
    with pytest.raises(InputError, match="no species to draw"):
        yields_over_time(result, [])
    with pytest.raises(InputError, match="choose total or net"):
        yields_over_time(result, convention="gross")
    with pytest.raises(InputError, match="nothing is ejected"):
        production_pattern(result, "1 Myr")
    with pytest.raises(InputError, match="no position among 7 ages"):
        production_pattern(result, 7)


def marks(axes, marker):
    """x and y of the marks of one shape."""
    found = [one for one in axes.lines if one.get_marker() == marker]
    x, y = (np.concatenate([getattr(one, f"get_{c}data")() for one in found]) for c in "xy")
    order = np.argsort(x)
    return x[order], y[order]


def test_pattern_is_the_mass_fraction_over_the_suns(result):
    above, _ = production_pattern(result, "1 Gyr").axes
    z, dex = marks(above, "D")
    at = result.population.weigh(["1 Gyr"])
    sun = mixture("asplund-2009").mass_fractions()
    for number, symbol in ((8, "O"), (14, "Si"), (26, "Fe")):
        expected = np.log10(at.get(symbol)[0] / at.returned[0] / sun[symbol])
        assert dex[z == number] == pytest.approx(expected, abs=1e-12)
    assert "[dex]" in above.get_ylabel()


def test_what_leaves_as_it_was_born_in_the_sun_has_no_overabundance():
    # all stars but a sliver return birth composition: the pattern is flat at 0 dex by definition
    sun = mixture("asplund-2009").mass_fractions()
    metals = sum(x for e, x in sun.items() if e not in ("H", "He", "Li"))
    stars = Population(
        metals,
        [StellarSource("agb", ["karakas-2010"], limits=(1.0, 1.000001))],
        edges=Edges(above="return-only"),
    )
    above, _ = production_pattern(stars.weigh()).axes
    z, dex = marks(above, "D")
    # the set's beryllium is Be7 alone, which isn't in the Sun
    np.testing.assert_allclose(dex[z != 4], 0.0, atol=1e-5)
    assert len(z) > 15


def test_shares_fill_the_bars_and_say_who_makes_what(result):
    _, below = production_pattern(result).axes
    tops = np.zeros(31)
    heights = {}
    for bars, source in zip(below.containers, result.sources, strict=True):
        for bar in bars:
            tops[round(bar.get_x() + bar.get_width() / 2) - 2] += bar.get_height()
        heights[source] = {round(b.get_x() + b.get_width() / 2): b.get_height() for b in bars}
    assert heights["core-collapse"][8] > 0.7  # oxygen is of core collapse: common practice
    assert heights["thermonuclear"][25] > 0.5  # manganese of Type Ia
    for z in heights["agb"]:
        assert sum(h[z] for h in heights.values()) == pytest.approx(1.0)


def test_marks_are_open_where_a_source_does_not_follow(result):
    above, below = production_pattern(result).axes
    hollow = {
        int(x)
        for one in above.lines
        if one.get_marker() == "D" and one.get_markerfacecolor() == "white"
        for x in one.get_xdata()
    }
    assert 20 in hollow  # calcium: not in the AGB sets
    assert 8 not in hollow
    pale = {round(b.get_x() + b.get_width() / 2) for b in below.patches if (b.get_alpha() or 1) < 1}
    assert pale == hollow
    assert figure_legend(production_pattern(result))[-1] == "not followed by all"


def test_sources_differ_in_colour_line_marker_and_hatch():
    known = looks(["agb", "core-collapse", "thermonuclear", "kilonova", "nova", "merger"])
    for a, b in combinations(known.values(), 2):
        for way in ("colour", "line", "marker", "hatch"):
            assert getattr(a, way) != getattr(b, way)
    assert {look.colour for look in known.values()} <= OKABE_ITO


@pytest.mark.parametrize("draw", [yields_over_time, net_of_three, production_pattern])
@pytest.mark.parametrize("which", ["all sets", "elements", "one nuclide"])
def test_type_is_legible(draw, which, result, elements):
    one = population(species=["Al26"]).weigh(["1 Gyr"])
    figure = draw({"all sets": result, "elements": elements, "one nuclide": one}[which])
    FigureCanvasAgg(figure).draw()
    axes = [axis for panel in figure.axes for axis in (panel.xaxis, panel.yaxis)]
    labels = [tick_labels(axis) for axis in axes]
    on_ticks = {text for axis in axes for text in every_tick_label(axis)}
    others = [t for t in figure.findobj(Text) if t.get_text().strip() and t.get_visible()]
    seen = [t for t in others if t not in on_ticks] + [t for shown in labels for t in shown]
    edge = figure.bbox
    for text in seen:
        # exponents are smaller, as in all typesetting
        assert text.get_fontsize() >= 7
        box = text.get_window_extent()
        assert edge.x0 <= box.x0 and box.x1 <= edge.x1, text
        assert edge.y0 <= box.y0 and box.y1 <= edge.y1, text
    for shown in labels:
        for a, b in combinations([t.get_window_extent() for t in shown], 2):
            assert not a.overlaps(b)


@pytest.mark.parametrize("draw", [yields_over_time, production_pattern])
@pytest.mark.parametrize(
    ("kind", "start"), [("png", b"\x89PNG\r\n\x1a\n"), ("pdf", b"%PDF-"), ("svg", b"<?xml")]
)
def test_files_are_valid_dateless_and_reproducible(draw, kind, start, tmp_path):
    for name in ("a", "b"):
        save(draw(population(species=["O", "Fe"]).weigh()), tmp_path / f"{name}.{kind}")
    data = (tmp_path / f"a.{kind}").read_bytes()
    assert data.startswith(start)
    assert data == (tmp_path / f"b.{kind}").read_bytes()
    assert b"CreationDate" not in data and b"dc:date" not in data
    assert sorted(p.name for p in tmp_path.iterdir()) == [f"a.{kind}", f"b.{kind}"]


def test_png_is_two_columns_wide_and_carries_its_population(result, tmp_path):
    from PIL import Image

    save(yields_over_time(result), tmp_path / "x.png")
    with Image.open(tmp_path / "x.png") as image:
        assert image.width == int(180 / 25.4 * 200)  # 180 mm at 200 dots per inch
        assert image.info["dpi"] == pytest.approx((200, 200), abs=0.1)
        text = image.info["Description"].split("population file:\n")[1]
    assert tomllib.loads(text)["metallicity"] == 0.014


def test_svg_carries_its_population(result, tmp_path):
    save(production_pattern(result), tmp_path / "x.svg")
    told = ElementTree.parse(tmp_path / "x.svg").find(".//{http://purl.org/dc/elements/1.1/}description").text
    assert tomllib.loads(told.split("population file:\n")[1])["metallicity"] == 0.014


def test_other_endings_are_refused(result, tmp_path):
    for name, said in (("x.jpg", "can't be written as 'jpg'"), ("x", "needs an ending")):
        with pytest.raises(InputError, match=said):
            save(yields_over_time(result), tmp_path / name)
    assert not list(tmp_path.iterdir())


def test_threads_draw_alike_and_settings_come_back(result, tmp_path):
    matplotlib.rcParams["font.size"] = 13
    try:

        def draw(k):
            save(production_pattern(result), tmp_path / f"{k}.svg")

        with ThreadPoolExecutor(3) as pool:
            list(pool.map(draw, range(3)))
        assert matplotlib.rcParams["font.size"] == 13
    finally:
        matplotlib.rcParams["font.size"] = matplotlib.rcParamsDefault["font.size"]
    draw("alone")
    assert len({p.read_bytes() for p in tmp_path.iterdir()}) == 1


def test_drawing_needs_no_screen_and_leaves_pyplot_alone(tmp_path):
    code = (
        "import sys\n"
        "import steelyard.integrate.figures as f\n"
        "assert 'matplotlib' not in sys.modules\n"
        "from steelyard.integrate import Population, StellarSource\n"
        "r = Population(0.02, [StellarSource('agb', ['karakas-2010'])]).weigh()\n"
        f"f.save(f.yields_over_time(r), r'{tmp_path}/x.pdf')\n"
        "assert 'matplotlib.pyplot' not in sys.modules\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
