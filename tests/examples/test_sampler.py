"""The sampler example: it finds the truth, and its intervals hold the truth as often as they say."""

import numpy as np
import pytest
from scipy.stats import binom, norm

from steelyard.scripts.examples import recover_slope as example

pytest.importorskip("emcee")

REPEATS = 100


@pytest.fixture(scope="module")
def plan():
    return example.prepare()


def test_the_truth_is_within_the_posterior(capsys, monkeypatch):
    full = example.sample
    monkeypatch.setattr(example, "sample", lambda *given: full(*given, walkers=24, steps=400))
    example.main()
    told = capsys.readouterr().out
    assert "invented" in told and "imf.slopes[-1]" in told and "thermonuclear.number" in told
    plan, rng = example.prepare(), np.random.default_rng(2024)
    observed = example.invent(plan, example.TRUTH, rng)
    draws = full(plan, observed, rng, walkers=24, steps=400)
    low, high = np.quantile(draws, norm.cdf([-2, 2]), axis=0)
    assert np.all((low < example.TRUTH) & (example.TRUTH < high))
    # and the posterior says something: it is much narrower than the prior
    assert np.all(draws.std(axis=0) < 0.5 * (example.HIGHEST - example.LOWEST) / np.sqrt(12))


def test_the_chain_has_the_moments_of_the_posterior_on_a_grid(plan):
    observed = example.invent(plan, example.TRUTH, np.random.default_rng(5))
    draws = example.sample(plan, observed, np.random.default_rng(6), walkers=48, steps=1600)
    axes = [np.linspace(a, b, 160) for a, b in zip(example.LOWEST, example.HIGHEST, strict=True)]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 2)
    density = np.exp(example.log_posterior(points, plan, observed))
    mean = density @ points / density.sum()
    spread = np.sqrt(density @ (points - mean) ** 2 / density.sum())
    # 48 x 800 draws, one in some 60 of them independent: means to 0.04 of the spread, thrice that allowed
    assert np.all(np.abs(draws.mean(axis=0) - mean) < 0.12 * spread)
    assert draws.std(axis=0) == pytest.approx(spread, rel=0.1)


def ranks(plan, assumed_noise, repeats=REPEATS):
    """Where the truth stands among the draws, 0 to 1, for truths drawn from the prior."""
    rng = np.random.default_rng(77)
    out = np.empty((repeats, 2))
    for one in out:
        truth = rng.uniform(example.LOWEST, example.HIGHEST)
        observed = example.invent(plan, truth, rng)
        draws = example.sample(plan, observed, rng, walkers=24, steps=160, assumed_noise=assumed_noise)
        one[:] = (draws < truth).mean(axis=0)
    return out


def covered(found, share):
    return (np.abs(found - 0.5) < share / 2).sum(axis=0)


def bracket(share, repeats=REPEATS):
    """Counts of covered truths that chance leaves but once in a thousand.

    With truths from the prior and abundances from the likelihood, an interval of the posterior
    holds the truth with exactly its share of probability (Cook, Gelman & Rubin 2006, J. Comp. Graph.
    Stat. 15, 675), so the count is binomial. 0.999 for each of four counts: a right sampler would
    fail one seed in 250; an error bar half of what it should be is outside for certain, see below.
    """
    return binom.interval(0.999, repeats, share)


def test_intervals_hold_the_truth_as_often_as_they_say(plan):
    found = ranks(plan, example.NOISE)
    for share in (0.683, 0.9):
        low, high = bracket(share)
        assert np.all((low <= covered(found, share)) & (covered(found, share) <= high))


def test_the_bracket_notices_error_bars_that_are_too_short(plan):
    found = ranks(plan, example.NOISE / 2, repeats=40)
    assert np.all(covered(found, 0.683) < bracket(0.683, repeats=40)[0])
