"""The errors and the warning that the library raises: one sentence each.

A message says what was wanted, what came, in which file and field, and the mend.
The command line turns `InputError` into exit code 2 when the words typed are at
fault, and every other `SpectralError` into exit code 1.
"""


class SpectralError(Exception):
    """Base of everything the library raises on purpose."""


class InputError(SpectralError, ValueError):
    """A caller's argument cannot be: wrong shape, unit, range or name."""


class ScanError(SpectralError, ValueError):
    """A scan's file or content does not allow the work asked for."""


class FileFormatError(ScanError):
    """A file is not what its name or version says, or is truncated."""


class CalibrationError(SpectralError, RuntimeError):
    """The wedge data do not determine a calibration."""


class QualityWarning(UserWarning):
    """The work was done, but something deserves a look."""
