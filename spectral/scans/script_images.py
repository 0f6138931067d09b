"""The images a scan script points to: which page holds what, and its counts."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np

from spectral.errors import FileFormatError, ScanError
from spectral.scans.image_files import ImageFile, image_layout, read_pages
from spectral.scans.stored_counts import (
    NOT_A_COUNT,
    as_counts,
    counter_stop,
    mostly_fractions,
    sampled_exposures,
    storage_limit,
    upper_end,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence
    from pathlib import Path

    from numpy.typing import NDArray

    from spectral.scans.script_exposures import ScriptExposure


class ImageList(Protocol):
    """What of a scan script says where its images are."""

    @property
    def path(self) -> Path:
        """The script itself."""

    @property
    def exposures(self) -> tuple[ScriptExposure, ...]:
        """In order."""

    @property
    def thresholds_kev(self) -> NDArray[np.float64]:
        """Rising."""

    @property
    def pixels(self) -> tuple[int, int] | None:
        """Rows and columns, None if only the images tell."""


@dataclass(frozen=True, slots=True, order=True)
class Plane:
    """One frame above one threshold of one exposure: a page of some file."""

    exposure: int
    threshold: int
    frame: int


@dataclass(frozen=True, slots=True, eq=False)
class CountsInImages:
    """Counts of many image files, read when asked for.

    Attributes
    ----------
    shape : (exposure, threshold, row, column)
    pages : mapping of Plane to (image file, page)
    frames : tuple of int, one an exposure
        Frames that are added up.
    frame_limit : int
        Value at which a frame's counting stops.
    """

    shape: tuple[int, int, int, int]
    pages: Mapping[Plane, tuple[ImageFile, int]]
    frames: tuple[int, ...]
    frame_limit: int

    @property
    def count_limit(self) -> int:
        """Value that marks a count at its limit, in the sums of frames too."""
        return self.frame_limit if max(self.frames) == 1 else NOT_A_COUNT - 1

    def read(self, exposures: Sequence[int] | NDArray[np.int64]) -> NDArray[np.uint32]:
        """Counts of the named exposures, frames added up.

        A sum that holds a frame at its limit, or no count at all, stays marked as
        such: it takes the value `count_limit`, or the largest of all.
        """
        _, k, y, x = self.shape
        out = np.empty((len(exposures), k, y, x), np.uint32)
        for i, exposure in enumerate(exposures):
            for threshold in range(k):
                out[i, threshold] = self._sum(int(exposure), threshold)
        return out

    def _sum(self, exposure: int, threshold: int) -> NDArray[np.uint32]:
        by_file: dict[ImageFile, list[int]] = defaultdict(list)
        for frame in range(self.frames[exposure]):
            image, page = self.pages[Plane(exposure, threshold, frame)]
            by_file[image].append(page)
        parts = [as_counts(read_pages(image, p)) for image, p in by_file.items()]
        stack = np.concatenate(parts)
        if stack.shape[1:] != self.shape[2:]:
            image = next(iter(by_file))
            msg = f"{image} has changed its shape to {stack.shape[1:]}"
            raise FileFormatError(msg)
        total: NDArray[np.uint32] = stack[0]
        if len(stack) > 1:
            sums = np.minimum(stack.sum(0, dtype=np.uint64), NOT_A_COUNT - 1)
            sums[(stack >= self.frame_limit).any(0)] = NOT_A_COUNT - 1
            sums[(stack == NOT_A_COUNT).any(0)] = NOT_A_COUNT
            total = sums.astype(np.uint32)
        return total


def images_of(script: ImageList) -> CountsInImages:
    """Find every image of a script and say which page holds what.

    Raises
    ------
    ScanError
        If an image is missing, has another shape, or the pages of a file are not as
        many as the script needs; file and line come first.
    """
    users = _planes_by_file(script)
    layouts = {}
    shape = script.pixels
    pages: dict[Plane, tuple[ImageFile, int]] = {}
    dtypes = set()
    for image, planes in users.items():
        exposure = script.exposures[planes[0].exposure]
        try:
            layout = layouts[image] = image_layout(image)
        except FileFormatError as error:
            raise exposure.error(script.path, str(error)) from error
        if shape is None:
            shape = (layout.rows, layout.columns)
        if (layout.rows, layout.columns) != shape:
            msg = (
                f"{image} has {layout.rows} rows and {layout.columns} columns, "
                f"{shape[0]} and {shape[1]} are needed"
            )
            raise exposure.error(script.path, msg)
        if layout.pages != len(planes):
            raise _wrong_pages(script, image, layout.pages, planes)
        dtypes.add(layout.dtype)
        pages |= {plane: (image, i) for i, plane in enumerate(planes)}
    if shape is None:  # no exposures: read_script has refused that before
        msg = f"{script.path}: the script lists no exposure"
        raise ScanError(msg)
    storage = min(storage_limit(dtype) for dtype in dtypes)
    return CountsInImages(
        shape=(len(script.exposures), len(script.thresholds_kev), *shape),
        pages=pages,
        frames=tuple(e.frames for e in script.exposures),
        frame_limit=_frame_limit(script, pages, storage),
    )


def _planes_by_file(script: ImageList) -> dict[ImageFile, list[Plane]]:
    """Planes that each image file holds, in the order of its pages."""
    users: dict[ImageFile, list[Plane]] = defaultdict(list)
    for i, exposure in enumerate(script.exposures):
        if not exposure.files:
            msg = (
                f"{exposure.label} names no image files; fill in `files` for it or "
                "under [defaults]"
            )
            raise exposure.error(script.path, msg)
        for k, energy in enumerate(script.thresholds_kev.tolist()):
            for frame in range(exposure.frames):
                image = _image(script.path.parent, exposure, k, energy, frame)
                users[image].append(Plane(i, k, frame))
    for planes in users.values():
        order = script.exposures[planes[0].exposure].pages
        planes.sort(key=lambda p: tuple(getattr(p, name) for name in order))
    return dict(users)


def _image(
    folder: Path, exposure: ScriptExposure, k: int, energy: float, frame: int
) -> ImageFile:
    named = {
        "exposure": exposure.number,
        "threshold": k + 1,
        "threshold_kev": energy,
        "frame": frame + 1,
        "step": exposure.step,
        "repeat": exposure.repeat,
    }
    return ImageFile(
        folder / exposure.files.format(**named), exposure.dataset.format(**named)
    )


def _wrong_pages(
    script: ImageList, image: ImageFile, held: int, planes: list[Plane]
) -> ScanError:
    """Say why the pages of a file are not those the script needs."""
    first = script.exposures[planes[0].exposure]
    other = next((p for p in planes if p.exposure != planes[0].exposure), None)
    if other is not None and held * 2 <= len(planes):
        again = script.exposures[other.exposure]
        msg = (
            f"{again.label} takes the image {image}, which is that of "
            f"{first.label} on line {first.line}"
        )
        return again.error(script.path, msg)
    msg = f"{image} holds {held} images, the script needs {len(planes)} from it"
    return first.error(script.path, msg)


def _frame_limit(
    script: ImageList, pages: Mapping[Plane, tuple[ImageFile, int]], storage: int
) -> int:
    """Where a frame's counting stops, from a few exposures spread over the scan."""
    highest = []
    for i in sampled_exposures(len(script.exposures)).tolist():
        for k in range(len(script.thresholds_kev)):
            image, page = pages[Plane(i, k, 0)]
            raw: NDArray[Any] = read_pages(image, [page])
            if mostly_fractions(raw):
                msg = (
                    f"{image} holds fractions, so it is an average or a corrected "
                    "image; give the counts as the detector gave them"
                )
                raise script.exposures[i].error(script.path, msg)
            highest.append(upper_end(as_counts(raw)))
    return counter_stop(np.concatenate(highest), storage=storage)
