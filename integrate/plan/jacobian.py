"""Closed-form derivatives of a plan's results to its free parameters, and their products with vectors.

A result is weights times coefficients (see `state`). Each free parameter moves the weights
of stars, the weights of events, or the coefficients, as `tangents` works out.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .state import Ground
from .tangents import Pulled, Tangents, beside, tangents

if TYPE_CHECKING:
    from .plan import Plan

Array = NDArray[np.float64]


def jacobian(plan: Plan, theta: Array) -> tuple[Array, Array]:
    """Return the value and its derivatives; see `Plan.jacobian`."""
    z, near = beside(plan, theta)
    value, out = _jacobian(plan, theta)
    if near is not None:
        out[z] = _jacobian(plan, near)[1][z]
    return value, out


def _jacobian(plan: Plan, theta: Array) -> tuple[Array, Array]:
    at = tangents(plan, theta)
    value = np.empty(plan.shape)
    plan.multiply(at.weights[None], at.matrix, at.ground, value[None])
    out = np.empty((len(plan.parameters), *plan.shape))
    whole = _of_stars(plan, at, value)
    for one in at.stars:
        _by_pulled(plan, at, one, whole, out[one.index])
    for i in set(range(len(out))) - {one.index for one in at.stars}:
        out[i] = 0.0
    for i, column, moved in at.events:
        for _, target in _targets(plan, at.ground, slice(column, column + 1), out[i]):
            np.multiply(moved[:, None], at.matrix[column], out=target)
    for one in at.moved:
        for rows, target in _targets(plan, at.ground, one.rows, out[one.index]):
            inner = slice(rows.start - one.rows.start, rows.stop - one.rows.start)
            target[:, one.species] += at.weights[:, rows] @ one.matrix[inner]
    return value, out


def _of_stars(plan: Plan, at: Tangents, value: Array) -> Array:
    """The part of a result that stars eject."""
    if not plan.clocks:
        return value
    if plan.by_source:
        late = np.array([s not in plan.stellar for s in plan.population.sources])
        return np.where(late[:, None, None], 0.0, value)
    return at.weights[:, at.stellar] @ at.matrix[at.stellar]


def _by_pulled(plan: Plan, at: Tangents, one: Pulled, whole: Array, out: Array) -> None:
    if one.own is None:
        np.multiply(whole, one.factor, out=out)
    else:
        plan.multiply(one.own[None], at.matrix, at.ground, out[None])
        if one.factor:
            out += one.factor * whole
    for columns, value in one.strips:
        for rows, target in _targets(plan, at.ground, columns, out):
            target += value @ at.matrix[rows]


def _targets(plan: Plan, ground: Ground, rows: slice, out: Array) -> list[tuple[slice, Array]]:
    """The part of a result that some columns add to: all of it, or one source each."""
    if not plan.by_source:
        return [(rows, out)]
    found = []
    for i in range(len(plan.sources)):
        block = plan.block(ground, i)
        start, stop = max(rows.start, block.start), min(rows.stop, block.stop)
        if stop > start:
            found.append((slice(start, stop), out[i]))
    return found


def jvp(plan: Plan, theta: Array, direction: Array) -> tuple[Array, Array]:
    """Return the value and its derivative along a direction; see `Plan.jvp`."""
    z, near = beside(plan, theta)
    if near is None:
        return _jvp(plan, theta, direction)
    only = np.arange(len(theta)) == z
    value, along = _jvp(plan, theta, np.where(only, 0.0, direction))
    return value, along + _jvp(plan, near, np.where(only, direction, 0.0))[1]


def _jvp(plan: Plan, theta: Array, direction: Array) -> tuple[Array, Array]:
    at = tangents(plan, theta)
    weights = np.zeros(at.weights.shape)
    weights[:, at.stellar] = at.weights[:, at.stellar] * sum(direction[p.index] * p.factor for p in at.stars)
    for pulled in at.stars:
        if pulled.own is not None:
            weights += direction[pulled.index] * pulled.own
        for columns, amount in pulled.strips:
            weights[:, columns] += direction[pulled.index] * amount
    for i, column, moved in at.events:
        weights[:, column] += direction[i] * moved
    coefficients = np.zeros(at.matrix.shape)
    for one in at.moved:
        coefficients[one.rows, one.species] += direction[one.index] * one.matrix
    value, along, more = (np.empty((1, *plan.shape)) for _ in range(3))
    plan.multiply(at.weights[None], at.matrix, at.ground, value)
    plan.multiply(weights[None], at.matrix, at.ground, along)
    plan.multiply(at.weights[None], coefficients, at.ground, more)
    return value[0], along[0] + more[0]


def vjp(plan: Plan, theta: Array, cotangent: Array) -> tuple[Array, Array]:
    """Return the value and the product of a cotangent with the Jacobian; see `Plan.vjp`."""
    z, near = beside(plan, theta)
    value, out = _vjp(plan, theta, cotangent)
    if near is not None:
        out[z] = _vjp(plan, near, cotangent)[1][z]
    return value, out


def _vjp(plan: Plan, theta: Array, cotangent: Array) -> tuple[Array, Array]:
    at = tangents(plan, theta)
    value = np.empty((1, *plan.shape))
    plan.multiply(at.weights[None], at.matrix, at.ground, value)
    by_weight, by_coefficient = np.zeros(at.weights.shape), np.zeros(at.matrix.shape)
    for rows, part in _targets(plan, at.ground, slice(0, len(at.matrix)), cotangent):
        by_weight[:, rows] = part @ at.matrix[rows].T
        by_coefficient[rows] = at.weights[:, rows].T @ part
    out = np.zeros(len(plan.parameters))
    together = np.sum(at.weights[:, at.stellar] * by_weight[:, at.stellar])
    for pulled in at.stars:
        out[pulled.index] = pulled.factor * together
        if pulled.own is not None:
            out[pulled.index] += np.sum(pulled.own * by_weight)
        for columns, amount in pulled.strips:
            out[pulled.index] += np.sum(amount * by_weight[:, columns])
    for i, column, moved in at.events:
        out[i] += moved @ by_weight[:, column]
    for one in at.moved:
        out[one.index] += np.sum(one.matrix * by_coefficient[one.rows, one.species])
    return value[0], out
