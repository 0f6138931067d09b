"""A rehearsal on a virtual detector: two scripts, their scans, and a folder for both."""

from __future__ import annotations

import argparse
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from spectral.calibration.calibration_file import write_calibration
from spectral.calibration.calibrator import WedgeCalibrator
from spectral.scans.maps_file import write_maps
from spectral.scans.scan_writing import write_scan
from spectral.scans.script import open_scan
from spectral.virtual.script_scan import simulate_script

if TYPE_CHECKING:
    from collections.abc import Sequence

    from spectral.calibration.result import Calibration
    from spectral.scans.maps import Maps
    from spectral.virtual.script_scan import SimulatedScript

QUICK_ROUNDS, QUICK_SAMPLES = 6, 256


@dataclass(frozen=True, slots=True, kw_only=True)
class Rehearsal:
    """Where a rehearsal leaves its files, and how thorough it is.

    Attributes
    ----------
    folder : Path
        Made if it does not exist.
    pixels : (rows, columns), optional
        Simulate so many instead of those of the scripts, objects drawn smaller.
    quick : bool
        A rougher calibration, which does not try steps that were left out.
    """

    folder: Path
    pixels: tuple[int, int] | None = None
    quick: bool = False

    @classmethod
    def from_words(
        cls, text: str | None, *, folder: str, words: Sequence[str] | None = None
    ) -> Rehearsal:
        """What was typed after the name of an example.

        Parameters
        ----------
        text : str
            What `--help` says of the example.
        folder : str
            Where the files go unless `--out` says otherwise.
        words : sequence of str, optional
            Those of the command line by default.
        """
        parser = argparse.ArgumentParser(description=text)
        parser.add_argument(
            "--out", type=Path, default=Path(folder),
            help=f"folder of what it leaves ({folder})",
        )  # fmt: skip
        parser.add_argument(
            "--pixels", type=int, nargs=2, metavar=("ROWS", "COLUMNS"),
            help="simulate so many pixels instead, the object drawn smaller",
        )  # fmt: skip
        parser.add_argument("--quick", action="store_true", help="calibrate roughly")
        typed = parser.parse_args(words)
        pixels = (typed.pixels[0], typed.pixels[1]) if typed.pixels else None
        return cls(folder=typed.out, pixels=pixels, quick=typed.quick)

    def scan(self, script: Path) -> SimulatedScript:
        """Count the scan of a script, and read it back as a detector's file is read.

        Returns
        -------
        SimulatedScript
            Its `scan` is that of the file, named as the script is; its `truth` is what
            a laboratory would not know.
        """
        self.folder.mkdir(parents=True, exist_ok=True)
        made = simulate_script(script, pixels=self.pixels)
        file = self.folder / f"{script.stem}.h5"
        write_scan(made.scan, file)
        return replace(made, scan=open_scan(file))

    def calibrator(self) -> WedgeCalibrator:
        """A calibrator with its usual options, or a quick one."""
        if not self.quick:
            return WedgeCalibrator()
        return WedgeCalibrator(
            rounds=QUICK_ROUNDS, samples=QUICK_SAMPLES, leave_out=False
        )

    def keep(self, calibration: Calibration, maps: Maps) -> None:
        """Write calibration and maps, for `wedgewright report` to show."""
        write_calibration(calibration, self.folder / "calibration.h5")
        write_maps(maps, self.folder / "maps.h5")
