"""`steelyard library`: the sets that were admitted."""

from __future__ import annotations

import warnings

import typer

from steelyard.scripts import terminal
from steelyard.yields import store
from steelyard.yields.errors import InputError


def command(
    remove: str = typer.Option("", "--remove", metavar="ID", help="Remove an admitted set."),
    export: tuple[str, str] = typer.Option(
        None,
        "--export",
        metavar="ID PATH",
        help="Write a set to PATH: a folder of CSV files, or a file where it ends in .ecsv, .h5 or .hdf5.",
    ),
    layout: str = typer.Option("", "--layout", metavar="ID", help="Print the layout a set was read with."),
    json: bool = typer.Option(False, "--json", help="Print JSON: a list with one object for each set."),
) -> None:
    """List the sets in your library, or remove or export one.

    `steelyard admit` puts them there; they are used by their ids like the shipped ones. The library
    is a folder, one HDF5 file a set; the variable STEELYARD_LIBRARY puts it elsewhere.

    \b
    Examples:
      steelyard library
      steelyard library --export author-2026 author-2026.ecsv
      steelyard library --remove author-2026
    """
    if sum(map(bool, (remove, export, layout))) > 1:
        raise InputError("--remove, --export and --layout exclude each other", mend="choose one")
    if remove:
        store.remove(remove)
        print(f"removed {remove}")
    elif export:
        from steelyard.yields.exchange import export as write

        print(f"wrote {write(store.reading(export[0]), export[1])}")
    elif layout:
        print(store.entry(layout).layout, end="")
    else:
        _list(json)


def _list(json: bool) -> None:
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", store.LibraryWarning)
        entries = store.entries()
    for one in caught:
        terminal.complain(str(one.message))
    if json:
        terminal.print_json(
            [
                {
                    "id": e.id,
                    "kind": e.kind,
                    "created": e.created,
                    "version": e.version,
                    "checksum": e.checksum,
                    "sources": [{"file": name, "sha256": digest} for name, digest in e.sources],
                    "path": str(e.path),
                }
                for e in entries
            ]
        )
        return
    if not entries:
        print(f"nothing admitted yet in {store.folder()}")
        return
    made = terminal.table("set", "kind", "admitted", "from", left=4)
    for e in entries:
        made.add_row(e.id, e.kind, e.created, ", ".join(name for name, _ in e.sources))
    terminal.console().print(made)
