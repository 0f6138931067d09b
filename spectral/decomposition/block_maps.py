"""Maps of a block of exposures while they are being filled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from spectral.scans.flags import PixelFlag
from spectral.scans.maps import Maps

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from spectral.decomposition.solver import Solution

FIELDS = (
    "areal_density",
    "areal_density_errors",
    "covariance",
    "calibration_errors",
    "deviance",
    "flags",
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BlockMaps:
    """Arrays of `Maps` with the pixels on one axis; bad until a pixel is put in.

    Attributes
    ----------
    areal_density, areal_density_errors, calibration_errors : arrays of float32,
        shape (exposure, material, pixel)
    covariance : array of float32, shape (exposure, m(m+1)/2, pixel)
    deviance : array of float32, shape (exposure, pixel)
    flags : array of uint16, shape (exposure, pixel)
    shape : (row, column)
    """

    areal_density: NDArray[np.float32]
    areal_density_errors: NDArray[np.float32]
    covariance: NDArray[np.float32]
    calibration_errors: NDArray[np.float32]
    deviance: NDArray[np.float32]
    flags: NDArray[np.uint16]
    shape: tuple[int, ...]

    @classmethod
    def empty(cls, exposures: int, materials: int, shape: tuple[int, ...]) -> BlockMaps:
        """A block in which every pixel is bad."""
        pixels = int(np.prod(shape))

        def unknown(*inner: int) -> NDArray[np.float32]:
            return np.full((exposures, *inner, pixels), np.nan, np.float32)

        return cls(
            areal_density=unknown(materials),
            areal_density_errors=unknown(materials),
            covariance=unknown(materials * (materials + 1) // 2),
            calibration_errors=unknown(materials),
            deviance=unknown(),
            flags=np.full((exposures, pixels), int(PixelFlag.BAD_PIXEL), np.uint16),
            shape=shape,
        )

    def put(
        self,
        place: int,
        flat: NDArray[np.int64],
        found: Solution,
        spread: NDArray[np.float64],
        flags: NDArray[np.uint16],
    ) -> None:
        """Put pixels by flat index into one exposure's maps."""
        full = unpacked(found.covariance)
        with np.errstate(invalid="ignore"):
            errors = np.sqrt(np.diagonal(full, axis1=1, axis2=2))
        self.areal_density[place][:, flat] = found.areal_density.T
        self.areal_density_errors[place][:, flat] = errors.T
        self.covariance[place][:, flat] = found.covariance.T
        self.calibration_errors[place][:, flat] = np.where(
            np.isfinite(found.areal_density), spread, np.nan
        ).T
        self.deviance[place][flat] = found.deviance
        self.flags[place][flat] = flags

    def maps(self, material: tuple[str, ...], exposure: NDArray[np.int32]) -> Maps:
        """The block as maps."""
        arrays = {
            name: (v := getattr(self, name)).reshape(*v.shape[:-1], *self.shape)
            for name in FIELDS
        }
        return Maps(material=material, exposure=exposure, **arrays)


def joined(parts: Sequence[Maps], process: dict[str, str]) -> Maps:
    """Blocks one after another, with the record of the run."""
    arrays = {
        name: np.concatenate([getattr(p, name) for p in parts]) for name in FIELDS
    }
    return Maps(
        material=parts[0].material,
        exposure=np.concatenate([p.exposure for p in parts]),
        process=process,
        **arrays,
    )


def unpacked(packed: NDArray[np.float64]) -> NDArray[np.float64]:
    """Symmetric matrices (pixel, m, m) from upper triangles (pixel, m(m+1)/2)."""
    size = int((np.sqrt(8 * packed.shape[1] + 1) - 1) / 2)
    full = np.empty((packed.shape[0], size, size))
    i, j = np.triu_indices(size)
    full[:, i, j] = packed
    full[:, j, i] = packed
    return full
