"""Lines and monotone cubics between models, and blending between metallicities."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import PchipInterpolator

from steelyard.yields import Slice, YieldSet, load
from steelyard.yields.curve import ACCOUNTS, Curve, blend, bracket, slice_curve
from steelyard.yields.errors import InputError

KOBAYASHI = load("kobayashi-2006").at(0.02)
KARAKAS = load("karakas-2010").at(0.02)


def everything(one, method, primary="total", winds="birth"):
    return slice_curve(one, np.eye(one.total.shape[1]), method, primary, winds)


@pytest.mark.parametrize("method", ["linear", "cubic"])
@pytest.mark.parametrize("one", [KOBAYASHI, KARAKAS], ids=["kobayashi", "karakas"])
def test_passes_through_every_model(one, method):
    at_nodes = everything(one, method).resample(one.mass).values
    s = one.total.shape[1]
    np.testing.assert_allclose(at_nodes[:, :s], one.total, rtol=1e-13)
    np.testing.assert_allclose(at_nodes[:, s : 2 * s], one.net, rtol=1e-13)
    accounts = dict(zip(ACCOUNTS, at_nodes[:, 2 * s :].T, strict=True))
    np.testing.assert_allclose(accounts["ejected"], one.ejected, rtol=1e-14)
    np.testing.assert_allclose(accounts["remnant"], one.remnant, rtol=1e-14)
    np.testing.assert_allclose(accounts["rest_total"], one.rest("total"), atol=1e-12)
    np.testing.assert_allclose(accounts["rest_net"], one.rest("net"), atol=1e-12)


def test_lines_equal_numpy_interp():
    m = np.linspace(13, 40, 333)
    values = everything(KOBAYASHI, "linear").resample(m).values
    for j in range(83):
        np.testing.assert_allclose(
            values[:, j], np.interp(m, KOBAYASHI.mass, KOBAYASHI.total[:, j]), rtol=1e-13
        )


@pytest.mark.parametrize(
    "one, primary, quantity", [(KOBAYASHI, "total", KOBAYASHI.listed), (KARAKAS, "net", KARAKAS.net)]
)
def test_cubics_equal_scipy_pchip(one, primary, quantity):
    m = np.linspace(one.mass[0], one.mass[-1], 401)
    s = quantity.shape[1]
    values = everything(one, "cubic", primary, winds="rest").resample(m).values
    got = values[:, :s] if primary == "total" else values[:, s : 2 * s]
    scale = np.abs(quantity).max(axis=0)
    miss = np.abs(got - PchipInterpolator(one.mass, quantity, axis=0)(m))
    assert np.all(miss <= 1e-13 * scale)


def test_cubics_dont_overshoot():
    """Between two models a primary yield stays between theirs (Fritsch & Butland 1984)."""
    values = KOBAYASHI.listed
    for i in range(len(KOBAYASHI.mass) - 1):
        m = np.linspace(KOBAYASHI.mass[i], KOBAYASHI.mass[i + 1], 50)
        inside = everything(KOBAYASHI, "cubic", winds="rest").resample(m).values[:, :83]
        low, high = np.minimum(values[i], values[i + 1]), np.maximum(values[i], values[i + 1])
        assert np.all(inside >= low - 1e-15 * high)
        assert np.all(inside <= high * (1 + 1e-14))
        steps = np.diff(inside, axis=0) * np.sign(values[i + 1] - values[i])
        assert np.all(steps >= -1e-14 * high)


@pytest.mark.parametrize("primary", ["total", "net"])
@pytest.mark.parametrize("one", [KOBAYASHI, KARAKAS], ids=["kobayashi", "karakas"])
def test_budgets_close_between_models_too(one, primary):
    m = np.linspace(one.mass[0], one.mass[-1], 97)
    s = one.total.shape[1]
    for method in ("linear", "cubic"):
        values = everything(one, method, primary).resample(m).values
        accounts = dict(zip(ACCOUNTS, values[:, 2 * s :].T, strict=True))
        np.testing.assert_allclose(accounts["ejected"] + accounts["remnant"], m, rtol=1e-13)
        np.testing.assert_allclose(
            values[:, :s].sum(axis=1) + accounts["rest_total"], accounts["ejected"], rtol=1e-12
        )
        np.testing.assert_allclose(values[:, s : 2 * s].sum(axis=1) + accounts["rest_net"], 0, atol=1e-12)
        birth = values[:, :s] - values[:, s : 2 * s]
        np.testing.assert_allclose(birth, np.outer(accounts["ejected"], one.initial), rtol=1e-9, atol=1e-12)


@given(
    st.lists(st.floats(1.0, 6.5), min_size=1, max_size=9, unique=True), st.sampled_from(["linear", "cubic"])
)
def test_more_nodes_change_nothing(extra, method):
    curve = everything(KARAKAS, method, "net")
    dense = curve.resample(np.unique(np.concatenate([curve.mass, extra])))
    m = np.linspace(1.0, 6.5, 37)
    np.testing.assert_allclose(dense.resample(m).values, curve.resample(m).values, rtol=1e-9, atol=1e-13)
    if method == "linear":
        np.testing.assert_allclose(dense.share @ curve.values, dense.values, rtol=1e-12, atol=1e-15)


def test_a_part_of_a_curve():
    part = everything(KOBAYASHI, "cubic").between(14.0, 22.0)
    assert part.span == (14.0, 22.0)
    assert part.mass.tolist() == [14.0, 15.0, 18.0, 20.0, 22.0]


def test_one_model_is_a_constant():
    one = Curve(np.array([5.0]), np.array([[2.0, 3.0]]), None, np.array([[1.0]]))
    np.testing.assert_array_equal(one.resample(np.array([5.0, 5.0])).values, [[2.0, 3.0]] * 2)


def test_blending_keeps_to_the_common_masses():
    a = Curve(np.array([1.0, 3.0]), np.array([[0.0], [2.0]]), None, np.eye(2))
    b = Curve(np.array([2.0, 4.0]), np.array([[10.0], [30.0]]), None, np.eye(2))
    both = blend([a, b], [0.25, 0.75])
    assert both.mass.tolist() == [2.0, 3.0]
    np.testing.assert_allclose(both.values[:, 0], [0.25 * 1 + 0.75 * 10, 0.25 * 2 + 0.75 * 20])
    np.testing.assert_allclose(both.share @ [0, 2, 10, 30], both.values[:, 0])


# --- metallicity ----------------------------------------------------------------------------------------


def test_between_slices_log_z_counts():
    """The logarithmic middle of 0.001 and 0.004 is 0.002."""
    at = bracket(load("kobayashi-2006"), 0.002)
    assert at.slices == (1, 2)
    assert at.weights == pytest.approx((0.5, 0.5), rel=1e-12)


def test_next_to_no_metals_z_itself_counts():
    at = bracket(load("kobayashi-2006"), 0.00025)
    assert at.slices == (0, 1)
    assert at.weights == pytest.approx((0.75, 0.25), rel=1e-12)


@given(st.floats(0.0, 0.02))
def test_weights_are_convex(z):
    at = bracket(load("kobayashi-2006"), z)
    assert min(at.weights) >= 0
    assert sum(at.weights) == pytest.approx(1.0, abs=1e-15)
    assert at.note == ""


def test_outside_the_slices():
    grid = load("karakas-2010")
    for z, i in ((0.0, 0), (0.05, 3)):
        at = bracket(grid, z)
        assert (at.slices, at.weights) == ((i,), (1.0,))
        assert "is held" in at.note
        with pytest.raises(
            InputError, match=r"karakas-2010: metallicity .* lies outside the set's 0.0001 to 0.02"
        ):
            bracket(grid, z, "refuse")
    assert bracket(grid, 0.02, "refuse").note == ""


def test_unknown_interpolation():
    with pytest.raises(InputError, match="choose one of linear, cubic"):
        slice_curve(KARAKAS, np.eye(47), "spline")


def test_missing_species_stay_apart_from_zero():
    one = Slice(
        0.02,
        *(np.array([1.0, 2.0]) for _ in range(2)),
        np.zeros(2),
        np.ones((2, 1)),
        np.ones((2, 1)),
        np.zeros(1),
    )
    grid = YieldSet("x", "agb", ("C12",), (one,))
    matrix, followed = grid.projection(["C", "C12", "C13", "O"])
    assert matrix.tolist() == [[1.0, 1.0, 0.0, 0.0]]
    assert followed.tolist() == [True, True, False, False]
