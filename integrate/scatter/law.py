"""The exact law of the scatter: cumulants of what populations of finite mass eject.

Stars born as a Poisson process make a compound-Poisson sum, whose n-th cumulant is the
integral of the n-th power of a star's yield over the mass function (Campbell's theorem;
Kingman 1993, Poisson Processes, section 3.2):

    mean_i = M int phi y_i dm,   cov_ij = M int phi y_i y_j dm,   third_i = M int phi y_i^3 dm.

Yields are lines or cubics in mass between models, so powers and products of them are
polynomials, and the integrals closed forms. Where a star may end in several ways, the
integrand is the mean over them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..mass_function import MassFunction
from ..weights import dead_integrals
from .outcomes import Outcomes

Array = NDArray[np.float64]

#: rows: basis functions of `Segments` (1 - x and x, or Hermite's cubics); columns: powers of x
_LINES = np.array([[1.0, -1.0], [0.0, 1.0]])
_CUBICS = np.array(
    [[1.0, 0.0, -3.0, 2.0], [0.0, 0.0, 3.0, -2.0], [0.0, 1.0, -2.0, 1.0], [0.0, 0.0, -1.0, 1.0]]
)

#: skewness up to which a Gaussian stands for the law: its probabilities are then off by at most
#: 0.5 / (6 sqrt(2 pi)) = 3 % (the first term of Edgeworth's series)
LEAST_SKEWED = 0.5


@dataclass(frozen=True, eq=False)
class ScatterLaw:
    """Moments of what a population of finite mass has ejected up to each age.

    Attributes
    ----------
    mode : str
        How stars are drawn, see `scatter`.
    stars : float
        Stars born: their mean number, or in mode "number" the number.
    born : float
        Mean mass born, Msun.
    species : tuple of str
    mean : ndarray, shape (t, species)
        Msun.
    covariance : ndarray, shape (t, species, species)
        Msun squared.
    third : ndarray, shape (t, species)
        Third cumulant, Msun cubed. In mode "mass" that of Poisson populations.
    by_source : ndarray, shape (sources, t, species)
        Variances of what each source ejects, Msun squared.
    """

    mode: str
    stars: float
    born: float
    species: tuple[str, ...]
    mean: Array
    covariance: Array
    third: Array
    by_source: Array

    @property
    def sigma(self) -> Array:
        """Standard deviations, shape (t, species), Msun."""
        return np.sqrt(np.maximum(np.einsum("tii->ti", self.covariance), 0.0))

    @property
    def skewness(self) -> Array:
        """Third standardised moments, shape (t, species); 0 where nothing scatters."""
        cube = self.sigma**3
        return np.divide(self.third, cube, out=np.zeros(cube.shape), where=cube > 0)

    @property
    def gaussian(self) -> NDArray[np.bool_]:
        """Whether a Gaussian stands for the law, shape (t, species): skewness up to 0.5 either way."""
        return np.abs(self.skewness) <= LEAST_SKEWED


def scatter_law(
    found: Outcomes,
    imf: MassFunction,
    turnoff: Array,
    ages: Array,
    mass: float,
    mode: str = "poisson",
) -> ScatterLaw:
    """Return the law of the scatter of a population.

    Parameters
    ----------
    found : Outcomes
    imf : MassFunction
    turnoff : ndarray, shape (t,)
        Turn-off masses, Msun, decreasing.
    ages : ndarray, shape (t,)
        yr, increasing.
    mass : float
        Of the population, Msun.
    mode : {"poisson", "number", "mass"}

    Returns
    -------
    ScatterLaw
        Exact for Poisson and fixed numbers of stars. For a fixed mass, where drawing stops
        with the star that reaches it: the laws of renewal theory, whose error dies out
        exponentially once the mass is well above that of the heaviest star. Mean (Wald's
        identity): (M + Q/2) Y, with Y the yield and Q = int m^2 phi dm both per Msun
        formed. Covariance: M int phi (y_i - Y_i m)(y_j - Y_j m) dm.

    Notes
    -----
    Variances of sources in modes "number" and "mass" hold for each source by itself; sources
    then scatter against each other.
    """
    o = len(found.species)
    parts, stellar = found.parts, len(found.kinds)
    ends = found.coefficients.shape[2]
    table = _LINES if ends == 2 else _CUBICS
    mass_column = _own_mass(parts.lo, parts.width, ends)
    y = np.concatenate(
        [
            found.coefficients[..., :o],
            np.broadcast_to(mass_column[:, None, :, None], (*found.coefficients.shape[:3], 1)),
        ],
        axis=3,
    )
    first = dead_integrals(imf, parts, turnoff, ends - 1, lambda m: m.T @ table.T)
    second = dead_integrals(imf, parts, turnoff, 2 * ends - 2, lambda m: _products(m, table))
    powers = dead_integrals(imf, parts, turnoff, 3 * ends - 3, lambda m: m.T)
    likely = found.probability[:, :, None, None] * y
    cubes = np.einsum(
        "sk,skao->sao", found.probability, _cubed(np.einsum("ea,skeo->skao", table, y[..., :o]))
    )
    t = len(turnoff)
    mean = np.zeros((stellar, t, o + 1))
    cov = np.zeros((stellar, t, o + 1, o + 1))
    third = np.einsum("tsa,sao->to", powers, cubes)
    for i in range(stellar):
        mine = parts.owner == i
        mean[i] = np.einsum("tse,skeo->to", first[:, mine], likely[mine])
        for k in range(t):
            weighed = np.einsum("sef,skfo->skeo", second[k, mine], likely[mine])
            cov[i, k] = np.tensordot(weighed, y[mine], axes=([0, 1, 2], [0, 1, 2]))
    late_mean, late_cov, late_third = _late(found, ages, mass, o)
    lo, hi = imf.limits
    numbers = float(imf.number(lo, hi))
    if mode == "number":
        stars = max(1.0, np.floor(mass * numbers + 0.5))
        each = mean / numbers
        total = each.sum(axis=0)
        s2 = np.einsum("tii->ti", cov.sum(axis=0))[:, :o] / numbers
        third = stars * (third / numbers - 3 * total[:, :o] * s2 + 2 * total[:, :o] ** 3)
        covariance = stars * (cov.sum(axis=0) / numbers - _outer(total))
        own = stars * (cov / numbers - each[..., :, None] * each[..., None, :])
        average, born = stars * total, stars / numbers
    elif mode == "mass":
        stars, third = mass * numbers, mass * third
        squared = second_moment(imf)
        covariance = mass * _residual(cov.sum(axis=0), mean.sum(axis=0), squared)
        own = mass * np.array([_residual(c, m, squared) for c, m in zip(cov, mean, strict=True)])
        born = mass + 0.5 * squared
        average, stars = born * mean.sum(axis=0), born * numbers
    else:
        stars, born, third = mass * numbers, mass, mass * third
        average, covariance, own = mass * mean.sum(axis=0), mass * cov.sum(axis=0), mass * cov
    return ScatterLaw(
        mode,
        stars,
        born,
        found.species,
        average[:, :o] + late_mean.sum(axis=0),
        covariance[:, :o, :o] + late_cov.sum(axis=0),
        third + late_third.sum(axis=0),
        np.concatenate([np.einsum("itjj->itj", own)[..., :o], np.einsum("itjj->itj", late_cov)]),
    )


def second_moment(imf: MassFunction) -> float:
    """Return int m^2 phi dm, Msun squared per Msun formed."""
    edges = np.array([imf.limits[0], *imf.breaks, imf.limits[1]])
    return float(imf.moments(edges[:-1], edges[1:], 0.0, 1.0, 2)[2].sum())


def _own_mass(lo: Array, width: Array, ends: int) -> Array:
    """A star's own mass in the basis of the segments, shape (s, e)."""
    return np.stack([lo, lo + width, width, width][:ends], axis=1)


def _products(moments: Array, table: Array) -> Array:
    """Integrals of products of two basis functions, shape (p, e, e)."""
    at = np.add.outer(np.arange(table.shape[1]), np.arange(table.shape[1]))
    return np.einsum("ea,abp,fb->pef", table, moments[at], table)


def _cubed(powers: Array) -> Array:
    """The cubes of polynomials, by powers of x along the third axis."""
    out = powers
    for _ in range(2):
        longer = np.zeros((*out.shape[:2], out.shape[2] + powers.shape[2] - 1, out.shape[3]))
        for a in range(powers.shape[2]):
            longer[:, :, a : a + out.shape[2]] += out * powers[:, :, a : a + 1]
        out = longer
    return out


def _outer(values: Array) -> Array:
    return values[..., :, None] * values[..., None, :]


def _residual(second: Array, mean: Array, squared: float) -> Array:
    """Int phi (y_i - Y_i m)(y_j - Y_j m) dm, stars that live on included: their y is 0."""
    with_mass = second[..., -1]
    cross = mean[..., :, None] * with_mass[..., None, :]
    return second - cross - np.swapaxes(cross, -1, -2) + squared * _outer(mean)


def _late(found: Outcomes, ages: Array, mass: float, o: int) -> tuple[Array, Array, Array]:
    """Cumulants of delayed events, by source: Poisson numbers of events of each class."""
    count, t = len(found.late), len(ages)
    mean, third, cov = np.zeros((count, t, o)), np.zeros((count, t, o)), np.zeros((count, t, o, o))
    for i, late in enumerate(found.late):
        events = mass * late.number * np.asarray(late.delay.fraction(ages))
        rows = late.rows[:, :o]
        mean[i] = events[:, None] * (late.shares @ rows)
        cov[i] = events[:, None, None] * np.einsum("c,ci,cj->ij", late.shares, rows, rows)
        third[i] = events[:, None] * (late.shares @ rows**3)
    return mean, cov, third
