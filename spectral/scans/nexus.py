"""Groups and fields of a NeXus file, found by class and read with their units.

Class and field names are those of the NeXus base classes, an open standard of the
NeXus International Advisory Committee (https://manual.nexusformat.org).
"""

from __future__ import annotations

import os
import tempfile
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np

from spectral.errors import FileFormatError
from spectral.scans.units import in_unit

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray


@contextmanager
def opened(path: Path) -> Iterator[h5py.File]:
    """Open an HDF5 file for reading; whatever is wrong with it is one sentence.

    Raises
    ------
    FileFormatError
        If the file is absent, truncated, or not HDF5.
    """
    if not path.is_file():
        msg = f"{path}: there is no such file"
        raise FileFormatError(msg)
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        if "truncated" in str(error):
            msg = f"{path}: the file is truncated; copy it again from where it was made"
        elif not h5py.is_hdf5(path):
            msg = f"{path}: this is not an HDF5 file"
        else:
            msg = f"{path}: the file cannot be opened as HDF5 ({error})"
        raise FileFormatError(msg) from error
    with file:
        yield file


@contextmanager
def written_whole(path: Path, *, folder: Path | None = None) -> Iterator[h5py.File]:
    """Open a new HDF5 file that appears under its name only when it is complete.

    Parameters
    ----------
    path : Path
    folder : Path, optional
        Where the file grows, on the same disk; beside its name by default.
    """
    handle, name = tempfile.mkstemp(
        prefix=f".{path.name}.",
        suffix=".part",
        dir=path.parent if folder is None else folder,
    )
    os.close(handle)
    part = Path(name)
    try:
        with h5py.File(part, "w") as file:
            yield file
        mask = os.umask(0)
        os.umask(mask)
        part.chmod(0o666 & ~mask)
        on_disk(part)
        part.replace(path)
        on_disk(path.parent)
    finally:
        part.unlink(missing_ok=True)


def on_disk(path: Path) -> None:
    """Wait until a file, or a folder's names, would survive the machine's end."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def plain(value: object) -> str:
    """Text as h5py hands it out, bytes or str, as str.

    What is not UTF-8 is read as Latin-1, in which some writers store "µm".
    """
    raw = value
    if not isinstance(raw, bytes):
        raw = str(value).encode("utf-8", "surrogateescape")
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


@dataclass(frozen=True, slots=True)
class Node:
    """A group of a NeXus file, with the name of the file for messages."""

    file: str
    group: h5py.Group

    def name(self, field: str) -> str:
        """File and full path of a field."""
        return f"{self.file}: {self.group.name.rstrip('/')}/{field}"

    def children(self, nx_class: str) -> list[Node]:
        """Every group of a class right below this one, in the file's order."""
        found = []
        for key in self.group:
            item = self.group.get(key)
            if not isinstance(item, h5py.Group):
                continue
            if plain(item.attrs.get("NX_class", "")) == nx_class:
                found.append(Node(self.file, item))
        return found

    def child(self, nx_class: str) -> Node:
        """The one group of a class right below this one."""
        found = self.children(nx_class)
        if len(found) != 1:
            many = "no group" if not found else f"{len(found)} groups"
            msg = (
                f"{self.file}: {self.group.name} holds {many} with NX_class "
                f"{nx_class!r}; exactly one is needed"
            )
            raise FileFormatError(msg)
        return found[0]

    def has(self, field: str) -> bool:
        """Whether a dataset of that name is there."""
        return isinstance(self.group.get(field), h5py.Dataset)

    def dataset(self, field: str) -> h5py.Dataset:
        """A dataset that must be there."""
        found = self.group.get(field)
        if not isinstance(found, h5py.Dataset):
            msg = f"{self.name(field)} is missing; the file needs it"
            raise FileFormatError(msg)
        return found

    def values(self, field: str) -> NDArray[Any]:
        """Content of a dataset that must be there, as an array."""
        dataset = self.dataset(field)
        try:
            return np.asarray(dataset[()])
        except OSError as error:
            msg = f"{self.name(field)} cannot be read: the file is damaged ({error})"
            raise FileFormatError(msg) from error

    def quantity(self, field: str, unit: str) -> NDArray[np.float64]:
        """Numbers of a dataset, converted to a unit by its `units` attribute."""
        raw = self.values(field)
        if raw.dtype.kind not in "iuf":
            msg = f"{self.name(field)} must hold numbers"
            raise FileFormatError(msg)
        said = self.dataset(field).attrs.get("units")
        spelling = None if said is None else plain(said)
        value = raw.astype(np.float64)
        return in_unit(value, spelling, unit=unit, field=self.name(field))

    def one_quantity(self, field: str, unit: str) -> float:
        """One positive number, converted; a list must repeat the same number."""
        value = np.atleast_1d(self.quantity(field, unit)).ravel()
        if value.size == 0 or not np.all(np.isfinite(value)) or value.min() <= 0:
            msg = f"{self.name(field)} must be a positive number of {unit}"
            raise FileFormatError(msg)
        if np.any(value != value[0]):
            msg = f"{self.name(field)} changes within the scan; one value is needed"
            raise FileFormatError(msg)
        return float(value[0])

    def texts(self, field: str) -> tuple[str, ...]:
        """Texts of a dataset that must be there."""
        raw = np.atleast_1d(self.values(field)).ravel()
        if raw.dtype.kind not in "OSU":
            msg = f"{self.name(field)} must hold text"
            raise FileFormatError(msg)
        return tuple(plain(item).strip() for item in raw)

    def text(self, field: str, *, default: str | None = None) -> str:
        """One text; the default stands for a missing one if there is a default."""
        if default is not None and not self.has(field):
            return default
        found = self.texts(field)
        return found[0] if found else ""


def new_group(parent: h5py.Group, name: str, nx_class: str) -> h5py.Group:
    """Return a new group of a NeXus class."""
    group = parent.create_group(name)
    group.attrs["NX_class"] = nx_class
    return group


def put(group: h5py.Group, name: str, value: object, *, units: str = "") -> None:
    """Write a small field, with its unit where it has one."""
    if isinstance(value, str):
        data: object = value
    elif isinstance(value, (tuple, list)) and all(isinstance(v, str) for v in value):
        data = np.array(value, dtype=h5py.string_dtype())
    else:
        data = np.asarray(value)
    dataset = group.create_dataset(name, data=data)
    if units:
        dataset.attrs["units"] = units
