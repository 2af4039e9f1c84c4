"""Tables in HDF5 files: compound datasets, columns side by side in a group, or blocks on named axes."""

from __future__ import annotations

import io
from itertools import product
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import InputError
from .common import Options, renamed, unreadable
from .numbers import cells_of
from .sheet import Sheet
from .source import LARGEST, Source

if TYPE_CHECKING:
    import h5py

#: groups inside groups, and objects in all; real files have a handful
DEEPEST, MOST = 16, 10_000


def read(source: Source, options: Options) -> list[Sheet]:
    """Read the tables of an HDF5 file.

    Parameters
    ----------
    source : Source
    options : Options
        `table` is the path of a dataset or group in the file; `columns` renames.

    Returns
    -------
    list of Sheet
        One for each dataset of compound type, and one for each group that holds datasets of one
        axis. Datasets of two or three axes are laid out along the group's own one-axis datasets
        (their dimension scales, or the one of that length): an axis of text becomes columns named
        ``dataset_text``, the others become rows. Cells are the shortest text that gives back the
        number.

    Raises
    ------
    InputError
        Damaged, or with links to other files, objects or references, which are refused.
    """
    import h5py

    try:
        with h5py.File(io.BytesIO(source.data), "r") as file:
            groups = _groups(file, source.name)
            sheets = [sheet for name, group in groups for sheet in _sheets(name, group, source, options)]
    except InputError:
        raise
    except Exception as error:  # the library raises OSError, RuntimeError, KeyError, ValueError on damage
        raise unreadable(error, source.name, "hdf5") from None
    if options.table:
        wanted = options.table.strip("/")
        names = [s.heading for s in sheets]
        sheets = [s for s in sheets if s.heading == wanted]
        if not sheets:
            raise InputError(
                f"no table {options.table!r}", where=source.name, mend=f"it has {', '.join(names[:12])}"
            )
    if not sheets:
        raise InputError("no table in any group", where=source.name, mend="check the file")
    return sheets


def _groups(file: h5py.File, where: str) -> list[tuple[str, dict[str, Any]]]:
    """Every group with its datasets, walked over hard links only."""
    import h5py

    found: list[tuple[str, dict[str, Any]]] = []
    waiting = [("", file, 0)]
    seen, count = set(), 0
    while waiting:
        path, group, depth = waiting.pop(0)
        if group.id.__hash__() in seen or depth > DEEPEST:
            continue
        seen.add(group.id.__hash__())
        datasets = {}
        for name in group:
            count += 1
            if count > MOST:
                raise InputError(f"holds more than {MOST} objects", where=where, mend="cut out the table")
            inside = f"{path}/{name}".strip("/")
            one = linked(group, name, where)
            if isinstance(one, h5py.Group):
                waiting.append((inside, one, depth + 1))
            elif isinstance(one, h5py.Dataset):
                datasets[name] = checked(group, name, where)
        found.append((path, datasets))
    return found


def linked(group: h5py.Group, name: str, where: str) -> Any:
    """Return a member of a group that lies in the same file.

    Raises
    ------
    InputError
        There is none, or it is a link to somewhere else.
    """
    import h5py

    link = group.get(name, getlink=True)
    if link is None:
        raise InputError(f"{name} is missing", where=where, mend="fetch the file again")
    if not isinstance(link, h5py.HardLink):
        raise InputError(f"{name} links elsewhere", where=where, mend="copy its data into the file")
    return group[name]


def checked(group: h5py.Group, name: str, where: str) -> h5py.Dataset:
    """Return a dataset that holds nothing but figures and text of reasonable size, in this very file.

    Raises
    ------
    InputError
    """
    import h5py

    dataset, where = linked(group, name, where), f"{where} {group.name}/{name}".replace("//", "/")
    if not isinstance(dataset, h5py.Dataset):
        raise InputError("is no dataset", where=where, mend="fetch the file again")
    if dataset.is_virtual or dataset.external:
        raise InputError("its data lie in another file", where=where, mend="copy them into the file")
    fields = dataset.dtype.fields or {"": (dataset.dtype,)}
    for kind, *_ in fields.values():
        if kind.kind == "O" and h5py.check_string_dtype(kind) is None:
            raise InputError("holds references or objects", where=where, mend="leave it out")
    if dataset.size is not None and dataset.size * dataset.dtype.itemsize > LARGEST:
        raise InputError(f"holds more than {LARGEST // 2**20} MB", where=where, mend="cut out the table")
    return dataset


def _sheets(path: str, datasets: dict[str, Any], source: Source, options: Options) -> list[Sheet]:
    sheets = []
    plain = {}
    for name, one in datasets.items():
        if one.dtype.fields and one.ndim == 1:
            data = one[()]
            columns = {c: cells_of(data[c], f"{source.name} {path}/{name} {c}") for c in data.dtype.names}
            sheets.append(_sheet(f"{path}/{name}".strip("/"), columns, {}, source, options))
        elif one.dtype.kind in "fiubSUO" and 1 <= one.ndim <= 3 and one.size:
            plain[name] = one
    single = {n: d for n, d in plain.items() if d.ndim == 1}
    several = {n: d for n, d in plain.items() if d.ndim > 1}
    if several and single:
        sheets.append(_along_axes(path, single, several, source, options))
    elif single:
        lengths = {d.shape[0] for d in single.values()}
        if len(lengths) == 1:
            columns = {n: cells_of(d[()], f"{source.name} {path}/{n}") for n, d in single.items()}
            sheets.append(_sheet(path, columns, single, source, options))
    return sheets


def _sheet(
    path: str, columns: dict[str, list[str]], datasets: dict[str, Any], source: Source, options: Options
) -> Sheet:
    where = f"{source.name} {path}".strip()
    names = renamed(tuple(columns), options.columns, where)
    units = {
        new: _attribute(datasets[old], ("units", "unit"))
        for new, old in zip(names, columns, strict=True)
        if old in datasets and _attribute(datasets[old], ("units", "unit"))
    }
    return Sheet(
        names, tuple(zip(*columns.values(), strict=True)), where, source.name, units=units, heading=path
    )


def _attribute(dataset: h5py.Dataset, names: tuple[str, ...]) -> str:
    for name in names:
        value = dataset.attrs.get(name)
        if isinstance(value, bytes):
            value = value.decode("utf-8", "replace")
        if isinstance(value, str):
            return value
    return ""


def _along_axes(
    path: str, single: dict[str, Any], several: dict[str, Any], source: Source, options: Options
) -> Sheet:
    where = f"{source.name} {path}".strip()
    axes = {name: _axes(name, one, single, where) for name, one in several.items()}
    kinds = {name: cells_of(d[()], f"{where} {name}") for name, d in single.items()}
    words = {n for n, d in single.items() if d.dtype.kind in "SUO"}
    along = {name: tuple(a for a in own if a not in words) for name, own in axes.items()}
    rows_along = max(along.values(), key=len)
    if any(set(own) - set(rows_along) for own in along.values()):
        raise InputError(
            "its blocks stand on different axes", where=where, mend="name one group with 'table'"
        )
    index = list(product(*(range(len(kinds[a])) for a in rows_along)))
    columns = {a: [kinds[a][i[k]] for i in index] for k, a in enumerate(rows_along)}
    for name, one in several.items():
        data = one[()]
        texts = [a for a in axes[name] if a in words]
        for labels in product(*(range(len(kinds[a])) for a in texts)):
            at = dict(zip(texts, labels, strict=True))
            label = "_".join([name, *(kinds[a][i] for a, i in at.items())])
            picked = np.array(
                [data[tuple(at[a] if a in at else i[rows_along.index(a)] for a in axes[name])] for i in index]
            )
            columns[label] = cells_of(picked, f"{where} {name}")
    lengths = {len(kinds[a]) for a in rows_along}
    if len(rows_along) == 1:
        # columns that run beside the one axis of the rows, such as the metallicity of every model
        for name in single:
            if name not in words and name not in columns and len(kinds[name]) in lengths:
                columns[name] = kinds[name]
    return _sheet(path, columns, {**single, **several}, source, options)


def _axes(name: str, dataset: h5py.Dataset, single: dict[str, Any], where: str) -> tuple[str, ...]:
    """The one-axis dataset that each axis of a block runs along."""
    found: list[str] = []
    for axis, length in enumerate(dataset.shape):
        scales = [s.name.rsplit("/", 1)[-1] for s in dataset.dims[axis].values()]
        fitting = [n for n, d in single.items() if d.shape[0] == length and n not in found]
        named = [s for s in scales if s in fitting]
        # several of one length stand side by side along the rows; text goes with the last axis
        wordy = [n for n in fitting if single[n].dtype.kind in "SUO"]
        numeric = [n for n in fitting if n not in wordy]
        choice = named or (numeric if axis < dataset.ndim - 1 and numeric else wordy or numeric)
        if not choice or (len(choice) > 1 and dataset.ndim > 2 and not named):
            what = "no dataset names" if not choice else "several datasets could name"
            raise InputError(f"{what} axis {axis + 1} of {name}", where=where, mend="attach dimension scales")
        found.append(choice[0])
    return tuple(found)
