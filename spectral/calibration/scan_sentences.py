"""Sentences of errors that say which scan they are about."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING

from numpy.linalg import LinAlgError

from spectral.errors import CalibrationError, ScanError

if TYPE_CHECKING:
    from collections.abc import Iterator

    from spectral.scans.scan import Scan


@contextmanager
def told_of(scan: Scan) -> Iterator[None]:
    """Begin the sentence of an error with the scan's file.

    Raises
    ------
    ScanError, CalibrationError
        As raised inside, with the file in front where it was not named; a
        CalibrationError too where matrices inside have no solution.
    """
    try:
        yield
    except (ScanError, CalibrationError) as error:
        if str(error).startswith(scan.source):
            raise
        msg = f"{scan.source}: {error}"
        raise type(error)(msg) from error
    except LinAlgError as error:
        msg = (
            f"{scan.source}: the open and wedge exposures do not determine the "
            f"calibration ({error}); check materials, thicknesses and currents, or add "
            "steps"
        )
        raise CalibrationError(msg) from error
