"""The weight of every published model in a plan's results: derivatives to the published yields.

A result is linear in the yields of the models, and no species knows of another, so
dE_i / dY_(model, i) is one number a model and age, the same for all species.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError

from ..sources import StellarSource
from .coefficients import mixture_shares, slice_weights

if TYPE_CHECKING:
    from .plan import Plan

Array = NDArray[np.float64]


class Model(NamedTuple):
    """One published model, or the event of a delayed source.

    Attributes
    ----------
    set : str
        Id of its set.
    metallicity : float
    mass : float
        Initial mass, Msun; of an event the mass ejected.
    """

    set: str
    metallicity: float
    mass: float


def models(plan: Plan) -> tuple[Model, ...]:
    """List the models of all sets of the plan, at all their metallicities; see `Plan.models`."""
    found = [
        Model(grid.id, one.metallicity, float(mass))
        for source in plan.population.sources
        for entry in source.sets
        for grid in entry.load(plan.population.solar)
        for one in grid.slices
        for mass in one.mass
    ]
    return tuple(dict.fromkeys(found))


def model_weights(plan: Plan, theta: Array) -> Array:
    """Return the weights of the models; see `Plan.weights`."""
    if plan.population.interpolation != "linear":
        raise InputError(
            "models have no weights with cubic interpolation, whose slopes follow several of them",
            mend='take interpolation = "linear"',
        )
    ground, values = plan.ground(theta), plan.values(theta)
    weights, _ = ground.weights(plan.slopes(theta[None]))
    full = ground.spread(weights, plan.events(theta[None]))[0]
    slices, _, _ = slice_weights(plan.population, plan.metallicity(values), plan.shares(values))
    layout = ground.layout
    kept = ground.geometry.parent[ground.geometry.kept]
    share = np.tensordot(slices, layout.share, axes=1)[kept].reshape(-1, len(layout.models))
    place = {model: k for k, model in enumerate(plan.models)}
    local = np.array([place[Model(*model)] for model in layout.models])
    out = np.zeros((len(plan.sources), len(plan.ages), len(plan.models)))
    for i, source in enumerate(plan.population.sources):
        block = plan.block(ground, i)
        if isinstance(source, StellarSource):
            np.add.at(out[i], (slice(None), local), full[:, block] @ share[block])
            continue
        parts, _ = mixture_shares(source.sets[0], plan.delayed_shares(source, values))
        for part, grid in zip(parts, source.sets[0].load(plan.population.solar), strict=True):
            one = Model(grid.id, grid.slices[0].metallicity, float(grid.slices[0].mass[0]))
            out[i, :, place[one]] += part * full[:, block.start]
    return out if plan.by_source else out.sum(axis=0)


def model_vjp(plan: Plan, theta: Array, cotangent: Array) -> Array:
    """Return the product of a cotangent with the derivatives to all yields; see `Plan.vjp_models`."""
    weights = model_weights(plan, theta)
    if not plan.by_source:
        if plan.scaled:
            raise InputError(
                "scale factors act on single sources, which this plan adds up",
                mend="make the plan with by_source=True",
            )
        return weights.T @ cotangent
    factors = np.ones((len(plan.sources), len(plan.species)))
    for at, source, species in plan.scaled:
        factors[source, species] *= theta[at]
    return np.einsum("stk,sto,so->ko", weights, cotangent, factors, optimize=True)
