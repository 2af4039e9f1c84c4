"""A hand-off file: the layout of a single result, with more metallicities and how to interpolate in them."""

from __future__ import annotations

from pathlib import Path

from ..files import stored, write_as
from ..popfile import population_to_toml
from .grid import Handoff


def write_handoff(made: Handoff, path: str | Path, form: str = "hdf5") -> None:
    """Write a grid to a file, whole or not at all.

    Parameters
    ----------
    made : Handoff
    path : str or Path
        A file there is replaced.
    form : str
        "hdf5", "netcdf", "fits", "votable", "ecsv" or "csv".

    Raises
    ------
    InputError
        A form that isn't known, or a file that can't be written.

    Examples
    --------
    >>> import tempfile
    >>> from steelyard.integrate import Population, StellarSource
    >>> from steelyard.integrate.files import read_stored
    >>> from steelyard.integrate.handoff import handoff
    >>> stars = Population(0.01, [StellarSource("core-collapse", ["kobayashi-2006"])], species=["O"])
    >>> made = handoff(stars, [0.004, 0.02], ["10 Myr", "1 Gyr"], chosen=False)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_handoff(made, f"{folder}/yields.fits", "fits")
    ...     read_stored(f"{folder}/yields.fits").arrays["total"].shape
    (2, 2, 1, 1)
    """
    told: dict[str, str | float] = {
        "population": population_to_toml(made.population),
        "interpolation": made.interpolation,
        "error_checked": made.checked,
    }
    if made.error is not None:
        told["error_asked"] = made.error
    write_as(stored(made.results, told=told), path, form)
