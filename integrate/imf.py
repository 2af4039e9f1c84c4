"""Initial mass functions: stars per unit mass, normalised to 1 Msun formed over their own limits."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from itertools import pairwise
from math import log
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.yields.errors import InputError, nearest
from steelyard.yields.units import plain

from .mass_function import AnalyticIMF, CallableIMF, MassFunction, gauss
from .moments import Piece, lognormal_piece, power_piece

__all__ = ["FORMS", "AnalyticIMF", "CallableIMF", "MassFunction", "from_function", "imf"]

Array = NDArray[np.float64]


def _limits(limits: Any, default: tuple[float, float]) -> tuple[float, float]:
    if limits is None:
        return default
    values = np.atleast_1d(plain(limits, "Msun", "imf.limits"))
    if values.shape != (2,):
        raise InputError("imf.limits needs two masses", mend='such as ["0.08 Msun", "120 Msun"]')
    lo, hi = (float(v) for v in values)
    if lo <= 0:
        raise InputError(f"imf.limits begins at {lo:g} Msun", mend="give a positive lowest mass")
    if lo >= hi:
        raise InputError(
            f"imf.limits has its lowest mass {lo:g} not below its highest {hi:g} Msun",
            mend="write the lower mass first",
        )
    return lo, hi


def _normalised(form: str, parameters: Mapping[str, Any], pieces: Sequence[Piece]) -> AnalyticIMF:
    raw = AnalyticIMF(form, parameters, tuple(pieces))
    shift = log(float(raw.mass(*raw.limits)))
    return replace(raw, pieces=tuple(replace(p, log_a=p.log_a - shift) for p in raw.pieces))


def _cut(pieces: Sequence[Piece], lo: float, hi: float) -> list[Piece]:
    """The pieces between two masses; the first and last reach as far as asked."""
    first, last = pieces[0], pieces[-1]
    stretched = [replace(p, lo=0.0 if p is first else p.lo, hi=np.inf if p is last else p.hi) for p in pieces]
    return [replace(p, lo=max(p.lo, lo), hi=min(p.hi, hi)) for p in stretched if p.lo < hi and p.hi > lo]


def _joined(slopes: Sequence[float], breaks: Sequence[float]) -> list[Piece]:
    edges = [0.0, *breaks, np.inf]
    pieces = [Piece(edges[0], edges[1], 0.0, slopes[0])]
    for i, slope in enumerate(slopes[1:], start=1):
        log_a = pieces[-1].log_a + (slope - slopes[i - 1]) * log(edges[i])
        pieces.append(Piece(edges[i], edges[i + 1], log_a, slope))
    return pieces


def power_law(
    slopes: Any, breaks: Any = (), limits: Any = (0.08, 120.0), form: str = "power-law"
) -> AnalyticIMF:
    """Return a broken power law, continuous at its breaks.

    Parameters
    ----------
    slopes : float or sequence of float
        alpha of phi ~ m^-alpha (Salpeter: 2.35), from low mass to high.
    breaks : sequence
        Masses where the slope changes, Msun, one fewer than slopes.
    limits : sequence
        Lowest and highest mass, Msun.
    form : str
        Name under which the form is written to a population file.

    Returns
    -------
    AnalyticIMF

    Raises
    ------
    InputError
        Numbers of slopes and breaks don't fit, breaks don't increase, or limits are
        not in order.

    Examples
    --------
    >>> imf = power_law([1.3, 2.3], breaks=[0.5], limits=(0.08, 120))
    >>> float(imf.mass(0.08, 120).round(12))
    1.0
    """
    slopes = np.atleast_1d(plain(slopes, "", "imf.slopes")).tolist()
    breaks = np.atleast_1d(plain(breaks, "Msun", "imf.breaks")).tolist() if len(np.atleast_1d(breaks)) else []
    lo, hi = _limits(limits, (0.08, 120.0))
    if len(slopes) != len(breaks) + 1:
        raise InputError(
            f"imf has {len(slopes)} slopes for {len(breaks)} breaks", mend="give one break fewer than slopes"
        )
    if any(b <= a for a, b in pairwise([0.0, *breaks])):
        raise InputError(f"imf.breaks don't increase: {breaks}", mend="list them from low mass to high")
    parameters = {"slopes": slopes, "breaks": breaks} if form == "power-law" else {}
    return _normalised(form, parameters, _cut(_joined(slopes, breaks), lo, hi))


def salpeter_1955(limits: Any = (0.1, 100.0)) -> AnalyticIMF:
    """Return the mass function of Salpeter (1955, ApJ 121, 161): slope 2.35."""
    return power_law([2.35], [], limits, "salpeter-1955")


def kroupa_2001(limits: Any = (0.08, 120.0)) -> AnalyticIMF:
    """Return the mass function of Kroupa (2001, MNRAS 322, 231): 0.3 / 1.3 / 2.3, breaks 0.08 and 0.5 Msun.

    Examples
    --------
    >>> float(kroupa_2001().number(8, 120).round(13))
    0.0109123948905
    """
    return power_law([0.3, 1.3, 2.3], [0.08, 0.5], limits, "kroupa-2001")


def kroupa_1993(limits: Any = (0.08, 120.0)) -> AnalyticIMF:
    """Return that of Kroupa, Tout & Gilmore (1993, MNRAS 262, 545): 1.3 / 2.2 / 2.7, breaks 0.5, 1 Msun."""
    return power_law([1.3, 2.2, 2.7], [0.5, 1.0], limits, "kroupa-1993")


def _chabrier(form: str, centre: float, sigma: float, limits: Any) -> AnalyticIMF:
    lo, hi = _limits(limits, (0.08, 120.0))
    low = lognormal_piece(0.0, 1.0, centre, sigma)
    high = power_piece(1.0, np.inf, 2.3, float(low(1.0)))
    return _normalised(form, {}, _cut([low, high], lo, hi))


def chabrier_2003(limits: Any = (0.08, 120.0)) -> AnalyticIMF:
    """Return the single-star mass function of Chabrier (2003, PASP 115, 763).

    Lognormal (0.079 Msun, 0.69 dex) below 1 Msun, slope 2.3 above, made continuous at 1 Msun.
    """
    return _chabrier("chabrier-2003", 0.079, 0.69, limits)


def chabrier_2003_system(limits: Any = (0.08, 120.0)) -> AnalyticIMF:
    """Return the system mass function of Chabrier (2003, PASP 115, 763).

    Lognormal (0.22 Msun, 0.57 dex) below 1 Msun, slope 2.3 above, made continuous at 1 Msun.
    """
    return _chabrier("chabrier-2003-system", 0.22, 0.57, limits)


def miller_scalo_1979(limits: Any = (0.1, 100.0)) -> AnalyticIMF:
    """Return the half-lognormal of Miller & Scalo (1979, ApJS 41, 513).

    xi(log10 m) ~ exp(-1.09 (log10 m + 1.02)^2), their fit for a constant birth rate over
    12 Gyr (constants from memory).
    """
    lo, hi = _limits(limits, (0.1, 100.0))
    piece = lognormal_piece(lo, hi, 10**-1.02, (2 * 1.09) ** -0.5)
    return _normalised("miller-scalo-1979", {}, [piece])


def lognormal(centre: Any, sigma: Any, limits: Any = (0.08, 120.0)) -> AnalyticIMF:
    """Return a lognormal mass function.

    Parameters
    ----------
    centre : float
        Mass at the peak in stars per unit log mass, Msun.
    sigma : float
        Width in dex.
    limits : sequence
        Lowest and highest mass, Msun.

    Returns
    -------
    AnalyticIMF
    """
    lo, hi = _limits(limits, (0.08, 120.0))
    centre, sigma = plain(centre, "Msun", "imf.centre"), plain(sigma, "", "imf.sigma")
    if centre <= 0 or sigma <= 0:
        raise InputError(f"imf.centre and imf.sigma must be positive, not {centre:g} and {sigma:g}")
    parameters = {"centre": centre, "sigma": sigma}
    return _normalised("lognormal", parameters, [lognormal_piece(lo, hi, centre, sigma)])


def from_function(
    function: Callable[[Array], Array], limits: Any, breaks: Sequence[float] = ()
) -> CallableIMF:
    """Return a mass function from any function of mass.

    Parameters
    ----------
    function : callable
        phi(m) up to a factor, for an array of masses in Msun.
    limits : sequence
        Lowest and highest mass, Msun.
    breaks : sequence of float
        Masses where it or its slope jumps, Msun.

    Returns
    -------
    CallableIMF
        Its `error` estimates the relative error of the quadrature.

    Raises
    ------
    InputError
        The function is negative, not finite, or zero throughout.

    Examples
    --------
    >>> imf = from_function(lambda m: m**-2.35, limits=(0.1, 100))
    >>> bool(abs(imf.number(8, 40) / salpeter_1955().number(8, 40) - 1) < 1e-13)
    True
    """
    lo, hi = _limits(limits, (0.08, 120.0))
    given = np.atleast_1d(plain(breaks, "Msun", "breaks")).tolist() if len(breaks) else []
    inner = sorted(b for b in given if lo < b < hi)
    edges = np.array([lo, *inner, hi])
    zero, one = np.zeros(len(edges) - 1), np.ones(len(edges) - 1)
    fine = gauss(function, edges[:-1], edges[1:], zero, one, 1, 32)
    coarse = gauss(function, edges[:-1], edges[1:], zero, one, 1, 24)
    total = fine[1].sum()
    if total <= 0:
        raise InputError("the mass function is zero inside its limits", where="imf")
    error = float(np.max(abs(fine - coarse) / fine.sum(axis=1, keepdims=True)))
    return CallableIMF(function, (lo, hi), tuple(inner), 1.0 / total, error)


#: mass functions by their name in a population file; a new one is a function and a line here
FORMS: dict[str, Callable[..., AnalyticIMF]] = {
    "salpeter-1955": salpeter_1955,
    "kroupa-2001": kroupa_2001,
    "kroupa-1993": kroupa_1993,
    "chabrier-2003": chabrier_2003,
    "chabrier-2003-system": chabrier_2003_system,
    "miller-scalo-1979": miller_scalo_1979,
    "power-law": power_law,
    "lognormal": lognormal,
}


def imf(form: str, **parameters: Any) -> AnalyticIMF:
    """Return a mass function by name.

    Parameters
    ----------
    form : str
        One of `FORMS`.
    **parameters
        ``limits``; ``slopes`` and ``breaks`` of a power law; ``centre`` and ``sigma`` of a lognormal.

    Returns
    -------
    AnalyticIMF

    Raises
    ------
    InputError
        No such form, or a parameter it doesn't take.

    Examples
    --------
    >>> imf("kroupa-2001", limits=("0.08 Msun", "120 Msun")).breaks
    (0.5,)
    """
    if form not in FORMS:
        raise InputError(f"imf.form {form!r} isn't known", mend=nearest(form, FORMS))
    make = FORMS[form]
    known = [n for n in make.__code__.co_varnames[: make.__code__.co_argcount] if n != "form"]
    for key in parameters:
        if key not in known:
            raise InputError(f"imf.{key} isn't a parameter of {form}", mend=nearest(key, known))
    missing = {"power-law": ["slopes"], "lognormal": ["centre", "sigma"]}.get(form, [])
    for key in missing:
        if key not in parameters:
            raise InputError(f"imf of form {form} needs {key}", mend=f"add {key} to [imf]")
    return make(**parameters)
