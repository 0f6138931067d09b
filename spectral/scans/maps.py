"""Areal-density maps with their errors, as one result."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from spectral.errors import InputError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Maps:
    """Basis-material maps; n exposures, m materials, (y, x) pixels.

    Attributes
    ----------
    material : tuple of str, length m
    exposure : array of int32, shape (n,)
        Index of each exposure in its scan.
    areal_density : array of float32, shape (n, m, y, x), in g/cm2
    areal_density_errors : array of float32, shape (n, m, y, x), in g/cm2
        One standard deviation of this single estimate (counting statistics).
    covariance : array of float32, shape (n, m(m+1)/2, y, x), in g2/cm4
        Upper triangle, row by row.
    calibration_errors : array of float32, shape (n, m, y, x), in g/cm2
        One standard deviation of what the calibration adds; common to repeats.
    deviance : array of float32, shape (n, y, x)
        Poisson deviance per degree of freedom.
    flags : array of uint16, shape (n, y, x)
        Bits of `PixelFlag`.
    process : dict of str
        Options, digests, versions and summary: all that belongs in the record.
    """

    material: tuple[str, ...]
    exposure: NDArray[np.int32]
    areal_density: NDArray[np.float32]
    areal_density_errors: NDArray[np.float32]
    covariance: NDArray[np.float32]
    calibration_errors: NDArray[np.float32]
    deviance: NDArray[np.float32]
    flags: NDArray[np.uint16]
    process: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        """Check that the shapes agree."""
        n, m, y, x = self.areal_density.shape
        wanted = {
            "exposure": (self.exposure.shape, (n,)),
            "areal_density_errors": (self.areal_density_errors.shape, (n, m, y, x)),
            "covariance": (self.covariance.shape, (n, m * (m + 1) // 2, y, x)),
            "calibration_errors": (self.calibration_errors.shape, (n, m, y, x)),
            "deviance": (self.deviance.shape, (n, y, x)),
            "flags": (self.flags.shape, (n, y, x)),
            "material": ((len(self.material),), (m,)),
        }
        for name, (came, want) in wanted.items():
            if came != want:
                msg = f"{name} has shape {came}, areal_density needs {want}"
                raise InputError(msg)
