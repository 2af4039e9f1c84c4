"""Recover the slope of the mass function and the number of Type Ia supernovae from abundances.

The abundances are invented: those of all that one old population has ejected in 10 Gyr, at a slope
and a number that the script knows, with noise of 0.03 dex. An affine-invariant ensemble sampler
(Goodman & Weare 2010, as in emcee) then finds both again. The plan is prepared once, and all walkers
of a step are weighed in one call.

    python -m steelyard.scripts.examples.recover_slope
"""

import numpy as np

from steelyard.integrate import DelayedSource, Join, Plan, Population, StellarSource
from steelyard.yields.composition import abundance_ratio

ELEMENTS = ("C", "N", "O", "Ne", "Mg", "Si", "S", "Ca", "Ni")
FREE = ("imf.slopes[-1]", "thermonuclear.number")
TRUTH = np.array([2.45, 1.6e-3])
NOISE = 0.03

#: flat priors: slope of stars above 0.5 Msun, events per Msun formed
LOWEST, HIGHEST = np.array([1.8, 3e-4]), np.array([3.0, 4e-3])


def prepare() -> Plan:
    """Prepare the population, its slope and number of Type Ia supernovae free."""
    sources = [
        StellarSource("agb", ["karakas-2010", "doherty-2014"]),
        StellarSource("core-collapse", ["kobayashi-2006"]),
        DelayedSource("thermonuclear", ["nomoto-1997-w7"], number=1.3e-3, delay="maoz-graur-2017"),
    ]
    joins = [Join(("agb", "core-collapse"))]
    return Plan(Population(0.02, sources, joins=joins, species=[*ELEMENTS, "Fe"]), FREE, ages=["10 Gyr"])


def abundances(plan: Plan, thetas: np.ndarray) -> np.ndarray:
    """Return [X/Fe] of the ejecta, shape (n, elements), for parameters of shape (n, 2)."""
    masses = plan.batch(thetas)[:, 0]
    iron = masses[:, plan.species.index("Fe")]
    solar = plan.population.solar
    ratios = [abundance_ratio(masses[:, plan.species.index(x)], iron, x, "Fe", solar) for x in ELEMENTS]
    return np.stack(ratios, axis=1)


def invent(plan: Plan, truth: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Invent observed [X/Fe]: the truth, with noise."""
    return abundances(plan, truth[None])[0] + NOISE * rng.normal(size=len(ELEMENTS))


def log_posterior(
    thetas: np.ndarray, plan: Plan, observed: np.ndarray, assumed_noise: float = NOISE
) -> np.ndarray:
    """Return the log of the posterior density, shape (n,), but for a constant."""
    out = np.full(len(thetas), -np.inf)
    inside = np.all((thetas > LOWEST) & (thetas < HIGHEST), axis=1)
    if inside.any():
        off = (abundances(plan, thetas[inside]) - observed) / assumed_noise
        out[inside] = -0.5 * (off**2).sum(axis=1)
    return out


def sample(
    plan: Plan,
    observed: np.ndarray,
    rng: np.random.Generator,
    walkers: int = 32,
    steps: int = 2000,
    assumed_noise: float = NOISE,
) -> np.ndarray:
    """Draw from the posterior; the first half of the steps is left out.

    Returns
    -------
    ndarray, shape (draws, 2)
    """
    import emcee

    # walkers begin where the posterior is, found among draws from the prior
    draws = rng.uniform(LOWEST, HIGHEST, size=(50 * walkers, 2))
    density = log_posterior(draws, plan, observed, assumed_noise)
    weight = np.exp(density - density.max())
    start = draws[rng.choice(len(draws), walkers, p=weight / weight.sum())]
    # no two at the same place, or all would move along a line; none outside the prior
    width = HIGHEST - LOWEST
    start += 1e-3 * width * rng.normal(size=start.shape)
    start = np.clip(start, LOWEST + 1e-6 * width, HIGHEST - 1e-6 * width)
    arguments = (plan, observed, assumed_noise)
    sampler = emcee.EnsembleSampler(walkers, 2, log_posterior, args=arguments, vectorize=True)
    sampler.random_state = np.random.RandomState(int(rng.integers(2**32))).get_state()
    sampler.run_mcmc(start, steps)
    return sampler.get_chain(discard=steps // 2, flat=True)


def main() -> None:
    """Recover both, and print what came out."""
    rng = np.random.default_rng(2024)
    plan = prepare()
    observed = invent(plan, TRUTH, rng)
    print(
        "invented abundances:",
        ", ".join(f"[{x}/Fe] {v:+.2f}" for x, v in zip(ELEMENTS, observed, strict=True)),
    )
    draws = sample(plan, observed, rng)
    for name, truth, values in zip(FREE, TRUTH, draws.T, strict=True):
        low, middle, high = np.quantile(values, (0.1587, 0.5, 0.8413))
        print(f"{name}: {middle:.4g}, 68 % between {low:.4g} and {high:.4g}; the truth is {truth:.4g}")


if __name__ == "__main__":
    main()
