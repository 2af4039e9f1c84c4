"""How many digits of a figure are printed: as its error asks for, or as many as are wanted."""

from __future__ import annotations

from decimal import Decimal
from math import floor, log, log1p, log10, sqrt

#: of a double
MOST_DIGITS = 15

#: of a yield; a smaller error is none: next to all of the yield returns as it was at birth
NEGLIGIBLE = 1e-5


def last_place(error: float) -> int:
    """Return the power of ten of the last digit that an error lets stand.

    By the rule of the Particle Data Group (Review of Particle Physics, introduction, from memory):
    where the first three digits of the error lie between 100 and 354, two digits of it are kept,
    between 355 and 949 one, and from 950 on it rounds to 1000, of which two are kept.

    Parameters
    ----------
    error : float
        Above 0.

    Examples
    --------
    >>> last_place(0.0123), last_place(0.0456), last_place(0.0967)
    (-3, -2, -2)
    """
    lead, power = f"{error:.2e}".split("e")
    return int(power) - (1 if int(lead.replace(".", "")) < 355 else 0)


def significant(value: float, digits: int) -> int:
    """Return the power of ten of the last of some significant digits; 0 of the value 0.

    Examples
    --------
    >>> significant(0.001234, 3), significant(0.009999, 3)
    (-5, -4)
    """
    return int(f"{value:.{digits - 1}e}".split("e")[1]) - digits + 1 if value else 0


def places(value: float, error: float, digits: int) -> int:
    """Return the last place of a value: by its error where there is one, otherwise by `digits`."""
    if not error:
        return significant(value, digits)
    return last_place(error)


def scaled(value: float, error: float, last: int) -> tuple[str, str, int]:
    """Return a value and its error over one power of ten.

    Parameters
    ----------
    value, error : float
    last : int
        Power of ten of the last digit.

    Returns
    -------
    value, error : str
        One digit before the point in the larger of them; no error where it is 0.
    power : int

    Examples
    --------
    >>> scaled(0.0010736, 0.000157, -5)
    ('1.07', '0.16', -3)
    >>> scaled(0.09996, 0.0, -4)
    ('1.000', '', -1)
    """
    counts = [int(_quantised(x, last).scaleb(-last)) for x in (value, error)]
    power = last + len(str(max(map(abs, counts)))) - 1
    first, second = (f"{Decimal(n).scaleb(last - power):.{power - last}f}" for n in counts)
    return first, second if error else "", power


def decimals(value: float, last: int) -> str:
    """Write a value up to a place.

    Examples
    --------
    >>> decimals(-2.96923, -3)
    '-2.969'
    """
    return f"{_quantised(value, last):.{max(0, -last)}f}"


def _quantised(value: float, last: int) -> Decimal:
    rounded = Decimal(repr(value)).quantize(Decimal(1).scaleb(last))
    return rounded + 0  # no negative zero


def log_error(value: float, error: float) -> float:
    """Return the error in dex of a figure above 0.

    That of the lognormal whose median and standard deviation are the value and its error; for a small
    error, error / (value ln 10).

    Examples
    --------
    >>> from math import exp
    >>> s = 0.15 * log(10)
    >>> round(log_error(1.0, exp(s**2 / 2) * sqrt(exp(s**2) - 1)), 12)
    0.15
    """
    relative = error / value
    # x (x - 1) = relative^2 with x = exp(s^2)
    return sqrt(log1p(2 * relative**2 / (1 + sqrt(1 + 4 * relative**2)))) / log(10)


def age(years: float) -> str:
    """Write an age in the unit that suits it, in all of its digits up to six.

    Examples
    --------
    >>> age(13.8e9), age(3e7)
    ('13.8 Gyr', '30 Myr')
    """
    for unit, power in (("Gyr", 9), ("Myr", 6)):
        if years and floor(log10(years)) >= power:
            return f"{years / 10**power:.6g} {unit}"
    return f"{years:.6g} yr"
