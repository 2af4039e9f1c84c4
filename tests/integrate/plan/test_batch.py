"""Many sets of values at once: the digits of single calls, whatever the block, the memory and the threads."""

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Join, Plan, Population, StellarSource
from steelyard.integrate.plan import batch as module
from steelyard.yields.errors import InputError

AGES = np.geomspace(3e6, 1.38e10, 30)
FREE = ["imf.slopes[-1]", "thermonuclear.delay.slope", "thermonuclear.number", "scale[agb, C]"]


def plan(free=tuple(FREE), by_source=False, imf="kroupa-2001", interpolation="linear"):
    stars = Population(
        0.014,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        joins=[Join(("agb", "core-collapse"))],
        species=["C", "O", "Mg", "Fe"],
        imf=imf,
        interpolation=interpolation,
    )
    return Plan(stars, free, AGES, by_source=by_source)


def draws(one, count=40):
    scatter = np.random.default_rng(5).normal(size=(count, len(one.free)))
    return one.start * (1 + 0.1 * scatter)


@pytest.mark.parametrize("imf", ["kroupa-2001", "chabrier-2003", "kroupa-1993"])
@pytest.mark.parametrize("by_source", [False, True])
def test_rows_have_the_digits_of_single_calls(by_source, imf):
    one = plan(by_source=by_source, imf=imf, interpolation="cubic" if imf == "kroupa-1993" else "linear")
    thetas = draws(one)
    thetas[7, 0] = 9.0  # steeper than the tables that are kept
    many = one.batch(thetas)
    assert many.shape == (40, *one.shape)
    assert np.array_equal(many, np.array([one(theta) for theta in thetas]))


@pytest.mark.parametrize("threads", [1, 2, 3])
@pytest.mark.parametrize("block", [1, 30_000, 200_000, 2**24])
def test_blocks_and_threads_leave_every_bit(monkeypatch, block, threads):
    one = plan()
    thetas = draws(one, 101)
    wanted = one.batch(thetas, threads=1)
    monkeypatch.setattr(module, "BLOCK", block)
    assert np.array_equal(one.batch(thetas, threads=threads), wanted)


@pytest.mark.parametrize("threads", [1, 2])
def test_what_calls_keep_fixed_may_be_free_too(threads):
    one = plan(["imf.slopes[-1]", "metallicity", "imf.limits[1]"])
    thetas = one.start * np.ones((12, 1))
    thetas[:, 0] = np.linspace(2.1, 2.6, 12)
    thetas[::3, 1] = 0.003
    thetas[::4, 2] = 80.0
    many = one.batch(thetas, threads=threads)
    assert np.array_equal(many, np.array([one(theta) for theta in thetas]))


def test_float32_is_the_rounded_result():
    one = plan()
    thetas = draws(one)
    wanted = one.batch(thetas).astype(np.float32)
    assert np.array_equal(one.batch(thetas, dtype=np.float32), wanted)
    out = np.empty((len(thetas), *one.shape), np.float32)
    assert one.batch(thetas, out=out) is out
    assert np.array_equal(out, wanted)


def test_memory_bounds_what_is_allocated():
    import tracemalloc

    one = plan()
    thetas = draws(one, 2000)
    one.batch(thetas[:2])
    for memory in (4e6, 6e6, "20 MB"):
        tracemalloc.start()
        one.batch(thetas, memory=memory, threads=2)
        _, peak = tracemalloc.get_traced_memory()
        tracemalloc.stop()
        assert peak < (20e6 if isinstance(memory, str) else memory)


def test_nothing_to_do():
    one = plan()
    assert one.batch(np.empty((0, 4))).shape == (0, *one.shape)


REFUSED = {
    "memory of 1e+06 byte has no room for 2000 results; give more": lambda p, t: p.batch(t, memory=1e6),
    "dtype int64 isn't float64 or float32": lambda p, t: p.batch(t, dtype=int),
    "out has shape (3, 30, 4), not (2000, 30, 4)": lambda p, t: p.batch(t, out=np.empty((3, 30, 4))),
    "threads is 0": lambda p, t: p.batch(t, threads=0),
    "memory has the wrong dimension": lambda p, t: p.batch(t, memory="1 Msun"),
    "number of events is negative": lambda p, t: p.batch(-t),
}


@pytest.mark.parametrize("message", REFUSED)
def test_what_cannot_be_is_refused_in_one_line(message):
    one = plan()
    with pytest.raises(InputError) as caught:
        REFUSED[message](one, draws(one, 2000))
    assert message in str(caught.value)
    assert "\n" not in str(caught.value)
