"""The grid of slices: what it holds, sums, refuses and prints."""

import numpy as np
import pytest

from steelyard.yields import Slice, YieldSet, load
from steelyard.yields.errors import InputError


def one(z=0.02, mass=(1.0, 2.0), **changes):
    mass = np.array(mass, dtype=float)
    n = len(mass)
    fields = {
        "metallicity": z,
        "mass": mass,
        "ejected": mass - 0.5,
        "wind": 0.1 * np.ones(n),
        "total": np.outer(mass - 0.5, [0.6, 0.2, 0.1]),
        "net": np.outer(mass - 0.5, [-0.1, 0.05, 0.04]),
        "initial": np.array([0.7, 0.15, 0.06]),
    }
    return Slice(**(fields | changes))


def invented(*slices, species=("H1", "C12", "C13")):
    return YieldSet("invented", "agb", species, slices or (one(),))


def test_remnant_rest_and_listed():
    a = one()
    np.testing.assert_allclose(a.remnant, [0.5, 0.5])
    np.testing.assert_allclose(a.rest(), 0.1 * a.ejected, rtol=1e-12)
    np.testing.assert_allclose(a.rest("net"), 0.01 * a.ejected, rtol=1e-12)
    np.testing.assert_allclose(a.listed, a.total - 0.1 * np.array([0.7, 0.15, 0.06]))


def test_figures_cant_be_changed_in_place():
    a = one()
    with pytest.raises(ValueError, match="read-only"):
        a.total[0, 0] = 1.0


@pytest.mark.parametrize(
    "changes, says",
    [
        ({"mass": np.array([2.0, 1.0])}, "masses don't increase: 2 then 1 Msun; sort"),
        ({"mass": np.array([1.0, 1.0])}, "keep one for each mass"),
        ({"mass": np.array([-1.0, 1.0])}, "mass isn't positive: -1"),
        ({"mass": np.array([0.0, 1.0])}, "mass isn't positive"),
        ({"ejected": np.array([0.5])}, r"ejected has shape \(1,\), not \(2,\)"),
        ({"initial": np.zeros(2)}, "initial has shape"),
        ({"net": np.zeros((2, 2))}, "net has shape"),
        (
            {"total": np.array([[0.1, 0.1, 0.1], [np.nan, 0.1, 0.1]])},
            "total of model 2 isn't a finite number",
        ),
        ({"wind": np.array([np.inf, 0.0])}, "wind of model 1"),
        ({"metallicity": -0.1}, "isn't a mass fraction"),
        ({"metallicity": np.nan}, "isn't a mass fraction"),
        ({"metallicity": 1.5}, "isn't a mass fraction"),
    ],
)
def test_a_slice_refuses(changes, says):
    with pytest.raises(InputError, match=says):
        one(**changes)


def test_no_models():
    empty = {n: np.zeros(0) for n in ("mass", "ejected", "wind")}
    with pytest.raises(InputError, match="no models"):
        one(
            mass=(),
            total=np.zeros((0, 3)),
            net=np.zeros((0, 3)),
            **{k: v for k, v in empty.items() if k != "mass"},
        )
    with pytest.raises(InputError, match="invented: the set has no models"):
        YieldSet("invented", "agb", ("H1",), ())


@pytest.mark.parametrize(
    "make, says",
    [
        (lambda: invented(species=("H1", "C12", "C12")), "species named twice: C12"),
        (lambda: invented(species=("H1", "C12")), "3 columns for 2 species"),
        (lambda: invented(one(0.02), one(0.01)), "metallicities don't increase"),
        (lambda: invented(one(0.02), one(0.02)), "metallicities don't increase"),
        (lambda: invented().at(0.01), "invented: no slice at Z = 0.01; it has 0.02"),
        (lambda: invented().value("C14", 1.0, 0.02), "species 'C14' isn't followed; did you mean"),
        (lambda: invented().value("C12", 1.5, 0.02), "no model of 1.5 Msun at Z = 0.02; it has 1, 2"),
    ],
)
def test_a_set_refuses(make, says):
    with pytest.raises(InputError, match=says):
        make()


def test_values_of_nuclides_and_elements():
    grid = invented()
    assert grid.value("12C", 2.0, 0.02) == pytest.approx(0.3)
    assert grid.value("C", 2.0, 0.02, "net") == pytest.approx(1.5 * 0.09)
    assert grid.columns("C") == [1, 2]
    assert grid.columns("O16") == []
    assert not grid.follows_elements
    assert load("marigo-2001").follows_elements
    assert load("marigo-2001").columns("C12") == []


def test_a_ragged_grid_keeps_its_own_masses():
    grid = invented(one(0.01, (1.0, 2.0)), one(0.02, (1.0, 3.0, 5.0)))
    assert grid.metallicities == (0.01, 0.02)
    assert grid.masses == (1.0, 2.0, 3.0, 5.0)
    assert len(grid.at(0.02).mass) == 3
    assert repr(grid) == "YieldSet('invented', agb, 5 models, 3 species)"


def test_as_a_table():
    frame = invented(one(0.01), one(0.02)).to_pandas("net")
    assert frame.index.names == ["metallicity", "mass"]
    assert list(frame.columns) == ["ejected", "remnant", "wind", "rest", "H1", "C12", "C13"]
    assert frame.loc[(0.02, 2.0), "C12"] == pytest.approx(0.075)
    assert frame[["rest", "H1", "C12", "C13"]].sum(axis=1).abs().max() < 1e-15
    assert frame.attrs == {"set": "invented", "convention": "net", "unit": "Msun"}


def test_species_may_be_spelt_in_any_way_but_once():
    """Canonical names are kept, or others refused: no column may count as missing for its spelling."""
    try:
        grid = invented(species=("p", "12C", "c-13"))
    except InputError:
        return
    assert grid.columns("C12") == [1]
