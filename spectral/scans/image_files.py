"""Pages of image files: TIFF stacks and datasets of HDF5 files."""

from __future__ import annotations

import logging
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import tifffile

from spectral.errors import FileFormatError
from spectral.scans.nexus import opened

# what it notices of a damaged file becomes one sentence of our own
logging.getLogger("tifffile").addHandler(logging.NullHandler())

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class ImageFile:
    """A TIFF file, or one dataset of an HDF5 file (then `dataset` is its name)."""

    path: Path
    dataset: str = ""

    def __str__(self) -> str:
        """File, and dataset where there is one."""
        return f"{self.path}:{self.dataset}" if self.dataset else str(self.path)


@dataclass(frozen=True, slots=True)
class ImageLayout:
    """What an image file holds: pages of one shape and type."""

    pages: int
    rows: int
    columns: int
    dtype: np.dtype[Any]


def image_layout(image: ImageFile) -> ImageLayout:
    """Number of pages, their shape and type, without reading them.

    Raises
    ------
    FileFormatError
        If the file is absent, damaged, or holds anything but grey images.
    """
    if not image.path.is_file():
        msg = f"there is no image {image.path}"
        raise FileFormatError(msg)
    shape, dtype = _hdf5_layout(image) if image.dataset else _tiff_layout(image)
    if len(shape) < 2 or 0 in shape:
        msg = f"{image} has shape {shape}; an image needs rows and columns"
        raise FileFormatError(msg)
    if dtype.kind not in "iuf":
        msg = f"{image} holds {dtype}; counts need whole numbers"
        raise FileFormatError(msg)
    pages = int(np.prod(shape[:-2], dtype=np.int64))
    return ImageLayout(pages, int(shape[-2]), int(shape[-1]), dtype)


def _hdf5_layout(image: ImageFile) -> tuple[tuple[int, ...], np.dtype[Any]]:
    with opened(image.path) as file:
        if image.dataset not in file or not hasattr(file[image.dataset], "dtype"):
            msg = f"{image.path} holds no dataset {image.dataset!r}"
            raise FileFormatError(msg)
        return file[image.dataset].shape, file[image.dataset].dtype


def _tiff_layout(image: ImageFile) -> tuple[tuple[int, ...], np.dtype[Any]]:
    try:
        with tifffile.TiffFile(image.path) as file:
            if len(file.series) != 1:
                msg = f"{image.path} mixes images of different shape or type"
                raise FileFormatError(msg)
            series = file.series[0]
            if series.axes.endswith("S"):
                msg = f"{image.path} is a colour image; counts need one grey value"
                raise FileFormatError(msg)
            return series.shape, np.dtype(series.dtype)
    except FileFormatError:
        raise
    except Exception as error:
        msg = f"{image.path} cannot be read as TIFF ({error})"
        raise FileFormatError(msg) from error


def read_pages(image: ImageFile, pages: Sequence[int]) -> NDArray[Any]:
    """Pages of an image file as they are stored, shape (page, row, column).

    Raises
    ------
    FileFormatError
        If the file is absent, damaged, or has changed.
    """
    try:
        if image.dataset:
            with opened(image.path) as file:
                stored = file[image.dataset]
                if stored.ndim == 2:
                    return np.stack([stored[()] for _ in pages])
                lead = stored.shape[:-2]
                where = [np.unravel_index(page, lead) for page in pages]
                return np.stack([stored[index] for index in where])
        with tifffile.TiffFile(image.path) as file:
            if len(file.pages) > max(pages):
                return np.stack([file.pages[page].asarray() for page in pages])
            stack = file.series[0].asarray()
            return np.asarray(stack.reshape(-1, *stack.shape[-2:])[list(pages)])
    except FileFormatError:
        raise
    except Exception as error:
        msg = f"{image} cannot be read: the file is damaged or changed ({error})"
        raise FileFormatError(msg) from error
