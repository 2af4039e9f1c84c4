"""A plan: a population prepared once, for calls with a few free numbers."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from steelyard.yields.errors import InputError
from steelyard.yields.units import plain

from .batch import batch
from .jacobian import jacobian, jvp, vjp
from .leverage import Model, model_vjp, model_weights, models
from .workings import Workings

Array = NDArray[np.float64]


class Plan(Workings):
    """A population prepared for many calls with a few free parameters.

    Parameters
    ----------
    population : Population
        Its mass function must be analytic (not a callable).
    free : sequence of str
        Names of free parameters, see `steelyard.integrate.plan.parameters`.
    ages : array_like, optional
        yr, increasing or not; default: the population's own.
    convention : {"total", "net"}
    by_source : bool
        Keep sources apart in the results.

    Attributes
    ----------
    species, sources : tuple of str
    ages : ndarray, shape (t,)
        yr.
    start : ndarray, shape (p,)
        The population's own values of the free parameters.

    Raises
    ------
    InputError
        A free parameter isn't known, or the population can't be planned.

    Examples
    --------
    >>> from steelyard.integrate import Plan, Population, StellarSource
    >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O", "Fe"])
    >>> plan = Plan(stars, free=["imf.slopes[-1]"], ages=["30 Myr"])
    >>> steep, flat = plan([2.7]), plan([2.3])
    >>> bool(np.all(steep < flat))
    True
    """

    def __repr__(self) -> str:
        kinds = ", ".join(self.sources)
        free = ", ".join(self.free) or "nothing"
        return (
            f"Plan({self.convention} yields of {kinds}: {len(self.ages)} ages x {len(self.species)} species,"
            f" free: {free})"
        )

    def __call__(self, theta: ArrayLike = (), out: Array | None = None) -> Array:
        """Weigh the population at values of the free parameters.

        Parameters
        ----------
        theta : array_like, shape (p,)
            In the order of `free`; masses in Msun, times in yr.
        out : ndarray of float64, optional
            Buffer of the result's shape to write into.

        Returns
        -------
        ndarray, shape (t, species) or (sources, t, species)
            Msun per Msun formed.

        Raises
        ------
        InputError
            Wrong number of values, or values that make no population.
        """
        theta = self.check(theta, 1)
        if out is None:
            out = np.empty(self.shape)
        elif out.shape != self.shape or out.dtype != np.float64:
            raise InputError(f"out is {out.dtype} of shape {out.shape}, not float64 of {self.shape}")
        self.fill(theta[None], self.ground(theta), out[None])
        return out

    def batch(
        self,
        thetas: ArrayLike,
        out: NDArray[Any] | None = None,
        dtype: Any = np.float64,
        memory: Any = 2**30,
        threads: int | None = None,
    ) -> NDArray[Any]:
        """Weigh the population at many sets of values.

        Each row is worked out on its own: its digits are those of ``plan(theta)``, whatever
        the rows beside it, the memory and the threads.

        Parameters
        ----------
        thetas : array_like, shape (n, p)
        out : ndarray, optional
            Buffer of shape (n, *shape), float64 or float32.
        dtype : {float64, float32}
            Of the result where no `out` is given; all sums are made in float64.
        memory : int or str
            What may be used at most, in byte, the result included unless it is given: text
            such as ``"1 GiB"`` is read too.
        threads : int, optional
            Default: as many as there are cores for the process.

        Returns
        -------
        ndarray, shape (n, t, species) or (n, sources, t, species)
            Msun per Msun formed.

        Raises
        ------
        InputError
            Wrong shapes, values that make no population, or a result that memory has no room for.

        Examples
        --------
        >>> from steelyard.integrate import Plan, Population, StellarSource
        >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
        >>> plan = Plan(stars, free=["imf.slopes[-1]"], ages=["30 Myr"])
        >>> many = plan.batch([[2.3], [2.5], [2.7]])
        >>> many.shape, bool(np.all(many[1] == plan([2.5])))
        ((3, 1, 1), True)
        """
        return batch(self, thetas, out, dtype, memory, threads)

    def jacobian(self, theta: ArrayLike = ()) -> tuple[Array, Array]:
        """Return the result and its derivatives to the free parameters, in closed form.

        At a kink the derivative is one-sided: where a metallicity is one of a set's own, that just
        above it (below, where the population refuses to go higher); where an age is a node of
        the lifetimes or a limit of a delay, as it holds just after the age.

        Parameters
        ----------
        theta : array_like, shape (p,)

        Returns
        -------
        value : ndarray, shape (*shape)
        jacobian : ndarray, shape (p, *shape)

        Raises
        ------
        InputError
            Values that make no population, or a parameter without a closed derivative, such as
            a number of a broken power law or tabulated delay.

        Examples
        --------
        >>> from steelyard.integrate import Plan, Population, StellarSource
        >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
        >>> plan = Plan(stars, free=["imf.slopes[-1]", "metallicity"], ages=["30 Myr"])
        >>> value, jacobian = plan.jacobian([2.3, 0.01])
        >>> h = 1e-5
        >>> rise = (plan([2.3 + h, 0.01]) - plan([2.3 - h, 0.01])) / (2 * h)
        >>> bool(abs(jacobian[0] / rise - 1).max() < 1e-8)
        True
        """
        return jacobian(self, self.check(theta, 1))

    def jvp(self, theta: ArrayLike, direction: ArrayLike) -> tuple[Array, Array]:
        """Return the result and its derivative along a direction in the free parameters.

        Parameters
        ----------
        theta, direction : array_like, shape (p,)

        Returns
        -------
        value, derivative : ndarray, shape (*shape)

        Raises
        ------
        InputError
            As for `jacobian`.
        """
        return jvp(self, self.check(theta, 1), self.check(direction, 1))

    def vjp(self, theta: ArrayLike, cotangent: ArrayLike) -> tuple[Array, Array]:
        """Return the result and the gradient that a cotangent pulls back, as gradient samplers need it.

        Parameters
        ----------
        theta : array_like, shape (p,)
        cotangent : array_like, shape (*shape)
            Derivative of a scalar to the result.

        Returns
        -------
        value : ndarray, shape (*shape)
        gradient : ndarray, shape (p,)
            Derivative of the scalar to theta.

        Raises
        ------
        InputError
            As for `jacobian`, or a cotangent of another shape than the result.
        """
        return vjp(self, self.check(theta, 1), self._cotangent(cotangent))

    @cached_property
    def models(self) -> tuple[Model, ...]:
        """All published models of the plan's sets, (set, metallicity, mass): the labels of `weights`."""
        return models(self)

    def weights(self, theta: ArrayLike = ()) -> Array:
        """Return the derivative of the result to each published model's yield.

        It is the same for every species, in total and net alike, scale factors left out.

        Parameters
        ----------
        theta : array_like, shape (p,)

        Returns
        -------
        ndarray, shape (t, models) or (sources, t, models)
            Stars, or events, per Msun formed; in the order of `models`.

        Raises
        ------
        InputError
            Values that make no population, or cubic interpolation, which isn't linear in the models.

        Examples
        --------
        >>> from steelyard.integrate import Plan, Population, StellarSource
        >>> stars = Population(0.02, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
        >>> plan = Plan(stars, ages=["30 Myr"])
        >>> heaviest = plan.models[plan.weights()[0].argmax()]
        >>> heaviest.set, heaviest.metallicity, heaviest.mass
        ('kobayashi-2006', 0.02, 15.0)
        """
        return model_weights(self, self.check(theta, 1))

    def vjp_models(self, theta: ArrayLike, cotangent: ArrayLike) -> Array:
        """Return what a cotangent pulls back to the published yields.

        Parameters
        ----------
        theta : array_like, shape (p,)
        cotangent : array_like, shape (*shape)

        Returns
        -------
        ndarray, shape (models, species)
            Derivative of the scalar to each model's yield of each species.

        Raises
        ------
        InputError
            As for `weights`, or scale factors in a plan that adds up its sources.
        """
        return model_vjp(self, self.check(theta, 1), self._cotangent(cotangent))

    def _cotangent(self, cotangent: ArrayLike) -> Array:
        out = np.asarray(cotangent, dtype=float)
        if out.shape != self.shape:
            raise InputError(f"cotangent has shape {out.shape}, not {self.shape}")
        return out


def theta_from(plan: Plan, values: Mapping[str, Any]) -> Array:
    """Return theta with some parameters set by name, the others at the population's own values.

    Parameters
    ----------
    plan : Plan
    values : mapping
        From a free parameter's name to a number, text or Quantity.

    Returns
    -------
    ndarray, shape (p,)

    Raises
    ------
    InputError
        A name isn't free.
    """
    theta = plan.start.copy()
    units = {"break": "Msun", "limit": "Msun", "events_from": "Msun", "number": "1/Msun"}
    for name, value in values.items():
        if name not in plan.free:
            raise InputError(f"{name!r} isn't free", mend=f"free are {', '.join(plan.free)}")
        p = plan.parameters[plan.free.index(name)]
        timed = p.kind == "delay" and p.key in ("limits", "timescale", "breaks")
        theta[plan.free.index(name)] = plain(value, "yr" if timed else units.get(p.kind, ""), name)
    return theta
