"""The mass function and its weights as drawn, against closed forms and the yields themselves."""

import numpy as np
import pytest

from steelyard.integrate import Population, StellarSource
from steelyard.integrate.figures import mass_function_and_weights
from steelyard.integrate.leverage import leverage
from steelyard.integrate.popfile import default_population
from steelyard.yields.errors import InputError


def test_salpeter_is_a_straight_line_of_its_slope():
    stars = Population(
        0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], imf="salpeter-1955", species=["O"]
    )
    above, _ = mass_function_and_weights(leverage(stars)).axes
    number, mass = above.lines[:2]
    for line, slope in ((number, -1.35), (mass, -0.35)):  # Salpeter 1955, ApJ 121, 161: dN/dlog m ~ m^-1.35
        x, y = np.log10(line.get_xdata()), np.log10(line.get_ydata())
        assert np.polyfit(x, y, 1)[0] == pytest.approx(slope, abs=2e-3)


def test_weights_times_printed_figures_are_the_yield():
    """One source of total yields at a metallicity of its own: E = sum of weight x table."""
    stars = Population(
        0.02, [StellarSource("core-collapse", ["kobayashi-2006"], winds="rest")], species=["O"]
    )
    found = leverage(stars)
    _, below = mass_function_and_weights(found).axes
    marks = {}
    for line in below.lines:
        if line.get_marker() != "None" and len(line.get_xdata()) == 1:
            marks[float(line.get_xdata()[0])] = float(line.get_ydata()[0])
    grid = found.population.sources[0].sets[0].load("asplund-2009")[0].at(0.02)
    column = [i for i, s in enumerate(found.population.prepared.sets[0].parsed) if s.symbol == "O"]
    printed = grid.listed[:, column].sum(axis=1)
    assert sorted(marks) == grid.mass.tolist()
    made = sum(marks[m] * y for m, y in zip(grid.mass.tolist(), printed, strict=True))
    assert made == pytest.approx(found.result.get("O")[-1], rel=1e-12)


def test_two_metallicities_are_told_apart_and_gaps_are_shaded():
    figure = mass_function_and_weights(leverage(default_population()))
    below = figure.axes[1]
    hollow = [line for line in below.lines if line.get_markerfacecolor() == "none"]
    assert hollow and "hollow" in below.get_title(loc="right")
    texts = [text.get_text() for text in below.texts]
    assert texts.count("swallow") == 2 and "bridge" in texts
    assert [t.get_text() for t in figure.legends[0].get_texts()][:2] == ["stars", "mass in stars"]


def test_before_any_star_has_died_nothing_is_drawn():
    stars = Population(0.02, [StellarSource("agb", ["karakas-2010"])], species=["C"], ages=["1 Myr"])
    with pytest.raises(InputError, match="older age"):
        mass_function_and_weights(leverage(stars))
