"""Table of a landmark's curve for a source and a sensor, by size of charge cloud."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from spectral.calibration.threshold_scan.landmark_curve import CurveTable, curve_table
from spectral.calibration.threshold_scan.source_photons import (
    bare_density,
    pulse_density,
)

if TYPE_CHECKING:
    from spectral.calibration.threshold_scan.landmarks import Landmark
    from spectral.calibration.threshold_scan.source_photons import PulseDensity
    from spectral.physics.sensor import ChargeTransport, Sensor
    from spectral.scans.threshold_scan import LineSource

CLOUD_STEP = 0.5
BARE_TAIL = 0.3
"""Shared pulses per pulse of full energy where no sensor is described."""


def landmark_table(
    landmark: Landmark,
    source: LineSource,
    sensor: Sensor | None,
    charge: ChargeTransport,
    *,
    cloud: float = 0.0,
) -> CurveTable:
    """Table of a landmark's curve.

    Parameters
    ----------
    landmark : Landmark
    source : LineSource
    sensor : Sensor or None
        None where the scan says too little: lines then have an even tail.
    charge : ChargeTransport
    cloud : float
        ln of a factor on the clouds' variance.
    """

    def density(more: float) -> PulseDensity:
        if sensor is None:
            return bare_density(source, BARE_TAIL * float(np.exp(cloud + more)))
        factor = float(np.exp(cloud + more))
        wider = replace(
            charge,
            diffusion_um=charge.diffusion_um * factor,
            initial_um=charge.initial_um * factor**0.5,
            range_share=charge.range_share * factor**0.5,
        )
        return pulse_density(source, sensor, wider)

    return curve_table(
        landmark,
        density(0.0),
        density(-CLOUD_STEP),
        density(CLOUD_STEP),
        cloud_step=CLOUD_STEP,
        cloud=cloud,
    )
