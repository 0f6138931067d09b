"""The plain words for a pixel whose estimate cannot be trusted."""

from __future__ import annotations

import enum


class PixelFlag(enum.IntFlag):
    """Why an estimate deserves doubt; bits add up, 0 means good."""

    GOOD = 0
    BAD_PIXEL = 1
    FEW_COUNTS = 2
    OUTSIDE_DOMAIN = 4
    RATE_TOO_HIGH = 8
    MISFIT = 16
    NOT_CONVERGED = 32
    COUNT_FAULT = 64


MEANING: dict[PixelFlag, str] = {
    PixelFlag.BAD_PIXEL: "the calibration or the dark exposures found the pixel unfit",
    PixelFlag.FEW_COUNTS: "too few photons for a finite or near-normal estimate",
    PixelFlag.OUTSIDE_DOMAIN: "the estimate lies outside the calibrated wedge steps",
    PixelFlag.RATE_TOO_HIGH: "the count rate lies above what was calibrated",
    PixelFlag.MISFIT: "the counts do not fit any mixture of the basis materials",
    PixelFlag.NOT_CONVERGED: "the maximum of the likelihood was not reached",
    PixelFlag.COUNT_FAULT: "counts that cannot be: at the counter's stop, or rising "
    "from one threshold to the next",
}
