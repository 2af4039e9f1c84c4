"""Ensembles: the same digits on any executor, after a kill, and after the loss of a worker."""

import os
import pickle
import signal
import subprocess
import sys
import threading
import time
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Join, Plan, Population, StellarSource
from steelyard.integrate.ensemble import ensemble, open_ensemble
from steelyard.integrate.ensemble.summary import Moments, merged
from steelyard.yields.errors import InputError

FREE = ["imf.slopes[-1]", "thermonuclear.number", "thermonuclear.delay.slope"]


def population(**changes):
    sources = [
        StellarSource("agb", ["karakas-2010", "doherty-2014"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
    ]
    given = {"joins": [Join(("agb", "core-collapse"))], "species": ["C", "O", "Mg", "Fe"], **changes}
    return Population(0.014, sources, **given)


def made(**changes):
    return Plan(population(), FREE, ages=["30 Myr", "1 Gyr", "13 Gyr"], **changes)


def draws(n, seed=0):
    rng = np.random.default_rng(seed)
    return np.column_stack([rng.normal(2.3, 0.2, n), rng.uniform(5e-4, 3e-3, n), rng.normal(-1.1, 0.1, n)])


@pytest.fixture(scope="module")
def plan():
    return made()


@pytest.fixture(scope="module")
def serial(plan, tmp_path_factory):
    return ensemble(plan, draws(1000), tmp_path_factory.mktemp("serial") / "many.h5", chunk=64)


class Counting(Executor):
    """Runs each chunk at once, counts them, and fails as it is told."""

    def __init__(self, fails=lambda count: None):
        self.count, self._fails = 0, fails

    def submit(self, function, *args, **kwargs):
        future = Future()
        result = function(*args, **kwargs)
        if result[0] == "done":
            self.count += 1
        try:
            self._fails(self.count)
            future.set_result(result)
        except Exception as error:
            future.set_exception(error)
        return future


def test_members_are_what_the_plan_gives(plan, serial):
    theta = draws(1000)
    assert np.array_equal(serial.theta, theta)
    for i in (0, 63, 64, 999):
        assert np.array_equal(serial.values[i], plan(theta[i]))
    assert serial.shape == plan.shape and serial.finished.all() and len(serial.finished) == 16


def test_a_plan_can_be_sent(plan):
    again = pickle.loads(pickle.dumps(plan))
    assert np.array_equal(again(plan.start), plan(plan.start))


@pytest.mark.parametrize("kind", [ThreadPoolExecutor, ProcessPoolExecutor])
def test_executors_give_the_serial_digits(plan, serial, tmp_path, kind):
    import multiprocessing

    context = {"mp_context": multiprocessing.get_context("spawn")} if kind is ProcessPoolExecutor else {}
    with kind(2, **context) as pool:
        found = ensemble(plan, draws(1000), tmp_path / "many.h5", executor=pool, chunk=64)
    assert np.array_equal(found.values, serial.values)
    for name in ("mean", "covariance", "quantiles"):
        assert np.array_equal(getattr(found.summary(), name), getattr(serial.summary(), name))


def test_a_dask_worker_killed_half_way_loses_and_doubles_nothing(plan, tmp_path):
    distributed = pytest.importorskip("dask.distributed")
    theta = draws(60_000, seed=3)
    killed = []
    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        path = tmp_path / "many.h5"

        def kill():
            while not path.exists() or open_ensemble(path).finished.sum() < 20:
                time.sleep(0.005)
            pid = next(iter(client.run(os.getpid).values()))
            os.kill(pid, signal.SIGKILL)
            killed.append(int(open_ensemble(path).finished.sum()))

        killer = threading.Thread(target=kill)
        killer.start()
        found = ensemble(plan, theta, path, executor=client, chunk=400)
        killer.join()
    assert killed and killed[0] < 150
    assert all(found.intact(i) for i in range(found.chunks))
    assert np.array_equal(found.theta, theta)
    assert np.array_equal(found.values, plan.batch(theta))


def test_a_killed_run_is_gone_on_with(plan, serial, tmp_path):
    path = tmp_path / "many.h5"
    script = (
        "import sys, time\n"
        "from tests_ensemble import draws, ensemble, made\n"
        "import steelyard.integrate.ensemble.store as store\n"
        "write = store.Ensemble.write\n"
        "def slow(self, *args):\n"
        "    write(self, *args)\n"
        "    time.sleep(0.1)\n"
        "store.Ensemble.write = slow\n"
        "ensemble(made(), draws(1000), sys.argv[1], chunk=64)\n"
    )
    loader = (
        "import importlib.util, sys\n"
        f"spec = importlib.util.spec_from_file_location('tests_ensemble', {__file__!r})\n"
        "module = importlib.util.module_from_spec(spec)\n"
        "sys.modules['tests_ensemble'] = module\n"
        "spec.loader.exec_module(module)\n"
    )
    with subprocess.Popen([sys.executable, "-c", loader + script, str(path)]) as child:
        until = time.monotonic() + 60
        while not (path.exists() and open_ensemble(path).finished.sum() >= 4):
            assert child.poll() is None and time.monotonic() < until
            time.sleep(0.01)
        child.kill()
    before = int(open_ensemble(path).finished.sum())
    assert 4 <= before < 16
    with pytest.raises(InputError, match=f"{before} of 16 chunks are finished"):
        open_ensemble(path).summary()
    counter = Counting()
    found = ensemble(plan, draws(1000), path, executor=counter)
    assert counter.count == 16 - before
    assert np.array_equal(found.values, serial.values)
    again = Counting()
    ensemble(plan, draws(1000), path, executor=again)
    assert again.count == 0


def test_a_chunk_that_was_spoilt_is_worked_out_again(plan, serial, tmp_path):
    path = tmp_path / "many.h5"
    found = ensemble(plan, draws(1000), path, chunk=64)
    with path.open("r+b") as file:
        file.seek(found.offsets["yields"] + 8 * (5 * 64 * 12 + 7))
        file.write(b"12345678")
    assert [i for i in range(16) if not found.intact(i)] == [5]
    counter = Counting()
    found = ensemble(plan, draws(1000), path, executor=counter)
    assert counter.count == 1
    assert np.array_equal(found.values, serial.values)


def test_a_worker_that_fails_is_asked_again_but_not_for_ever(plan, serial, tmp_path):
    def sometimes(count):
        if count in (3, 9, 10):
            raise ConnectionError("the worker is gone")

    found = ensemble(plan, draws(1000), tmp_path / "a.h5", executor=Counting(sometimes), chunk=64)
    assert np.array_equal(found.values, serial.values)

    def always(count):
        if count >= 3:
            raise ConnectionError("the worker is gone")

    with pytest.raises(ConnectionError):
        ensemble(plan, draws(1000), tmp_path / "b.h5", executor=Counting(always), chunk=64)

    def broken(count):
        if count == 5:
            raise BrokenProcessPool("a child died")

    with pytest.raises(BrokenProcessPool) as caught:
        ensemble(plan, draws(1000), tmp_path / "c.h5", executor=Counting(broken), chunk=64)
    assert "run it again" in caught.value.__notes__[0]
    assert open_ensemble(tmp_path / "c.h5").finished.sum() >= 1
    found = ensemble(plan, draws(1000), tmp_path / "c.h5")
    assert np.array_equal(found.values, serial.values)


def test_thetas_may_come_as_parts_or_by_name(plan, serial, tmp_path):
    theta = draws(1000)
    cuts = [theta[:1], theta[1:300], theta[300:300], theta[300:]]
    parts = ensemble(plan, iter(cuts), tmp_path / "parts.h5", chunk=64, members=1000)
    assert np.array_equal(parts.values, serial.values)
    named = {name: theta[:, i] for i, name in enumerate(FREE)}
    ages = population(ages=["30 Myr", "1 Gyr", "13 Gyr"])
    by_name = ensemble(ages, named, tmp_path / "named.h5")
    assert np.array_equal(by_name.values, serial.values)
    # with the same parts it is gone on with, with others refused
    counter = Counting()
    ensemble(plan, iter(cuts), tmp_path / "parts.h5", executor=counter, members=1000)
    assert counter.count == 0
    with pytest.raises(InputError, match="other parameters"):
        ensemble(plan, iter([theta[::-1]]), tmp_path / "parts.h5", members=1000)


def test_another_ensembles_file_is_refused(plan, serial):
    theta = draws(1000)
    with pytest.raises(InputError, match="another plan"):
        ensemble(made(convention="net"), theta, serial.path)
    with pytest.raises(InputError, match="another plan"):
        ensemble(Plan(population(solar="lodders-2003"), FREE, plan.ages), theta, serial.path)
    with pytest.raises(InputError, match="999"):
        ensemble(plan, theta[:999], serial.path)
    with pytest.raises(InputError, match="chunks of 64"):
        ensemble(plan, theta, serial.path, chunk=65)
    changed = theta.copy()
    changed[700, 1] *= 1 + 1e-15
    assert changed[700, 1] != theta[700, 1]
    with pytest.raises(InputError, match="other parameters"):
        ensemble(plan, changed, serial.path)


def test_a_member_that_makes_no_population_is_named(tmp_path):
    plan = Plan(population(), ["metallicity"], ages=["1 Gyr"])
    theta = np.full((50, 1), 0.01)
    theta[37] = 0.9
    with pytest.raises(InputError, match=r"member 37: metallicity 0\.9"):
        ensemble(plan, theta, tmp_path / "a.h5", chunk=8)
    with ThreadPoolExecutor(2) as pool, pytest.raises(InputError, match="member 37"):
        ensemble(plan, theta, tmp_path / "b.h5", executor=pool, chunk=8)


def test_a_file_says_what_it_holds_and_by_source(tmp_path):
    import h5py

    plan = made(by_source=True)
    found = ensemble(plan, draws(10), tmp_path / "a.h5")
    assert found.shape == (3, 3, 4) and found.sources == ("agb", "core-collapse", "thermonuclear")
    with h5py.File(found.path, "r") as file:
        assert np.array_equal(file["yields"][()], plan.batch(draws(10)))
        assert [d.label for d in file["yields"].dims] == ["member", "source", "time", "species"]
        assert file["yields"].dims[2][0][()] == pytest.approx(plan.ages)
        assert b"nomoto-1997-w7" in file.attrs["population"]
        assert [n.decode() for n in file["parameter"][()]] == FREE
        assert file["yields"].attrs["units"] == b"Msun/Msun"


def test_the_summary_is_that_of_numpy(serial):
    found = serial.summary(levels=(0.1, 0.5, 0.9), memory=1000 * 8 * 5)
    values = np.array(serial.values)
    assert found.mean == pytest.approx(values.mean(axis=0), rel=1e-13)
    assert np.array_equal(found.quantiles, np.quantile(values, (0.1, 0.5, 0.9), axis=0))
    for t in range(values.shape[1]):
        assert found.covariance[t] == pytest.approx(np.cov(values[:, t].T), rel=1e-11, abs=1e-25)
    assert found.deviation == pytest.approx(values.std(axis=0, ddof=1), rel=1e-11)
    with pytest.raises(InputError, match="between 0 and 1"):
        serial.summary(levels=(1.2,))


def test_moments_stay_exact_far_from_zero():
    # deviations of 1e-6 about 1: sums of squares alone would lose all digits
    rng = np.random.default_rng(5)
    values = 1 + 1e-6 * rng.normal(size=(4001, 2, 3))
    found = merged(Moments.of(part) for part in np.array_split(values, 7))
    shifted = (values - 1).reshape(4001, 6)
    for i in range(2):
        expected = np.cov(shifted[:, 3 * i : 3 * i + 3].T)
        assert found.products[i] / 4000 == pytest.approx(expected, rel=1e-8)
    assert found.count == 4001


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"thetas": [1.0, 2.0, 3.0]}, "shape"),
        ({"thetas": iter([])}, "members"),
        ({"thetas": iter([draws(3)]), "members": 4}, "3 members, not 4"),
        ({"thetas": iter([draws(5)]), "members": 4}, "more than 4"),
        ({"thetas": {"imf.slopes[-1]": [2.3]}}, "lacks thermonuclear.number"),
        ({"thetas": {"imf.slope[-1]": [2.3]}}, "did you mean"),
        ({"chunk": 0}, "chunk"),
        ({"executor": 3}, "executor int"),
        ({"path": "nowhere/at/all.h5"}, "can't be written"),
    ],
)
def test_what_an_ensemble_refuses(plan, tmp_path, given, words):
    path = tmp_path / given.get("path", "many.h5")
    with pytest.raises(InputError, match=words):
        ensemble(**{"plan": plan, "thetas": draws(10), **given, "path": path})


def test_what_is_no_ensemble_is_refused(tmp_path):
    (tmp_path / "text").write_text("no ensemble")
    for name in ("text", "nothing"):
        with pytest.raises(InputError, match=name):
            open_ensemble(tmp_path / name)
