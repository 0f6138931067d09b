"""Plain words for landmarks and pixels whose energies deserve doubt."""

from __future__ import annotations

import enum


class ThresholdFlag(enum.IntFlag):
    """Why a landmark's place or a pixel's energy scale deserves doubt; 0 is good."""

    GOOD = 0
    MASKED = 1
    NO_STEP = 2
    OUT_OF_RANGE = 4
    NOT_CONVERGED = 8
    POOR_FIT = 16
    ODD_WIDTH = 32
    LANDMARK_LOST = 64
    TOO_FEW_LANDMARKS = 128
    NOT_STRAIGHT = 256
    ODD_SCALE = 512


MEANING: dict[ThresholdFlag, str] = {
    ThresholdFlag.MASKED: "the scan's pixel mask excludes the pixel, or it never counts",
    ThresholdFlag.NO_STEP: "the landmark does not stand out from the counts' noise",
    ThresholdFlag.OUT_OF_RANGE: "the landmark lies outside the settings scanned",
    ThresholdFlag.NOT_CONVERGED: "the maximum of the likelihood was not reached",
    ThresholdFlag.POOR_FIT: "the counts scatter about the fitted curve far beyond "
    "what chance and the other pixels allow",
    ThresholdFlag.ODD_WIDTH: "the step is far wider or narrower than in other pixels",
    ThresholdFlag.LANDMARK_LOST: "at least one landmark was not usable in this pixel",
    ThresholdFlag.TOO_FEW_LANDMARKS: "fewer than two landmarks are left, so that there "
    "is no energy scale",
    ThresholdFlag.NOT_STRAIGHT: "the landmarks do not lie on one straight line",
    ThresholdFlag.ODD_SCALE: "offset or gain lies far outside those of other pixels",
}
